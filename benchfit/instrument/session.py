"""A session with one instrument: connects, acquires, survives faults, and yields Captures."""

from __future__ import annotations

import re
import threading
import time
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Final

from benchfit.capture.model import Capture
from benchfit.errors import InstrumentError
from benchfit.instrument import faults
from benchfit.instrument.block import excerpt
from benchfit.instrument.dialect import SCPI_1999, Dialect
from benchfit.instrument.link import Link
from benchfit.instrument.waveform import read_channel, to_capture

PAUSES: Final = (0.0, 0.5, 1.0, 2.0, 4.0, 8.0, 15.0, 30.0)
QUEUE_LIMIT: Final = 32
# SCPI-1999 volume 2, SYSTem:ERRor: a number, a comma, a text; some instruments say "0" alone for no error.
_QUEUE_ENTRY: Final = re.compile(r"([+-]?\d+)\s*,.*|[+-]?0+", re.DOTALL)


@dataclass(frozen=True, eq=False)
class Acquisition:
    """One attempt to acquire: a capture, or the error that came in its place.

    ``number`` counts from 1; ``acquired`` is when the instrument said that the acquisition was complete (or
    when it failed), in UTC.
    """

    number: int
    acquired: datetime
    capture: Capture | None = None
    error: InstrumentError | None = None

    @property
    def stamp(self) -> str:
        """``acquired`` as ISO 8601 text with milliseconds and Z."""
        return iso(self.acquired)


