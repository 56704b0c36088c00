"""Soft yes-or-no questions about a waveform, for the circuits' ``likeness``.

Each answers with 1 where it holds, a little where it does not, and a neutral middle where the waveform does not say.
"""

from __future__ import annotations

import math

UNKNOWN = 0.5
NO = 0.03


def close(value: float | None, target: float, width: float) -> float:
    """A bell about ``target`` with the given width, never quite 0."""
    if value is None:
        return UNKNOWN
    return max(NO, math.exp(-0.5 * ((value - target) / width) ** 2))


def under(value: float | None, limit: float, width: float) -> float:
    """1 well below ``limit``, NO well above; a logistic step of that width."""
    if value is None:
        return UNKNOWN
    return max(NO, 1 / (1 + math.exp(min((value - limit) / width, 50.0))))


def over(value: float | None, limit: float, width: float) -> float:
    """1 well above ``limit``."""
    if value is None:
        return UNKNOWN
    return max(NO, 1 / (1 + math.exp(min((limit - value) / width, 50.0))))


def yes(fact: bool | None) -> float:
    """1 or NO; UNKNOWN where the waveform does not say."""
    return UNKNOWN if fact is None else (1.0 if fact else NO)


def ratio(a: float | None, b: float | None) -> float | None:
    """a/b, None where either is unknown or b is 0."""
    return None if a is None or b is None or b == 0 else a / b


def swing(upper: float | None, lower: float | None) -> float | None:
    """upper − lower, None where either is unknown."""
    return None if upper is None or lower is None else upper - lower
