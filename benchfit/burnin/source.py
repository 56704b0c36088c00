"""Where the captures come from: an instrument that is asked, or a folder into which files fall."""

from __future__ import annotations

import contextlib
import fnmatch
import os
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Protocol

from benchfit.burnin.clock import now
from benchfit.burnin.contents import Taken
from benchfit.burnin.schedule import Backoff
from benchfit.capture.model import Capture
from benchfit.errors import BenchfitError, InstrumentError, UsageError

PATTERNS = ("*.csv", "*.tsv", "*.dat", "*.txt")
"""Files that are taken for captures, the case of the letters aside."""
UNFINISHED = ("*.tmp", "*.part", "*.partial", "*.crdownload", "*.filepart", "*~", ".*", "~*")
"""Names under which programs write a file before they rename it into place."""
SETTLED = 1.0
"""A file counts as complete when its size and time have not changed for so long (s)."""


@dataclass(frozen=True, eq=False)
class Arrival:
    """A capture, or why there is none: exactly one of ``capture`` and ``error`` is set.

    ``acquired`` is the wall clock (Unix time, s), ``steady`` the steady clock at the acquisition or None
    where the time is a file's own; ``path`` names what was read; ``taken`` the file.
    """

    acquired: float
    path: str
    capture: Capture | None = None
    error: BenchfitError | None = None
    steady: float | None = None
    taken: Taken | None = None


class Source(Protocol):
    """What a burn-in measures from. ``is_paced``: asked at the schedule's slots, one capture each."""

    name: str
    is_paced: bool

    @property
    def pause(self) -> float:
        """Seconds from now before which asking is not worth while; 0 where all is well."""

    def open(self) -> None:
        """Make ready. Raises a BenchfitError where the first contact fails."""

    def arrivals(self) -> Iterator[Arrival]:
        """What there is now: an instrument's next capture; a folder's new complete files, oldest first."""

    def close(self) -> None:
        """Let it go."""


class Acquired(Protocol):
    """An acquisition as :mod:`benchfit.instrument` has it."""

    @property
    def acquired(self) -> datetime: ...
    @property
    def capture(self) -> Capture | None: ...


class Session(Protocol):
    """A session with an instrument as :mod:`benchfit.instrument` has it: it connects anew by itself."""

    @property
    def pause(self) -> float: ...
    def connect(self) -> str: ...
    def acquire(self) -> Acquired: ...
    def close(self) -> None: ...


@dataclass(eq=False)
class InstrumentSource:
    """An instrument over VISA, through an open or closed session."""

    name: str
    session: Session
    is_paced: bool = True
    _failed_at: float | None = None

    @property
    def pause(self) -> float:
        """What is left of the session's own pause after its last failure (s)."""
        if self._failed_at is None:
            return 0.0
        return max(0.0, self._failed_at + self.session.pause - time.monotonic())

    def open(self) -> None:
        """Connect. Raises InstrumentError."""
        self.session.connect()

    def arrivals(self) -> Iterator[Arrival]:
        """One capture, or the error that stands for it."""
        try:
            found = self.session.acquire()
        except InstrumentError as fault:
            self._failed_at = time.monotonic()
            at = now()
            yield Arrival(at.wall, self.name, error=fault, steady=at.steady)
            return
        self._failed_at = None
        at, acquired = now(), found.acquired.timestamp()
        yield Arrival(acquired, self.name, found.capture, steady=at.steady - max(0.0, at.wall - acquired))

    def close(self) -> None:
        """Let the instrument go; one that does not answer is let go all the same."""
        with contextlib.suppress(BenchfitError):
            self.session.close()


@dataclass(frozen=True)
class _Seen:
    size: int
    changed: int
    since: float