def iso(instant: datetime) -> str:
    """A UTC instant as ISO 8601 text with milliseconds and Z."""
    return instant.astimezone(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


class Session:
    """Owns one instrument. Use it from one thread: question and answer must stay together.

    Parameters
    ----------
    resource : str
        VISA resource string.
    channels : sequence of str
        The instrument's own channel names, at least one.
    dialect : Dialect
        How it is spoken to (default: SCPI-1999 with IEEE 488.2 blocks).
    library : str
        VISA library.
    pauses : sequence of float
        Pauses (s) before the first, second, … attempt to connect again; the last one repeats.

    After any fault the connection is dropped and made anew, so that an answer that comes too late can
    never be taken for the answer to a later question.
    """

    def __init__(
        self,
        resource: str,
        channels: Sequence[str],
        *,
        dialect: Dialect = SCPI_1999,
        library: str = "@py",
        pauses: Sequence[float] = PAUSES,
    ) -> None:
        self.resource = resource
        self.channels = tuple(channels)
        self.dialect = dialect
        self.library = library
        self.pauses = tuple(pauses)
        self.identity: str | None = None
        self.faults: Counter[str] = Counter()
        self.connections = 0
        self._link: Link | None = None
        self._failures = 0
        self._number = 0

    # -- connecting -----------------------------------------------------------------------------------------

    @property
    def is_connected(self) -> bool:
        """True between a successful connection and the next fault."""
        return self._link is not None

    @property
    def pause(self) -> float:
        """Seconds to wait before the next attempt is worth making; 0 while connected."""
        if self.is_connected or not self._failures:
            return 0.0
        return self.pauses[min(self._failures, len(self.pauses)) - 1]

    def connect(self) -> str:
        """Open the link, identify the instrument, send it its settings; returns its name.

        Raises InstrumentError: it cannot be reached, does not answer, or refuses a setting.
        """
        if self._link is not None:
            return self.identity or ""
        dialect = self.dialect
        link = Link(
            self.resource,
            library=self.library,
            timeout=dialect.timeout,
            write_termination=dialect.write_termination,
            read_termination=dialect.read_termination,
            serial=dialect.serial,
        )
        try:
            identity = self._identify(link)
            self._error_queue(link)
            for command in dialect.once:
                link.write(command)
            self._refuse_errors(link, "the settings in setup.once")
        except BaseException:
            link.close()
            raise
        self._link, self.identity = link, identity
        self.connections += 1
        return identity

    def close(self) -> None:
        """Close the connection; harmless when there is none."""
        if self._link is not None:
            self._link.close()
            self._link = None

    def __enter__(self) -> Session:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()

    # -- acquiring ------------------------------------------------------------------------------------------

    def acquire(self) -> Acquisition:
        """One acquisition of all channels, connecting first where need be.

        Raises InstrumentError; the connection is then dropped, the fault counted in ``faults``, and the
        next call connects anew (``pause`` says when that is worth while).
        """
        self._number += 1
        try:
            self.connect()
            assert self._link is not None
            capture, acquired = self._acquire(self._link)
        except InstrumentError as error:
            self._dropped(error)
            raise
        except BaseException:
            self.close()
            raise
        self._failures = 0
        return Acquisition(self._number, acquired, capture)

    def acquisitions(
        self,
        *,
        count: int | None = None,
        every: float | None = None,
        give_up: float | None = None,
        stop: threading.Event | None = None,
    ) -> Iterator[Acquisition]:
        """Acquire again and again; a failed one is yielded with its ``error``.

        Parameters
        ----------
        count : int or None
            How many, failed ones included; None: until ``stop`` is set.
        every : float or None
            Seconds from one start to the next; missed ones are left out. None: as fast as it goes.
        give_up : float or None
            End after so many seconds without a capture.
        stop : threading.Event or None
            Ends the iteration, and any pause, when set.

        Raises
        ------
        InstrumentError
            The first connection failed; or (kind "gave-up") no capture came for ``give_up`` seconds.
        """
        stop = stop or threading.Event()
        self.connect()
        started = last_success = time.monotonic()
        done = 0
        try:
            while not stop.is_set() and (count is None or done < count):
                try:
                    acquisition = self.acquire()
                    last_success = time.monotonic()
                except InstrumentError as error:
                    acquisition = Acquisition(self._number, datetime.now(UTC), error=error)
                done += 1
                yield acquisition
                if count is not None and done >= count:
                    return
                gave_up_at = last_success + give_up if give_up is not None else float("inf")
                self._wait(stop, started, every, gave_up_at)
                if acquisition.error is not None and time.monotonic() >= gave_up_at:
                    raise self._gave_up(give_up, acquisition.error)
        finally:
            self.close()

    # -- inside ---------------------------------------------------------------------------------------------

    def _wait(self, stop: threading.Event, started: float, every: float | None, until: float) -> None:
        now = time.monotonic()
        wait = self.pause
        if every:
            due = started + every * (int((now - started) / every) + 1)
            wait = max(wait, due - now)
        if not self.is_connected:
            wait = min(wait, max(0.0, until - now))
        if wait > 0:
            stop.wait(wait)

    def _gave_up(self, give_up: float | None, error: InstrumentError) -> InstrumentError:
        says = f"no capture for {give_up:g} s, so this ends; the last attempt: {error.says}"
        return InstrumentError(f"{self.resource}: {says}", resource=self.resource, command="", kind="gave-up")

    def _dropped(self, error: InstrumentError) -> None:
        self.faults[str(error.facts.get("kind"))] += 1
        self._failures += 1
        self.close()

    def _acquire(self, link: Link) -> tuple[Capture, datetime]:
        dialect = self.dialect
        for command in dialect.each:
            link.write(command)
        try:
            if dialect.wait:
                self._await_completion(link)
            acquired = datetime.now(UTC)
            traces = [read_channel(link, dialect, channel) for channel in self.channels]
            self._refuse_errors(link, "the acquisition")
        except InstrumentError as error:
            raise self._with_reported(link, error) from None
        notes = {"instrument": self.identity or "", "acquired": iso(acquired)}
        return to_capture(self.resource, traces, dialect, notes), acquired

    def _await_completion(self, link: Link) -> None:
        wait, timeout = self.dialect.wait, self.dialect.timeout
        deadline = time.monotonic() + timeout
        pause = 0.0
        while True:
            answer = link.query(wait, timeout=max(deadline - time.monotonic(), 1e-3))
            try:
                if float(answer) == 1.0:
                    return
            except ValueError:
                says = f"answered {excerpt(answer.encode())} where 1 was expected"
                raise faults.fault("unreadable", self.resource, wait, says) from None
            if time.monotonic() + pause >= deadline:
                says = f"still answered {answer} after {timeout:g} s; see whether it waits for a trigger"
                raise faults.fault("timeout", self.resource, wait, says)
            time.sleep(pause)
            pause = min(0.05, pause + 0.005)

    def _identify(self, link: Link) -> str:
        if not self.dialect.identify:
            return self.identity or self.dialect.name
        name = link.query(self.dialect.identify)
        if self.identity and name != self.identity and not link.is_socket:
            # Only on a new socket is the first answer sure to be to our own question.
            name = link.query(self.dialect.identify)
        if not name:
            says = "answered an empty line where its name was expected"
            raise faults.fault("unreadable", self.resource, self.dialect.identify, says)
        if self.identity and name != self.identity:
            says = f"{excerpt(name.encode(), 60)} answers where {self.identity!r} answered before"
            raise faults.fault("identity", self.resource, self.dialect.identify, says)
        return name

    def _error_queue(self, link: Link, timeout: float | None = None) -> list[str]:
        """Empty the instrument's error queue; what it held, oldest first.

        An answer of any other form shows that questions and answers are out of step.
        """
        query = self.dialect.errors
        held: list[str] = []
        while query and len(held) < QUEUE_LIMIT:
            answer = link.query(query, timeout=timeout)
            entry = _QUEUE_ENTRY.fullmatch(answer)
            if entry is None:
                says = f"answered {excerpt(answer.encode())} where an entry of the error queue was expected"
                raise faults.fault("unreadable", self.resource, query, says)
            if int(entry[1] or 0) == 0:
                break
            held.append(answer.strip())
        return held

    def _refuse_errors(self, link: Link, doing: str) -> None:
        held = self._error_queue(link)
        if held:
            says = f"after {doing} the instrument reports {'; '.join(held)}"
            raise faults.fault("instrument-error", self.resource, self.dialect.errors, says)

    def _with_reported(self, link: Link, error: InstrumentError) -> InstrumentError:
        """A time-out is often a command that the instrument refused: its error queue then says so."""
        if error.facts.get("kind") != "timeout" or not self.dialect.errors:
            return error
        try:
            held = self._error_queue(link, timeout=min(0.5, self.dialect.timeout))
        except InstrumentError:
            return error
        if not held:
            return error
        return InstrumentError(f"{error.says} The instrument reports {'; '.join(held)}.", **error.facts)
