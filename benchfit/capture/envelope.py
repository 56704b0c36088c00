"""Stamps that come in pairs: the minimum and the maximum of one interval, or two rows on one rounded stamp."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def pairs_begin(stamps: Floats) -> int | None:
    """0 or 1, the row at which pairs of equal stamps begin; None where stamps do not come in pairs."""
    steps = np.diff(stamps)
    for offset in (0, 1):
        inside, between = steps[offset::2], steps[offset + 1 :: 2]
        if inside.size > 2 and between.size and np.all(inside == 0) and np.all(between > 0):
            return offset
    return None


def is_envelope(stamps: Floats, columns: Sequence[Floats], begin: int, quantum: float) -> bool:
    """Whether pairs of equal stamps, from row ``begin`` on, are an envelope rather than a product of rounding.

    Stamps many printed digits (of ``quantum`` s each) apart are not rounded; else the values must tell: those
    of an envelope go up within the pairs and down between them, those of samples have no such order.
    """
    if float(np.median(np.diff(stamps[begin::2]))) >= 4 * quantum:
        return True
    return all(_is_zigzag(values[begin:]) for values in columns)


def _is_zigzag(values: Floats) -> bool:
    count = values.size // 2 * 2
    first, second = values[:count:2], values[1:count:2]
    moving = (second[:-1] != first[:-1]) & np.isfinite(second[:-1] - first[:-1])
    zigzag = (second[:-1] > first[:-1]) & (first[1:] < second[:-1])
    return not moving.any() or bool(np.mean(zigzag[moving]) >= 0.8)
