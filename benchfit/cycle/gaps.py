"""Flybacks too short to be fitted: where one ramp ends and the next begins, between samples.

The last sample on the one ramp and the first on the other bound the instant of each turn. Many cycles meet the
turn at different places between two samples; a common threshold must lie within all of their bounds, which
narrows it far below what one sample interval allows, unless the threshold itself scatters. Both are weighed
with the likelihood of interval-censored observations.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.phases import Fitted
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Crossings

_MARGIN = 8
_CHUNK = 50_000
_JOINTS = 400


@dataclass(frozen=True, eq=False)
class Gaps:
    """Between two ramps each: the last sample of the one before, the first of the one after."""

    last: Index
    first: Index

    @property
    def between(self) -> Index:
        """Samples that belong to neither."""
        return self.first - self.last - 1


def rough_gaps(passages: Crossings, fast_rising: bool) -> Gaps:
    """Gaps as the passages of the fast direction give them."""
    mine = passages.rising == fast_rising
    return Gaps(passages.before[mine], passages.after[mine])


def find_gaps(trace: Trace, rough: Gaps, fitted: Fitted, tolerance: float) -> Gaps:
    """Last and first samples that agree with the fitted ramps within ``tolerance`` (V).

    ``fitted`` holds one ramp before, between and after the gaps, in order.
    """
    last, first = np.empty_like(rough.last), np.empty_like(rough.first)
    width = int((rough.first - rough.last).max()) + 1
    offsets = np.arange(-_MARGIN, width + _MARGIN)
    for begin in range(0, rough.last.size, _CHUNK):
        part = slice(begin, min(begin + _CHUNK, rough.last.size))
        index = rough.last[part, None] + offsets[None, :]
        inside = np.clip(index, 0, trace.size - 1)
        v = trace.values[inside]
        joint = np.arange(part.start, part.stop)
        near = index.astype(float)
        left = _close(fitted, joint, near, v, tolerance)
        right = _close(fitted, joint + 1, near, v, tolerance)
        limit = rough.first[part] - rough.last[part] + _MARGIN
        # Of the ramp before: everything up to the first sample that leaves it for good.
        leaves = ~left & (offsets >= -_MARGIN)
        stay = np.where(leaves.any(axis=1), leaves.argmax(axis=1), offsets.size) - _MARGIN - 1
        arrives = ~right & (offsets[None, :] < limit[:, None])
        back = offsets.size - 1 - arrives[:, ::-1].argmax(axis=1)
        come = np.where(arrives.any(axis=1), back, -1) - _MARGIN + 1
        come = np.minimum(come, limit)
        last[part] = rough.last[part] + np.clip(stay, -_MARGIN, limit - 1)
        first[part] = rough.last[part] + come
    return Gaps(np.clip(last, 0, trace.size - 1), np.clip(np.maximum(first, last + 1), 0, trace.size - 1))


def _close(fitted: Fitted, phase: Index, index: Array, v: Array, tolerance: float) -> Mask:
    where = np.repeat(phase, index.shape[1])
    curve, _ = fitted.values_at(where, index.ravel())
    return np.asarray(np.abs(v - curve.reshape(v.shape)) <= tolerance)


@dataclass(frozen=True)
class Threshold:
    """A threshold known only within bounds: posterior mean, u (V), and its own scatter (V)."""

    mean: float
    u: float
    scatter: float


def censored_mean(lower: Array, upper: Array, noise: float) -> Threshold:
    """Mean of what lies between ``lower`` and ``upper`` in each cycle, as normal with unknown scatter.

    ``noise`` (V) is the least scatter to allow for. Flat prior in the mean, log-flat in the scatter.
    """
    from scipy.special import ndtr

    if lower.size > _JOINTS:
        pick = np.linspace(0, lower.size - 1, _JOINTS).astype(int)
        lower, upper = lower[pick], upper[pick]
    middle = 0.5 * (lower + upper)
    gap = float(np.median(upper - lower)) or 1e-300
    spread = max(float(middle.std()), 0.3 * gap)
    # Where all bounds overlap, that overlap is the scale; else the middles' own standard error is.
    overlap = float(upper.min() - lower.max())
    reach = 4.0 * spread / np.sqrt(lower.size) + max(overlap, 0.0)
    centre = 0.5 * (upper.min() + lower.max()) if overlap > 0 else float(middle.mean())
    least = max(noise, 0.02 * max(overlap, gap / lower.size))
    means = centre + np.linspace(-1.0, 1.0, 101) * min(
        max(reach, 1.5 * max(overlap, 0.0)), 3 * gap + 4 * spread
    )
    scatters = np.geomspace(least, max(3.0 * spread, 3.0 * least), 18)
    log = np.empty((scatters.size, means.size))
    for i, s in enumerate(scatters):
        inside = ndtr((upper[:, None] - means) / s) - ndtr((lower[:, None] - means) / s)
        log[i] = np.log(np.maximum(inside, 1e-30)).sum(axis=0)
    p = np.exp(log - log.max())
    p /= p.sum()
    over_means = p.sum(axis=0)
    mean = float(over_means @ means)
    return Threshold(mean, float(np.sqrt(over_means @ (means - mean) ** 2)), float(p.sum(axis=1) @ scatters))
