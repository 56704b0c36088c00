"""The few errors a user can meet, each with its exit status, and the remarks that accompany a result.

An error is one sentence: what was found, where, and what to do. Each class keeps its facts as
attributes, so that a caller need not take the sentence apart.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar


class BenchfitError(Exception):
    """Base of every error that the program reports in one sentence.

    ``status`` is the exit status of the command line (contract: 2 the command line or the sheet,
    3 a capture, 4 the instrument, 5 the log).
    """

    status: ClassVar[int] = 2

    def __init__(self, says: str, **facts: object) -> None:
        super().__init__(says)
        self.says = says
        self.facts = facts

    def __reduce__(self) -> tuple[object, ...]:
        return (_rebuild, (type(self), self.says, self.facts))


def _rebuild(kind: type[BenchfitError], says: str, facts: dict[str, object]) -> BenchfitError:
    return kind(says, **facts)


class UsageError(BenchfitError):
    """The command line asks for something that cannot be done."""

    status = 2


class SheetError(BenchfitError):
    """The build sheet cannot be used. Facts: ``path``, ``key``."""

    status = 2


class QuantityError(BenchfitError, ValueError):
    """A text is not a value with a unit and a tolerance. Facts: ``text``, ``expected``."""

    status = 2


class CaptureError(BenchfitError):
    """A capture cannot be read. Facts: ``path``, ``row``, ``column``."""

    status = 3


class InstrumentError(BenchfitError):
    """The instrument cannot be reached or answers wrongly. Facts: ``resource``, ``command``, ``kind``."""

    status = 4


class LogError(BenchfitError):
    """The burn-in log cannot be written or read. Facts: ``path``."""

    status = 5


def fault(error: BaseException) -> str:
    """The sentence for an error that should not have happened."""
    what = f"{type(error).__name__}: {error}".strip(": ").replace("\n", " ")
    return f"a fault in benchfit itself ({what}); please report it with the input that shows it (-v: where)"


@dataclass(frozen=True)
class Remark:
    """A warning that accompanies a result: a fixed ``code`` (contract, section 5) and a sentence."""

    code: str
    says: str
