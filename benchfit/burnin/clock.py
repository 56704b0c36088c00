"""Two clocks: the wall clock, which people read and which may be set, and a steady one that only runs on."""

from __future__ import annotations

import math
import time
from dataclasses import dataclass
from datetime import UTC, datetime

NOTICED = 1.0
"""Smallest step of the wall clock against the steady one that is noticed (s)."""
SLEW = 600e-6
"""How fast a time service may slew the wall clock (500 ppm is NTP's limit, RFC 5905), with a margin."""


def steady() -> float:
    """Seconds on a clock that cannot be set, and that runs on in suspend where the system has such a one."""
    if _KIND is not None:
        return time.clock_gettime(_KIND)
    return time.monotonic()


# Linux's monotonic clock stands still in suspend and CLOCK_BOOTTIME does not; on macOS it is the other way
# round with Python's time.monotonic() and CLOCK_MONOTONIC.
_KIND: int | None = getattr(time, "CLOCK_BOOTTIME", getattr(time, "CLOCK_MONOTONIC", None))


def iso(at: float) -> str:
    """Unix time (s) as UTC in ISO 8601 with microseconds."""
    return datetime.fromtimestamp(at, UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def unix(text: str) -> float:
    """The Unix time (s) of an ISO 8601 stamp; one without a zone is UTC."""
    found = datetime.fromisoformat(text)
    return (found if found.tzinfo else found.replace(tzinfo=UTC)).timestamp()


@dataclass(frozen=True)
class Reading:
    """Both clocks read at one moment: ``wall`` Unix time, ``steady`` since an arbitrary origin (s)."""

    wall: float
    steady: float


def now() -> Reading:
    """Both clocks, now."""
    return Reading(time.time(), steady())


def stepped(before: Reading, after: Reading) -> float:
    """By how much the wall clock was set between two readings (s, > 0: forward); 0 where it was slewed."""
    passed = after.steady - before.steady
    step = (after.wall - before.wall) - passed
    return step if abs(step) > NOTICED + SLEW * abs(passed) else 0.0


def spoken(seconds: float) -> str:
    """A duration for people: "12 s", "4 min 10 s", "3 h 05 min", "2 d 4 h"."""
    if not math.isfinite(seconds):
        return "an unknown time"
    sign, left = ("−" if seconds < 0 else ""), abs(seconds)
    if left < 59.95:
        return f"{sign}{left:.0f} s" if left >= 9.95 else f"{sign}{left:.2g} s"
    whole = round(left)
    if whole < 3600:
        return f"{sign}{whole // 60} min {whole % 60:02d} s"
    if whole < 2 * 86400:
        return f"{sign}{whole // 3600} h {whole % 3600 // 60:02d} min"
    return f"{sign}{whole // 86400} d {whole % 86400 // 3600} h"
