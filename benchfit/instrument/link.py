"""Questions and answers: lines of text and counted blocks, whole or a named error, within the time-out."""

from __future__ import annotations

import logging
import time
from collections.abc import Mapping
from typing import Final, NoReturn

from benchfit.errors import InstrumentError
from benchfit.instrument import faults
from benchfit.instrument.block import BlockError, Header, excerpt, missing_header_bytes, parse_header
from benchfit.instrument.wire import Wire

TEXT_LIMIT: Final = 1 << 16
LIST_LIMIT: Final = 1 << 28
# pyvisa-py looks at its own clock only while nothing arrives: an answer that trickles in would hold a long
# read for ever. Small reads, each with a short time-out, leave the clock to us; they grow while data flow.
PART: Final = 4096
LARGEST_PART: Final = 1 << 15
FIRST_PART: Final = 128
HEADER_LIMIT: Final = 32
SLICE: Final = 0.004
QUIET: Final = 0.15

traffic = logging.getLogger("benchfit.instrument.traffic")


class Link:
    """An open connection: commands out, answers in.

    Parameters
    ----------
    resource : str
        VISA resource string.
    library : str
        VISA library: "@py", "@ivi", a path.
    timeout : float
        Longest wait for an answer (s), > 0. A block must bring its next 4,096 bytes within it.
    write_termination, read_termination : str
        Line ends; "" for read_termination: an answer ends when nothing follows.
    serial : mapping
        Settings of a serial line: baud_rate, data_bits, parity, stop_bits.

    Raises
    ------
    InstrumentError
        It cannot be opened; see ``Wire``.
    """

    def __init__(
        self,
        resource: str,
        *,
        library: str = "@py",
        timeout: float = 5.0,
        write_termination: str = "\n",
        read_termination: str = "\n",
        serial: Mapping[str, object] | None = None,
    ) -> None:
        if not 0 < timeout < float("inf"):
            says = f"a time-out must be above 0 s and finite, got {timeout} s"
            raise faults.fault("timeout", resource, "", says)
        self.resource = resource
        self.timeout = timeout
        self.write_termination = write_termination
        self.read_termination = read_termination
        self._wire = Wire(resource, library, timeout, read_termination[-1:], serial or {})
        self.is_socket = self._wire.is_socket
        self._held = b""

    def close(self) -> None:
        """Close the connection; harmless when it is closed already or the peer is gone."""
        self._wire.close()

    def __enter__(self) -> Link:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()

    def write(self, command: str) -> None:
        """Send one command; on a socket it goes out together with the next question. Raises InstrumentError.

        Two small segments in a row would cost a delayed acknowledgement (40 ms and more) each time, and
        pyvisa-py cannot switch the socket's waiting off.
        """
        traffic.debug("%s <- %s", self.resource, command)
        self._held += (command + self.write_termination).encode("ascii")
        if not self.is_socket:
            self._send_held(command)

    def _send_held(self, command: str) -> None:
        held, self._held = self._held, b""
        if held:
            self._wire.write(held, command)

    def query(self, command: str, *, timeout: float | None = None, limit: int = TEXT_LIMIT) -> str:
        """The text that answers ``command``, without its line end.

        Raises InstrumentError: no whole answer within ``timeout`` (s; default: the link's), a dropped
        connection, or bytes that are no text.
        """
        self.write(command)
        self._send_held(command)
        raw = self._line(command, timeout or self.timeout, limit)
        try:
            text = raw.decode("ascii").strip("\r\n \t\0")
        except UnicodeDecodeError:
            self._refuse("unreadable", command, f"answered {excerpt(raw)} where text was expected")
        traffic.debug("%s -> %s", self.resource, text[:80])
        return text

    def query_data(self, command: str, *, expected_bytes: int | None = None, text: bool = False) -> bytes:
        """The bytes of the block that answers ``command``; with ``text`` a bare line of numbers will do.

        ``expected_bytes``, where the preamble announced it, is checked before the data are awaited.

        Raises InstrumentError: kinds "timeout", "short-block", "wrong-length", "unreadable", "disconnected".
        """
        self.write(command)
        self._send_held(command)
        try:
            if self._wire.is_stream:
                data = self._from_stream(command, expected_bytes, text)
            else:
                message = self._line(command, self.timeout, LIST_LIMIT, stop=False)
                data = self._from_message(message, expected_bytes, text, command)
        except BlockError as error:
            self._refuse(error.kind, command, error.says)
        traffic.debug("%s -> %d bytes of data", self.resource, len(data))
        return data

    def ask_raw(self, command: str, wait: float) -> bytes:
        """Whatever answers ``command`` until nothing more comes, at most 64 KiB; for trying line ends.

        ``wait`` (s) is how long the first byte may take. Raises InstrumentError: the connection is gone.
        """
        self.write(command)
        self._send_held(command)
        found = bytearray()
        begun = heard = time.monotonic()
        while len(found) < TEXT_LIMIT and time.monotonic() - heard < (QUIET if found else wait):
            data, _ = self._wire.some(PART, self._slice(wait), stop=False, command=command)
            if data:
                found += data
                heard = time.monotonic()
            if heard - begun > self.timeout + wait:
                break
        return bytes(found)

    # -- lines ----------------------------------------------------------------------------------------------

    def _line(self, command: str, timeout: float, limit: int, *, stop: bool = True) -> bytes:
        """Bytes up to the line end (``stop``) or to the message's end."""
        deadline = time.monotonic() + timeout
        found = bytearray()
        heard = 0.0
        stop = stop and self._wire.is_stream and bool(self.read_termination)
        while True:
            now = time.monotonic()
            if now >= deadline:
                raise faults.timed_out(self, command, timeout, bytes(found))
            size, wait = PART if found else FIRST_PART, self._slice(deadline - now)
            data, ended = self._wire.some(size, wait, stop=stop, command=command)
            if ended:
                return bytes(found + data)
            if data:
                found += data
                heard = time.monotonic()
            elif found and not stop and self.is_socket and time.monotonic() - heard > QUIET:
                return bytes(found)
            if len(found) > limit:
                self._refuse("unreadable", command, f"answered more than {limit:,} bytes without a line end")

    def _slice(self, left: float) -> float:
        """How long one read may wait (s): a little on a socket, else all the time that is left."""
        return min(left, SLICE) if self.is_socket else left

    # -- blocks ---------------------------------------------------------------------------------------------

    def _from_stream(self, command: str, expected: int | None, text: bool) -> bytes:
        end = len(self.read_termination)
        # Where the length is known beforehand, one read can bring the whole message, and never more.
        least = 1 if text else 2
        guess = least if expected is None else 2 + len(str(expected)) + expected + end
        found = self._fill(bytearray(), least, command, ask=guess)
        while found[:1].isspace():
            del found[:1]
            self._fill(found, least, command)
        if text and found != b"#":
            return bytes(found) + self._line(command, self.timeout, LIST_LIMIT)
        while missing := missing_header_bytes(bytes(found[:HEADER_LIMIT])):
            self._fill(found, len(found) + missing, command)
        header = parse_header(bytes(found[:HEADER_LIMIT]))
        count = self._count(header, expected, command)
        if count is None:
            return self._until_quiet(command)
        # The line end comes off the wire with the data, or it would answer the next question.
        self._fill(found, header.size + count + end, command, block=(header.size, count))
        self._expect_line_end(bytes(found[header.size + count :]), command, count)
        return bytes(memoryview(found)[header.size : header.size + count])

    def _count(self, header: Header, expected: int | None, command: str) -> int | None:
        """How many bytes follow: from the header, else from the preamble; None where neither says."""
        if header.count is None:
            return expected
        if expected is not None and header.count != expected:
            says = f"announced a block of {header.count:,} bytes where the preamble makes it {expected:,}"
            self._refuse("wrong-length", command, says)
        return header.count

    def _fill(
        self, found: bytearray, need: int, command: str, *, ask: int = 0, block: tuple[int, int] | None = None
    ) -> bytearray:
        """Add to ``found`` until it has ``need`` bytes, whatever their values: one may look like a line end.

        It may grow to ``ask`` bytes where they are there already. ``block``: size of its header and count.
        """
        part, due = PART, len(found) + PART
        deadline = time.monotonic() + self.timeout
        while len(found) < need:
            left = deadline - time.monotonic()
            if left <= 0:
                if block is not None:
                    raise faults.short_block(self, command, len(found) - block[0], block[1])
                raise faults.timed_out(self, command, self.timeout, bytes(found))
            size = min(part, max(need, ask) - len(found))
            try:
                data, _ = self._wire.some(size, self._slice(left), stop=False, command=command)
            except InstrumentError as error:
                if block is not None and error.facts.get("kind") == "disconnected":
                    raise faults.broken_off(self, command, len(found) - block[0], block[1]) from error
                raise
            found += data
            part = min(2 * part, LARGEST_PART) if len(data) == size else PART
            if len(found) >= due:
                due, deadline = len(found) + PART, time.monotonic() + self.timeout
        return found

    def _expect_line_end(self, rest: bytes, command: str, count: int) -> None:
        """``rest`` came after the block's data: as long as a line end, which it or what follows must be."""
        if rest == self.read_termination.encode():
            return
        if rest.strip(b"\r\n ") == b"" and not rest.endswith(self.read_termination[-1:].encode()):
            rest += self._line(command, self.timeout, TEXT_LIMIT)
        if rest.strip(b"\r\n "):
            says = f"sent {excerpt(rest)} after a block of {count:,} bytes where its line end was expected"
            self._refuse("wrong-length", command, says)

    def _until_quiet(self, command: str) -> bytes:
        """An indefinite block on a stream: it has no other end than a line end that nothing follows."""
        found = bytearray()
        end = self.read_termination.encode()
        due, heard = PART, time.monotonic()
        deadline = heard + self.timeout
        while time.monotonic() < deadline:
            data, _ = self._wire.some(PART, SLICE, stop=False, command=command)
            if data:
                found += data
                heard = time.monotonic()
                if len(found) >= due:
                    due, deadline = len(found) + PART, heard + self.timeout
            elif found.endswith(end) and found and time.monotonic() - heard > QUIET:
                return bytes(found.removesuffix(end))
            if len(found) > LIST_LIMIT:
                self._refuse("unreadable", command, f"sent more than {LIST_LIMIT:,} bytes without an end")
        raise faults.short_block(self, command, len(found), None)

    def _from_message(self, message: bytes, expected: int | None, text: bool, command: str) -> bytes:
        """The block in a whole message, as a bus with an END line gives it."""
        body = message.lstrip(b" ")
        if text and body[:1] != b"#":
            return body
        if missing_header_bytes(body):
            raise BlockError("short-block", f"a block's header broke off after {excerpt(body)}")
        header = parse_header(body)
        data = body[header.size :]
        count = self._count(header, expected, command)
        if count is None:
            return data.removesuffix(b"\n").removesuffix(b"\r")
        if len(data) < count:
            raise BlockError("short-block", f"announced {count:,} bytes and sent {len(data):,}")
        if data[count:].strip(b"\r\n "):
            raise BlockError("wrong-length", f"announced {count:,} bytes and sent {len(data):,}")
        return data[:count]

    def _refuse(self, kind: str, command: str, says: str) -> NoReturn:
        raise faults.fault(kind, self.resource, command, says)
