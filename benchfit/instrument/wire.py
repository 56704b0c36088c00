"""The wire to one instrument: the only file that knows pyvisa.

Every way in which the wire can fail (a VISA error, ValueError for a missing driver, OSError for a missing
library, a bare BrokenPipeError) ends here as one InstrumentError with a ``kind``; ``faults`` lists them.
"""

from __future__ import annotations

import contextlib
import re
import select
import socket
from collections.abc import Mapping
from functools import cache
from typing import TYPE_CHECKING, Any

from benchfit.instrument import faults

if TYPE_CHECKING:
    from pyvisa.resources import MessageBasedResource


@cache
def _manager(library: str) -> Any:
    """The one manager of a VISA library; closing it would close everyone's sessions, so nobody does."""
    import pyvisa

    name = f"@{library}" if re.fullmatch(r"[A-Za-z]+", library) else library
    try:
        return pyvisa.ResourceManager(name)
    except (pyvisa.errors.Error, OSError, ValueError) as error:
        raise faults.no_library(library, error) from error


class Wire:
    """An open resource: bytes out, bytes in.

    Parameters
    ----------
    resource : str
        VISA resource string.
    library : str
        VISA library: "@py", "@ivi", a path.
    timeout : float
        Longest wait for the connection (s), > 0.
    line_end : str
        The character at which a read may stop on a stream; "" for none.
    serial : mapping
        Settings of a serial line: baud_rate, data_bits, parity, stop_bits.

    Raises
    ------
    InstrumentError
        The library, the driver, the name or the peer is missing. A SOCKET opens even where nobody
        listens: only an answer proves a connection.
    """

    is_socket: bool
    is_serial: bool

    def __init__(
        self, resource: str, library: str, timeout: float, line_end: str, serial: Mapping[str, object]
    ) -> None:
        import pyvisa
        from pyvisa.constants import ResourceAttribute, StatusCode

        self.resource = resource
        self._attribute, self._status = ResourceAttribute, StatusCode
        self._visa_error = pyvisa.errors.VisaIOError
        self._closing = contextlib.ExitStack()
        self._timeout_now = -1.0
        self._stops_now: bool | None = None
        manager = _manager(library)
        _check_address(resource)
        try:
            # An unset open time-out means "give up at once" to some backends and "for ever" to others.
            visa = manager.open_resource(resource, open_timeout=max(1, int(1000 * min(timeout, 10.0))))
        except Exception as error:
            raise faults.cannot_open(resource, error) from error
        self._visa: MessageBasedResource = visa
        self._closing.callback(self._close_quietly, visa)
        try:
            self._set_up(visa, line_end, serial)
        except Exception as error:
            self.close()
            raise faults.translate(error, resource, "") from error

    def _set_up(self, visa: MessageBasedResource, line_end: str, serial: Mapping[str, object]) -> None:
        from pyvisa.constants import InterfaceType

        if not hasattr(visa, "read_bytes"):
            raise faults.fault("resource-name", self.resource, "", "this interface takes no messages")
        self.is_socket = visa.interface_type == InterfaceType.tcpip and visa.resource_class == "SOCKET"
        self.is_serial = visa.interface_type == InterfaceType.asrl
        self._closing.enter_context(
            visa.ignore_warning(self._status.success_max_count_read, self._status.success_device_not_present)
        )
        if self.is_socket:
            # "No more bytes for now" then ends a read with what came, instead of losing it to a time-out.
            visa.set_visa_attribute(self._attribute.suppress_end_enabled, False)
        for name, value in serial.items() if self.is_serial else ():
            setattr(visa, name, _serial_value(name, value))
        if line_end and self.is_stream:
            visa.set_visa_attribute(self._attribute.termchar, ord(line_end))
        if not self.is_socket:
            # A device clear throws away an answer that nobody fetched; a new socket has none, and
            # pyvisa-py's clear of a closed one never returns.
            visa.clear()

    @property
    def is_stream(self) -> bool:
        """True where a message has no end but its line end; every bus but these has an END of its own."""
        return self.is_socket or self.is_serial

    @staticmethod
    def _close_quietly(visa: MessageBasedResource) -> None:
        with contextlib.suppress(Exception):
            library, session = visa.visalib, visa.session
            visa.close()
            # The library keeps what it knew of each session for ever; a peer that drops the connection
            # every minute would fill the memory.
            for books in ("sessions", "_ignore_warning_in_session", "_last_status_in_session"):
                getattr(library, books, {}).pop(session, None)

    def close(self) -> None:
        """Close the resource; harmless when it is closed already or the peer is gone."""
        with contextlib.suppress(Exception):
            self._closing.close()

    def write(self, message: bytes, command: str) -> None:
        """Send a message; ``command`` is named in an error. Raises InstrumentError."""
        try:
            self._visa.write_raw(message)
        except Exception as error:
            raise faults.translate(error, self.resource, command) from error

    def some(self, count: int, wait: float, *, stop: bool, command: str) -> tuple[bytes, bool]:
        """At most ``count`` bytes that arrive within ``wait`` (s), and whether the message ended with them.

        With ``stop`` a stream's message ends at its line end. b"" where nothing came in time; on a socket
        nothing that came is ever lost.

        Raises InstrumentError: the connection is gone.
        """
        visa = self._visa
        try:
            self._prepare(wait, stop)
            data, status = visa.visalib.read(visa.session, count)
        except self._visa_error as error:
            if error.error_code != self._status.error_timeout:
                raise faults.translate(error, self.resource, command) from error
            if self._has_peer_closed():
                raise faults.disconnected(self.resource, command) from error
            return b"", False
        except Exception as error:
            raise faults.translate(error, self.resource, command) from error
        if status == self._status.success_termination_character_read:
            # So pyvisa-py calls a HiSLIP message's END too.
            return data, stop or not self.is_stream
        # On a socket "success" only means that nothing more was there; elsewhere it is the bus's END.
        return data, status == self._status.success and not self.is_stream

    def _prepare(self, wait: float, stop: bool) -> None:
        if wait != self._timeout_now:
            self._visa.timeout = max(1, round(1000 * wait))
            self._timeout_now = wait
        if self.is_stream and stop is not self._stops_now:
            self._visa.set_visa_attribute(self._attribute.termchar_enabled, stop)
            self._stops_now = stop

    def _has_peer_closed(self) -> bool:
        """True where the backend's socket is readable at its end: pyvisa-py itself reports only time-outs.

        The socket is the backend's private matter; without it a closed peer shows as a time-out.
        """
        session = getattr(self._visa.visalib, "sessions", {}).get(self._visa.session)
        inner = getattr(session, "interface", None)
        if not isinstance(inner, socket.socket):
            return False
        try:
            return bool(select.select([inner], [], [], 0)[0]) and inner.recv(1, socket.MSG_PEEK) == b""
        except (OSError, ValueError):
            return True


