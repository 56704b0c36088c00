"""What goes into a log and comes out of it, as data."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchfit.burnin.alarms import Cleared, Raised
from benchfit.capture.model import Capture


@dataclass(frozen=True)
class Identity:
    """What the run is about. ``sheet`` is the build sheet as text without comments, "" without one."""

    title: str
    circuit: str | None
    sheet: str
    sheet_hash: str
    program: str


@dataclass(frozen=True)
class Wanted:
    """How long this session is to go on: ``count`` records, ``time`` (s); None: no end. ``every`` in s."""

    every: float | None = None
    count: int | None = None
    time: float | None = None


@dataclass(frozen=True)
class Taken:
    """A file that a record was made from: its name, size and time of change (ns)."""

    name: str
    size: int
    changed: int


@dataclass(frozen=True, eq=False)
class Entry:
    """One record to be appended.

    Attributes
    ----------
    unit : str
    acquired : float
        Unix time (s).
    record : mapping
        The result record, or {…, "error": {"status", "says"}}.
    steady : float or None
        The steady clock at the acquisition; None where the time is a file's own.
    taken : Taken or None
    capture : Capture or None
        The raw capture where it is to be kept.
    alarms : tuple of Raised or Cleared
    gap : (began, why) or None
        Where nothing was recorded just before: since when (Unix time).
    """

    unit: str
    acquired: float
    record: Mapping[str, Any]
    steady: float | None = None
    taken: Taken | None = None
    capture: Capture | None = None
    alarms: tuple[Raised | Cleared, ...] = ()
    gap: tuple[float, str] | None = None


@dataclass(frozen=True)
class Resumed:
    """What the log held when it was opened.

    ``seq`` and ``acquired`` of the last record (0 and None in a new log); ``in_order``: the last session was
    closed; ``count`` and ``time`` (s): what of the wanted end was done by the interrupted sessions that this
    one carries on.
    """

    seq: int = 0
    acquired: float | None = None
    in_order: bool = True
    count: int = 0
    time: float = 0.0


@dataclass(frozen=True)
class Run:
    """What the run is about, and its extent. ``started``, ``ended``: first and last record (Unix time)."""

    title: str
    circuit: str | None
    sheet: str
    program: str
    created: float
    started: float | None
    ended: float | None
    records: int
    notes: tuple[str, ...]
    is_closed: bool


@dataclass(frozen=True)
class Session:
    """One process that wrote: when (Unix time), who, how it ended (None: killed, or writing still)."""

    number: int
    started: float
    steady: float
    ended: float | None
    how: str | None
    holder: str
    program: str
    every: float | None
    first_seq: int


@dataclass(frozen=True)
class Gap:
    """Nothing was recorded between two moments (Unix time); ``unit`` is None where it concerns all."""

    unit: str
    after_seq: int
    began: float
    ended: float
    why: str


@dataclass(frozen=True)
class Alarm:
    """An alarm as it was raised; ``cleared`` is the record that ended it."""

    seq: int
    acquired: float
    unit: str
    quantity: str
    value: float
    low: float
    high: float
    text: str
    cleared: int | None


@dataclass(frozen=True)
class Event:
    """Something that happened to the run: "clock-step" (``size`` in s), "sheet-changed", …"""

    at: float
    after_seq: int
    code: str
    size: float | None
    says: str


@dataclass(frozen=True, eq=False)
class Series:
    """One unit's records as arrays of n records each.

    ``values`` has shape (quantities, n), NaN where a record does not have the quantity; ``u`` and ``noise``
    are the quantities' mean standard uncertainty and record noise, NaN where never known. ``status`` is 0
    for a good record.
    """

    unit: str
    names: tuple[str, ...]
    units: tuple[str, ...]
    kinds: tuple[str, ...]
    seq: NDArray[np.int64]
    session: NDArray[np.int64]
    acquired: NDArray[np.float64]
    steady: NDArray[np.float64]
    status: NDArray[np.int64]
    values: NDArray[np.float64]
    u: NDArray[np.float64]
    noise: NDArray[np.float64]

    def row(self, name: str) -> NDArray[np.float64]:
        """The values of one quantity; KeyError where no record has it."""
        try:
            row: NDArray[np.float64] = self.values[self.names.index(name)]
        except ValueError:
            raise KeyError(name) from None
        return row
