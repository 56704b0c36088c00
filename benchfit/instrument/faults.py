"""What can go wrong with an instrument, each with a name (``kind``) and one sentence.

==================  ===========================================================================
no-library          the VISA library that was asked for is not there
no-driver           the interface needs a package that is not installed
resource-name       not a VISA resource string
unreachable         the address does not answer at all
refused             nobody listens at that address
timeout             no whole answer within the time-out (late, silent, slow, or a wrong line end)
disconnected        the connection was dropped
short-block         a block broke off
wrong-length        a block is not as long as its header or the preamble says
unreadable          an answer that is not what was asked for
instrument-error    the instrument's own error queue holds an error
identity            another instrument answers than before
axes                the channels do not share one time axis
gave-up             no capture for as long as --give-up allows
==================  ===========================================================================
"""

from __future__ import annotations

import re
from typing import TYPE_CHECKING, Final

from benchfit.errors import InstrumentError
from benchfit.instrument.block import excerpt

if TYPE_CHECKING:
    from benchfit.instrument.link import Link

KINDS: Final = (
    "no-library", "no-driver", "resource-name", "unreachable", "refused", "timeout", "disconnected",
    "short-block", "wrong-length", "unreadable", "instrument-error", "identity", "axes", "gave-up",
)  # fmt: skip

LINE_END_NAMES: Final = {"\n": "LF", "\r\n": "CR+LF", "\r": "CR", "": "none"}


def line_end_name(termination: str) -> str:
    """The trade's name of a line end: LF, CR+LF, CR, none."""
    return LINE_END_NAMES.get(termination, repr(termination))


def fault(kind: str, resource: str, command: str, says: str) -> InstrumentError:
    """An InstrumentError; ``says`` goes on after the resource's name and the command it answers."""
    after = f' after "{command}"' if command else ""
    return InstrumentError(f"{resource}{after}: {says}.", resource=resource, command=command, kind=kind)


def timed_out(link: Link, command: str, timeout: float, found: bytes) -> InstrumentError:
    """No whole answer within ``timeout`` (s); ``found``: what had come."""
    reads, writes = line_end_name(link.read_termination), line_end_name(link.write_termination)
    if found:
        seen = f"{len(found):,} bytes and no line end ({excerpt(found[-16:])} last)"
    else:
        seen = "no reply"
    ends = f"line ends are {writes} out and {reads} in"
    says = (
        f"{seen} within {timeout:.3g} s; {ends}; if the manual says otherwise, or the acquisition takes"
        " longer, set write_termination, read_termination or timeout in the dialect file"
    )
    return fault("timeout", link.resource, command, says)


def short_block(link: Link, command: str, found: int, count: int | None) -> InstrumentError:
    """A block of ``count`` bytes stopped after ``found``."""
    of = f"of {count:,} bytes " if count is not None else "of indefinite length "
    says = f"a block {of}stopped after {found:,} and brought no more for {link.timeout:g} s"
    return fault("short-block", link.resource, command, says)


def broken_off(link: Link, command: str, found: int, count: int) -> InstrumentError:
    """The connection dropped within a block."""
    says = f"the connection was dropped after {found:,} of a block's {count:,} bytes"
    return fault("disconnected", link.resource, command, says)


def disconnected(resource: str, command: str) -> InstrumentError:
    """The peer closed the connection."""
    return fault("disconnected", resource, command, "the instrument closed the connection")


def no_library(library: str, error: Exception) -> InstrumentError:
    """The VISA library cannot be loaded."""
    detail = _first_line(error)
    says = (
        f"no VISA library {library!r} ({detail}); install your instrument maker's VISA,"
        " or leave --visa-library out to use the pure-Python one"
    )
    return InstrumentError(says, resource=library, command="", kind="no-library")


def bad_name(resource: str) -> InstrumentError:
    """Not a VISA resource string."""
    says = (
        "not a VISA resource string; one looks like TCPIP::192.0.2.7::5025::SOCKET, TCPIP::192.0.2.7::INSTR,"
        " USB0::0x1234::0x5678::SERIAL::INSTR or ASRL3::INSTR"
    )
    return fault("resource-name", resource, "", says)


def cannot_open(resource: str, error: Exception) -> InstrumentError:
    """What a failed open means; backends raise VISA errors, ValueError, OSError, bare Exception for it."""
    text = _first_line(error)
    if isinstance(error, ValueError) and "install" in text.lower():
        package = re.search(r"install ([\w.-]+)", text, re.IGNORECASE)
        name = f" ({package[1]})" if package else ""
        says = f"this interface needs a driver that is not installed{name}: pip install 'benchfit[wires]'"
        return fault("no-driver", resource, "", says)
    if "RSRC_NAME" in text:
        return bad_name(resource)
    if isinstance(error, ConnectionRefusedError):
        return translate(error, resource, "")
    if isinstance(error, AttributeError | KeyError | NotImplementedError):
        text = "the VISA library cannot open this kind of interface"
    reason = text.removeprefix("could not connect: ")
    says = f"cannot be opened ({reason}); check the address, the cable and the power"
    return fault("unreachable", resource, "", says)


def translate(error: Exception, resource: str, command: str) -> InstrumentError:
    """Whatever pyvisa or its backend raised, as one of our kinds."""
    if isinstance(error, InstrumentError):
        return error
    if isinstance(error, ConnectionRefusedError):
        says = (
            "the connection was refused: nobody listens there; check that the instrument is on, that the"
            " port is right and that remote control is enabled"
        )
        return fault("refused", resource, command, says)
    text = _first_line(error)
    if isinstance(error, OSError) or "CONN_LOST" in text or "InvalidSession" in type(error).__name__:
        return fault("disconnected", resource, command, f"the connection was dropped ({text})")
    if "ERROR_TMO" in text:
        return fault("timeout", resource, command, "no reply within the time-out")
    return fault("disconnected", resource, command, f"the link failed ({type(error).__name__}: {text})")


def _first_line(error: Exception) -> str:
    return str(error).strip().split("\n")[0].rstrip(".: ") or type(error).__name__
