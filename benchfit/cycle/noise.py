"""Noise of a channel, before anything is known of its waveform."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_STRETCH = 1 << 15


def stretches(size: int, length: int = _STRETCH, count: int = 4) -> list[slice]:
    """A few windows spread evenly over a record, or the whole where it is short."""
    if size <= length * count:
        return [slice(0, size)]
    starts = np.linspace(0, size - length, count).astype(int)
    return [slice(int(s), int(s) + length) for s in starts]


def difference_noise(values: Array, resolution: float) -> float:
    """Noise (V rms) from third differences of neighbours, robust against corners and edges.

    The differences' variance is 20 σ² (sum of the squared binomial coefficients) and whatever is locally a
    parabola drops out. The median absolute deviation makes a minority of corners harmless; the result is
    never below what the quantisation step alone gives, resolution/√12.
    """
    parts = [np.diff(values[s], 3) for s in stretches(values.size)]
    d = np.concatenate(parts) if parts else np.empty(0)
    floor = resolution / np.sqrt(12.0) if np.isfinite(resolution) else 0.0
    if d.size == 0:
        return float(floor)
    mad = float(np.median(np.abs(d))) / 0.6745 / np.sqrt(20.0)
    if mad == 0.0:
        # More than half of the differences vanish: quantised, or a flat record.
        mad = min(float(np.sqrt(np.mean(d * d) / 20.0)), float(floor))
    return max(mad, float(floor))
