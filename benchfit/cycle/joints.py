"""Joints: where one phase ends and the next begins with a step between them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.phases import Fitted
from benchfit.cycle.trace import Trace

_WIDE = 300
_CHUNK = 20_000


@dataclass(frozen=True, eq=False)
class Joints:
    """Between phase j and j + 1: the last sample of the one and the first of the other."""

    last: Index
    first: Index

    @property
    def middle(self) -> Array:
        """Sample index half-way between the two."""
        return (self.last + self.first) / 2.0


def split(trace: Trace, fitted: Fitted, rough: Array, reach: int) -> Index:
    """The last sample of each phase before its joint: the split that leaves the least sum of squares.

    Parameters
    ----------
    rough : ndarray, shape (p − 1,)
        Where the joints are about (sample index).
    reach : int
        How far to look to either side (samples).
    """
    block = max(1, -(-reach // _WIDE))
    at = np.round(rough).astype(np.int64)
    if block > 1:
        at = _split(trace, fitted, at, reach, block)
        reach = 2 * block
    return _split(trace, fitted, at, reach, 1)


def _split(trace: Trace, fitted: Fitted, at: Index, reach: int, block: int) -> Index:
    offsets = np.arange(-reach, reach + 1, block)
    result = np.empty(at.size, dtype=np.int64)
    for begin in range(0, at.size, _CHUNK):
        part = slice(begin, min(begin + _CHUNK, at.size))
        phase = np.arange(part.start, part.stop)
        index = at[part, None] + offsets
        # Never beyond the neighbouring phases' own middles.
        low = np.ceil(fitted.middle[phase]).astype(np.int64)[:, None]
        high = np.floor(fitted.middle[phase + 1]).astype(np.int64)[:, None]
        inside = (index >= low) & (index <= high) & (index >= 0) & (index < trace.size)
        safe = np.clip(index, 0, trace.size - 1)
        v = trace.values[safe]
        p, n = (_curve(fitted, phase + k, safe) for k in (0, 1))
        gain = np.where(inside, (v - p) ** 2 - (v - n) ** 2, 0.0)
        if trace.valid is not None:
            gain = np.where(trace.valid[safe], gain, 0.0)
        total = np.concatenate([np.zeros((phase.size, 1)), np.cumsum(gain, axis=1)], axis=1)
        best = total.argmin(axis=1)
        result[part] = at[part] + np.concatenate([[-reach - block], offsets])[best]
    return np.clip(result, 0, trace.size - 2)


def _curve(fitted: Fitted, phase: Index, index: Index) -> Array:
    where = np.repeat(phase, index.shape[1])
    return fitted.values_at(where, index.ravel().astype(float))[0].reshape(index.shape)


def clear_of(trace: Trace, fitted: Fitted, last: Index, tolerance: float) -> Joints:
    """Leave samples that lie on neither curve, caught in the step itself, to neither phase."""
    first = last + 1
    phase = np.arange(last.size)
    for _ in range(3):
        off = np.abs(trace.values[last] - fitted.values_at(phase, last.astype(float))[0]) > tolerance
        off &= last > fitted.middle[phase]
        last = np.where(off, last - 1, last)
        late = np.abs(trace.values[first] - fitted.values_at(phase + 1, first.astype(float))[0]) > tolerance
        late &= first < fitted.middle[phase + 1]
        first = np.where(late, first + 1, first)
        if not (off.any() or late.any()):
            break
    return Joints(last, first)