def _check_address(resource: str) -> None:
    """Refuse a port or host that cannot be right: pyvisa-py fails on them with its socket left open."""
    address = re.fullmatch(r"TCPIP\d*::(.+)::([^:]*)::SOCKET", resource.strip(), re.IGNORECASE)
    if address is None:
        return
    host, port = address[1], address[2]
    if not port.isdecimal() or not 0 < int(port) < 65536:
        raise faults.bad_name(resource)
    try:
        socket.getaddrinfo(host, int(port), socket.AF_INET, socket.SOCK_STREAM)
    except (OSError, UnicodeError) as error:
        raise faults.cannot_open(resource, error) from error


def _serial_value(name: str, value: object) -> object:
    from pyvisa.constants import Parity, StopBits

    if name == "parity":
        return Parity[str(value)]
    if name == "stop_bits":
        return {1: StopBits.one, 1.5: StopBits.one_and_a_half, 2: StopBits.two}[float(str(value))]
    return value


def list_resources(library: str = "@py") -> tuple[tuple[str, ...], tuple[str, ...]]:
    """The resources that ``library`` finds, and one sentence for each reason why others may be missing.

    Raises InstrumentError where the library itself is missing.
    """
    import warnings

    manager = _manager(library)
    with warnings.catch_warnings(record=True):
        warnings.simplefilter("always")
        try:
            found = tuple(str(name) for name in manager.list_resources("?*"))
        except Exception as error:
            raise faults.translate(error, library, "") from error
    return found, tuple(_gaps(manager))


def _gaps(manager: Any) -> list[str]:
    """What the library says it cannot look for."""
    try:
        interfaces = manager.visalib.get_debug_info().items()
    except Exception:
        return []
    gaps: list[str] = []
    for interface, state in interfaces:
        text = " ".join(state if isinstance(state, list) else str(state).split())
        text = re.split(r"Note that|No module", text)[0].removeprefix("Available").strip()
        is_missing = text.startswith("Please install") and interface in (
            "USB INSTR",
            "ASRL INSTR",
            "GPIB INSTR",
        )
        if is_missing or "disabled" in text:
            gaps.append(f"{interface}: {text}")
    return gaps
