"""Preferred numbers of resistors and capacitors (IEC 60063:2015)."""

from __future__ import annotations

import math
from functools import cache

SERIES = {"E3": 3, "E6": 6, "E12": 12, "E24": 24, "E48": 48, "E96": 96, "E192": 192}
# Tolerance for which each series was made, in the order of SERIES.
_TOLERANCES = (("E192", 0.005), ("E96", 0.01), ("E48", 0.02), ("E24", 0.05), ("E12", 0.10), ("E6", 0.20))
# The two-digit series are older than the rule: where it gives the first, the standard has the second.
_TWO_DIGITS = {26: 27, 29: 30, 32: 33, 35: 36, 38: 39, 42: 43, 46: 47, 83: 82}
_THREE_DIGITS = {919: 920}


@cache
def values(series: str) -> tuple[float, ...]:
    """The values of one decade, 1 ≤ x < 10.

    The rule is 10^(i/N) rounded to two significant digits (E3 to E24) or three (E48 to E192); the
    exceptions are those of the standard.

    Raises
    ------
    KeyError
        Where the series is not one of IEC 60063.
    """
    count = SERIES[series]
    scale, exceptions = (10, _TWO_DIGITS) if count <= 24 else (100, _THREE_DIGITS)
    raw = [round(scale * 10 ** (i / count)) for i in range(count)]
    return tuple(exceptions.get(n, n) / scale for n in raw)


def nearest(value: float, series: str) -> float:
    """The value of the series that is nearest in ratio, in the same unit."""
    below, above = neighbours(value, series)
    return below if value / below <= above / value else above


def neighbours(value: float, series: str) -> tuple[float, float]:
    """The values of the series next below (or at) and next above a positive value."""
    if not (value > 0 and math.isfinite(value)):
        raise ValueError(f"preferred numbers are positive, got {value}")
    decade = math.floor(math.log10(value))
    ladder = [_decimal(m, d) for d in (decade - 1, decade, decade + 1) for m in values(series)]
    below = max(x for x in ladder if x <= value * (1 + 1e-9))
    above = min(x for x in ladder if x > value * (1 + 1e-9))
    return below, above


def ladder(low: float, high: float, *series: str) -> tuple[float, ...]:
    """All values of the series (together) from ``low`` to ``high``, ascending."""
    decades = range(math.floor(math.log10(low)) - 1, math.floor(math.log10(high)) + 2)
    every = {_decimal(m, d) for name in series for d in decades for m in values(name)}
    return tuple(sorted(x for x in every if low <= x <= high))


def series_for(tolerance: float) -> str:
    """The series made for a symmetrical tolerance (a fraction: 0.05 → "E24").

    A tolerance between two classes takes the coarser series, one over 20 % takes E3 (classes: IEC 60063).
    """
    for name, limit in _TOLERANCES:
        if tolerance <= 1.01 * limit:  # half a logarithmic width is a little more than the fraction
            return name
    return "E3"


def stocked(tolerance: float) -> tuple[str, ...]:
    """The series that a drawer of that tolerance holds: the E24 values are made at 1 % and 2 % as well.

    E24 is no part of E96: only 10, 11, 13, 15, 20 and 75 are in both (common practice: look up both).
    """
    series = series_for(tolerance)
    return (series, "E24") if SERIES[series] > 24 else (series,)


def _decimal(mantissa: float, decade: int) -> float:
    return float(f"{mantissa:g}e{decade}")
