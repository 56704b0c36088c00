"""When the next acquisition is due: at start, start + every, start + 2·every, … of the steady clock."""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, field

SLACK = 0.05
"""A slot that is late by less than this share of the interval is still taken; a later one is skipped."""


@dataclass(frozen=True)
class Slot:
    """The next slot: its number, when it is due (steady clock, s), how many were skipped before it."""

    number: int
    due: float
    skipped: int


def next_slot(start: float, every: float, last: int, now: float) -> Slot:
    """The slot after number ``last``, never one that is long past.

    Slots are multiples of ``every`` (s) from ``start``, so lateness does not accumulate; those that passed
    while an acquisition was late are skipped and counted, not made up for. ``every`` = 0: at once, every
    time.
    """
    number = last + 1
    if every <= 0:
        return Slot(number, now, 0)
    due = start + number * every
    if now > due + SLACK * every:
        number = max(number, math.ceil((now - start) / every - SLACK))
        due = start + number * every
    return Slot(number, due, number - last - 1)


@dataclass(eq=False)
class Cadence:
    """Tells a gap from the usual interval between the records of one unit.

    ``every``: the interval that is meant, or None where captures come by themselves.
    """

    every: float | None
    least: float = 5.0
    _last: float | None = None
    _usual: deque[float] = field(default_factory=lambda: deque(maxlen=15))

    def gap(self, at: float) -> float | None:
        """Since when nothing came, if the record at ``at`` (s) ends a gap; None where it came as usual."""
        last, self._last = self._last, at
        if last is None or at <= last:
            return None
        interval = at - last
        usual = sorted(self._usual)[len(self._usual) // 2] if len(self._usual) >= 3 else None
        self._usual.append(interval)
        expected = max(self.every or 0.0, usual or 0.0)
        if expected <= 0:
            return None
        # An instrument keeps its slots; captures that come by themselves may be as irregular as they like
        # below ``least``.
        floor = 0.0 if self.every else self.least
        return last if interval > max(2.5 * expected, floor) else None


class Backoff:
    """Growing pauses after failures: 1, 2, 4, … up to ``most`` seconds."""

    def __init__(self, most: float = 60.0) -> None:
        self.most = most
        self.failures = 0

    def pause(self, *, failed: bool) -> float:
        """The pause (s) after an attempt; 0 after one that succeeded."""
        self.failures = self.failures + 1 if failed else 0
        return min(2.0 ** (self.failures - 1), self.most) if self.failures else 0.0
