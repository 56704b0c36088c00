"""Noise of a channel, before anything is known of its waveform."""

from __future__ import annotations

import numpy as np

from benchfit.cycle.arrays import Array

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
    parabola drops out. The median absolute deviation tells what is far out, as a minority of corners is; the
    variance of the rest is finer than a median of whole quantisation steps. The result is never below what the
    quantisation step alone gives, resolution/√12.
    """
    d = np.concatenate([np.diff(values[s], 3) for s in stretches(values.size)])
    floor = resolution / np.sqrt(12.0) if np.isfinite(resolution) else 0.0
    if d.size == 0:
        return float(floor)
    size = np.abs(d)
    reach = 4.0 * max(1.4826 * float(np.median(size)), resolution)
    inner = d[size <= reach] if reach > 0 else d[:0]
    if inner.size == 0:
        return float(floor)
    return float(max(np.sqrt(np.mean(inner**2) / 20.0), floor))
