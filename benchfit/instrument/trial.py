"""A first try of an instrument, step by step: open, identify, read one capture; line ends where silent."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Final

from benchfit.capture.model import Capture
from benchfit.errors import InstrumentError
from benchfit.instrument.block import excerpt
from benchfit.instrument.dialect import SCPI_1999, Dialect
from benchfit.instrument.faults import line_end_name
from benchfit.instrument.link import Link
from benchfit.instrument.session import Session

# CR before CR+LF: an instrument that listens for CR answers to both.
USUAL_LINE_ENDS: Final = ("\n", "\r", "\r\n")


@dataclass(frozen=True, eq=False)
class Step:
    """One step of a trial: what was done, whether it worked, what it gave (the last one: the capture)."""

    doing: str
    worked: bool
    says: str
    error: InstrumentError | None = None
    capture: Capture | None = None


def trial(
    resource: str, channels: Sequence[str], *, dialect: Dialect = SCPI_1999, library: str = "@py"
) -> Iterator[Step]:
    """Try an instrument out; one Step after the other, ending with the first that fails.

    A time-out is followed by a try of the usual line ends, which says which of them answered.
    """
    session = Session(resource, channels, dialect=dialect, library=library)
    with session:
        try:
            name = session.connect()
        except InstrumentError as error:
            yield Step("connect and identify", False, error.says, error)
            if error.facts.get("kind") == "timeout":
                yield from _try_line_ends(resource, dialect, library)
            return
        ends = f"{line_end_name(dialect.write_termination)} out, {line_end_name(dialect.read_termination)} in"
        yield Step("connect", True, f"open; line ends {ends}; time-out {dialect.timeout:g} s")
        yield Step("identify", True, f'{dialect.identify or "(not asked)"} answered "{name}"')
        yield Step("settings", True, f"{', '.join(dialect.once) or 'none'}: accepted ({dialect.name})")
        try:
            capture = session.acquire().capture
        except InstrumentError as error:
            yield Step("read one capture", False, error.says, error)
            return
        assert capture is not None
        yield Step("read one capture", True, _described(capture), capture=capture)


def _described(capture: Capture) -> str:
    spans = ", ".join(
        f"{channel.name} from {channel.values.min():.4g} V to {channel.values.max():.4g} V"
        for channel in capture.channels
    )
    axis = f"{capture.samples:,} samples, {capture.interval:.6g} s apart, the first at {capture.start:.6g} s"
    return f"{axis}; {spans}"


def _try_line_ends(resource: str, dialect: Dialect, library: str) -> Iterator[Step]:
    question = dialect.identify or "*IDN?"
    for ending in USUAL_LINE_ENDS:
        doing = f"try {line_end_name(ending)} as line end"
        try:
            with Link(
                resource,
                library=library,
                timeout=dialect.timeout,
                write_termination=ending,
                read_termination="",
                serial=dialect.serial,
            ) as link:
                answer = link.ask_raw(question, min(dialect.timeout, 2.0))
        except InstrumentError as error:
            yield Step(doing, False, error.says, error)
            continue
        if not answer:
            yield Step(doing, False, f"{question} brought no answer")
            continue
        came = next((end for end in ("\r\n", "\n", "\r") if answer.endswith(end.encode())), "")
        advice = f"write_termination = {_toml(ending)}, read_termination = {_toml(came)}"
        yield Step(doing, True, f"{question} brought {excerpt(answer, 60)}: put {advice} into a dialect file")
        return


def _toml(text: str) -> str:
    return '"' + text.replace("\r", "\\r").replace("\n", "\\n") + '"'
