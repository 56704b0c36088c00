"""Many captures of one build, each explained for itself, as a stream: for lots of any size."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, TypeVar

from benchfit.capture.model import Capture
from benchfit.errors import BenchfitError, CaptureError, fault
from benchfit.explain.result import Explanation
from benchfit.sheet.model import Sheet

if TYPE_CHECKING:
    from concurrent.futures import Executor

T = TypeVar("T")
Source = Capture | str | os.PathLike[str] | Sequence[str | os.PathLike[str]]


@dataclass(frozen=True, eq=False)
class Explained:
    """What came of one capture: its explanation, or the error that stands in its place.

    Attributes
    ----------
    path : str
        The capture's name.
    explanation : Explanation or None
    error : BenchfitError or None
        Why there is no explanation.
    """

    path: str
    explanation: Explanation | None = None
    error: BenchfitError | None = None

    def record(self) -> dict[str, Any]:
        """The result record, or that of the failure (schema 1)."""
        from benchfit.show.record import failure, record

        if self.explanation is not None:
            return record(self.explanation)
        return failure(self.path, self.error or CaptureError("no result"))

    def __str__(self) -> str:
        from benchfit.show.text import render

        if self.explanation is not None:
            return render(self.explanation)
        return "" if self.error is None else self.error.says


@dataclass(frozen=True)
class _Job:
    """A capture, or the files to read one from."""

    source: Capture | tuple[str, ...]
    sheet: Sheet | None
    layout: Mapping[str, Any] = field(default_factory=dict)

    @property
    def path(self) -> str:
        return self.source.path if isinstance(self.source, Capture) else self.source[0]


def _source(source: Source) -> Capture | tuple[str, ...]:
    if isinstance(source, Capture):
        return source
    if isinstance(source, str | os.PathLike):
        return (os.fspath(source),)
    return tuple(os.fspath(path) for path in source)


def explain_lot(
    captures: Iterable[Source],
    sheet: Sheet | None = None,
    *,
    executor: Executor | None = None,
    jobs: int | None = None,
    **layout: Any,
) -> Iterator[Explained]:
    """Explain captures one by one, in the order given; memory does not grow with their number.

    Parameters
    ----------
    captures : iterable
        Captures, paths, or sequences of the paths that make one capture. Paths are read by whoever does the
        work; an iterator is drawn from only as far ahead as the workers need.
    sheet : Sheet or None
        What every one of them was meant to be.
    executor : concurrent.futures.Executor, optional
        Who does the work: processes, threads, or the workers of a cluster. It is left open.
    jobs : int, optional
        In place of an executor, so many processes; without either the work is done here.
    **layout
        What the files do not tell of themselves, as for :func:`benchfit.read`.

    Yields
    ------
    Explained
        A capture that cannot be read or explained has its ``error``; the others are still done.
    """
    from benchfit import pipeline, workers

    jobs_of = (_Job(_source(source), sheet, layout) for source in captures)
    if executor is not None:
        return workers.through(_explained, jobs_of, executor, _lost)
    return workers.in_processes(_explained, jobs_of, jobs or 1, pipeline.warm_up, _lost)


def guarded(path: str, do: Callable[[], T], failed: Callable[[BenchfitError, str], T]) -> T:
    """What ``do`` makes, or what ``failed`` makes of the error and of where a fault of our own came from.

    Nothing but an interruption escapes.
    """
    try:
        return do()
    except BenchfitError as error:
        return failed(error, "")
    except MemoryError:
        return failed(CaptureError(f"{path}: too large for this machine's memory", path=path), "")
    except Exception as error:
        import traceback

        return failed(CaptureError(f"{path}: {fault(error)}", path=path), traceback.format_exc())


def _explained(job: _Job) -> Explained:
    def do() -> Explained:
        from benchfit import pipeline
        from benchfit.capture import read

        source = job.source
        if not isinstance(source, Capture):
            first, *also = source
            source = read(first, also=also, **job.layout)
        return Explained(job.path, pipeline.explain(source, job.sheet).explanation)

    return guarded(job.path, do, lambda error, _: Explained(job.path, error=error))


def _lost(job: _Job, error: BaseException) -> Explained:
    says = f"{job.path}: its worker died ({type(error).__name__}); try it alone, in this process"
    return Explained(job.path, error=CaptureError(says, path=job.path))