@dataclass(eq=False)
class FolderSource:
    """A folder into which captures fall.

    A file counts when it is complete: its size and time have been the same for ``settled`` seconds, or it was
    renamed into place (its bytes were there under another name at the last look). A file that changes
    afterwards counts again. ``was_taken`` asks the log for the (size, time of change in ns) of the file of
    that name from which a record was last made.
    """

    name: str
    folder: Path
    read: Callable[[Path], Capture]
    was_taken: Callable[[str], tuple[int, int] | None] = lambda _: None
    settled: float = SETTLED
    steady: Callable[[], float] = time.monotonic
    is_paced: bool = False
    _not_before: float = 0.0
    _backoff: Backoff = field(default_factory=Backoff)
    _seen: dict[str, _Seen] = field(default_factory=dict)
    _done: dict[str, tuple[int, int]] = field(default_factory=dict)
    _names: dict[tuple[int, int], str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if not self.folder.is_dir():
            raise UsageError(
                f"{self.folder}: there is no such folder, and it is no VISA resource (those hold ::); name a "
                "folder into which captures fall, or a resource such as TCPIP::192.168.0.7::INSTR"
            )

    @property
    def pause(self) -> float:
        """What is left of a growing pause (s) after the folder could not be looked into."""
        return max(0.0, self._not_before - self.steady())

    def open(self) -> None:
        """Nothing to connect to."""

    def arrivals(self) -> Iterator[Arrival]:
        """Every new complete file, oldest first."""
        try:
            ready = self._look()
        except OSError as fault:
            says = f"{self.folder}: the folder cannot be looked into ({fault.strerror}); is its disk there?"
            error = InstrumentError(says, resource=str(self.folder))
            self._not_before = self.steady() + self._backoff.pause(failed=True)
            yield Arrival(time.time(), str(self.folder), error=error)
            return
        self._backoff.pause(failed=False)
        for changed, name, size in ready:
            path = self.folder / name
            taken = Taken(name, size, changed)
            self._done[name] = (size, changed)
            try:
                capture = self.read(path)
            except BenchfitError as fault:
                yield Arrival(changed / 1e9, str(path), error=fault, taken=taken)
            else:
                yield Arrival(changed / 1e9, str(path), capture, taken=taken)

    def close(self) -> None:
        """Nothing is held open."""

    def _look(self) -> list[tuple[int, str, int]]:
        """(time of change in ns, name, size) of what is complete and new."""
        at = self.steady()
        ready, seen, names = [], {}, {}
        with os.scandir(self.folder) as entries:
            facts = [(entry.name, entry.stat()) for entry in entries if entry.is_file()]
        stems = {os.path.splitext(name)[0] for name, _ in facts if name.casefold().endswith(".csv")}
        for name, stat in facts:
            key = (stat.st_dev, stat.st_ino)
            names[key] = name
            if not _is_capture(name, stems):
                continue
            now_is = (stat.st_size, stat.st_mtime_ns)
            if self._taken(name) == now_is:
                continue
            before = self._seen.get(name)
            since = before.since if before and (before.size, before.changed) == now_is else at
            seen[name] = _Seen(*now_is, since)
            renamed = before is None and self._names.get(key, name) != name
            # An instrument makes an empty file first and may take its time before it writes.
            wait = self.settled if stat.st_size else 10 * self.settled
            if renamed or at - since >= wait or self._is_old(stat.st_mtime, wait):
                ready.append((stat.st_mtime_ns, name, stat.st_size))
        self._seen, self._names = seen, names
        return sorted(ready)

    def _taken(self, name: str) -> tuple[int, int] | None:
        if name not in self._done:
            known = self.was_taken(name)
            if known is None:
                return None
            self._done[name] = known
        return self._done[name]

    def _is_old(self, changed: float, wait: float) -> bool:
        """Long past by any clock: what lay there before the burn-in began needs no second look."""
        return time.time() - changed > max(10.0, 10 * wait)


def _is_capture(name: str, stems: set[str]) -> bool:
    folded = name.casefold()
    if any(fnmatch.fnmatchcase(folded, pattern) for pattern in UNFINISHED):
        return False
    if not any(fnmatch.fnmatchcase(folded, pattern) for pattern in PATTERNS):
        return False
    # The page of settings that an instrument lays beside its data, under the same name.
    return folded.endswith(".csv") or os.path.splitext(name)[0] not in stems


def is_resource(source: str) -> bool:
    """Whether a SOURCE is a VISA resource string (they all hold "::"), not a folder."""
    return "::" in source
