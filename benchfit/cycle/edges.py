"""Transitions of a square output: instants of the 50 % crossings and 10 % to 90 % durations (IEEE Std 181)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.levels import States
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import block_means, crossings

_EDGES = 128


@dataclass(frozen=True, eq=False)
class Edges:
    """50 % crossings in order.

    Attributes
    ----------
    index : ndarray
        Sample index, fractions allowed.
    rising : ndarray of bool
    variance : ndarray
        Of each instant, from noise and sampling (samples²).
    before : ndarray of int
        The last sample before the passage.
    sharp : ndarray of bool
        The whole passage lies between two neighbouring samples.
    """

    index: Array
    rising: Mask
    variance: Array
    before: Index
    sharp: Mask

    @property
    def size(self) -> int:
        return int(self.index.size)

    def take(self, which: Index) -> Edges:
        """Some of the edges."""
        return Edges(
            self.index[which], self.rising[which], self.variance[which], self.before[which], self.sharp[which]
        )

    def within(self, first: int, size: int) -> Edges:
        """The edges in a part of the record, counted from its first sample."""
        some = self.take(np.flatnonzero((self.index >= first) & (self.index < first + size)))
        return Edges(some.index - first, some.rising, some.variance, some.before - first, some.sharp)


def find_edges(trace: Trace, states: States) -> Edges:
    """The 50 % crossings, each passed with a hysteresis of several σ so that noise makes none."""
    half = float(np.clip(5.0 * trace.noise / max(states.amplitude, 1e-300), 0.2, 0.35)) * states.amplitude
    middle = states.at(0.5)
    passed = crossings(trace.values, middle - half, middle + half)
    if passed.size == 0:
        return Edges(np.empty(0), passed.rising, np.empty(0), passed.before, passed.rising)
    sign = np.where(passed.rising, 1.0, -1.0)
    at, slope = _interpolate(trace, passed.before, passed.after, middle, sign)
    wide, fitted, error = _regress(trace, passed.before, passed.after, middle, sign)
    at = np.where(wide, fitted, at)
    # An edge between two samples may lie anywhere between them.
    sharp = passed.after - passed.before == 1
    # Between two samples that do not rise it may lie anywhere in the passage.
    unknown = (passed.after - passed.before) ** 2 / 12.0
    crossing = np.where(slope > 0, (trace.noise / np.where(slope > 0, slope, 1.0)) ** 2 / 2, unknown)
    variance = np.where(wide, error, crossing + np.where(sharp, 1.0 / 12.0, 0.0))
    return Edges(at, passed.rising, variance, passed.before, sharp)


def _interpolate(
    trace: Trace, before: Index, after: Index, middle: float, sign: Array
) -> tuple[Array, Array]:
    """Linear interpolation between the last sample on the old side of ``middle`` and the next."""
    last = before.copy()
    for step in range(1, int(min((after - before).max(), 8))):
        place = np.minimum(before + step, after)
        old = (trace.values[place] - middle) * sign < 0
        last = np.where(old & (place < after), place, last)
    v0, v1 = trace.values[last], trace.values[np.minimum(last + 1, trace.size - 1)]
    rise = (v1 - v0) * sign
    rise = np.where(rise > 0, rise, np.inf)
    return last + np.clip((middle - v0) * sign / rise, 0.0, 1.0), np.where(np.isfinite(rise), rise, 0.0)


def _regress(
    trace: Trace, before: Index, after: Index, middle: float, sign: Array
) -> tuple[Mask, Array, Array]:
    """Edges with many samples in the band: a line through these, solved for the middle."""
    count = after - before - 1
    wide = count >= 4
    at, error = np.zeros(before.size), np.ones(before.size)
    if not wide.any():
        return wide, at, error
    rows = np.flatnonzero(wide)
    n = count[rows]
    edge = np.repeat(np.arange(rows.size), n)
    within = np.arange(edge.size) - np.repeat(np.cumsum(n) - n, n)
    x = within - (n[edge] - 1) / 2.0
    v = trace.values[before[rows][edge] + 1 + within]
    mean = np.bincount(edge, v) / n
    sxx = np.bincount(edge, x * x)
    slope = np.bincount(edge, x * v) / sxx
    good = slope * sign[rows] > 0
    slope = np.where(good, slope, np.inf)
    shift = (middle - mean) / slope
    at[rows] = before[rows] + 1 + (n - 1) / 2.0 + shift
    error[rows] = (trace.noise / slope) ** 2 * (1.0 / n + shift**2 / sxx)
    wide[rows[~good]] = False
    return wide, at, error


def durations(trace: Trace, states: States, edges: Edges, rising: bool) -> tuple[float, float] | None:
    """Mean 10 % to 90 % duration (s) of the edges of one direction with its u, None where not resolved."""
    mine = np.flatnonzero(edges.rising == rising)
    if mine.size > _EDGES:
        mine = mine[np.linspace(0, mine.size - 1, _EDGES).astype(int)]
    spacing = np.diff(edges.index).min() if edges.size > 1 else trace.size
    block = max(1, int(spacing) // 2000)
    values = block_means(trace.values, block)
    reach = max(2, int(0.9 * spacing / block))
    found = [_duration(values, (edges.index[i] + 0.5) / block - 0.5, states, reach, rising) for i in mine]
    lengths = np.array([x for x in found if x is not None]) * block
    if lengths.size == 0 or np.mean(lengths) < 2.4 * block:
        return None
    mean = float(lengths.mean())
    noise = trace.noise / np.sqrt(block) / states.amplitude * mean / 0.8
    floor = np.hypot(noise, 0.1 * block)
    scatter = float(lengths.std(ddof=1)) if lengths.size > 2 else 0.0
    return mean * trace.interval, max(scatter, floor) / np.sqrt(lengths.size) * trace.interval


def _duration(values: Array, at: float, states: States, reach: int, rising: bool) -> float | None:
    centre = int(np.clip(np.floor(at), 0, values.size - 2))
    left = values[max(0, centre - reach) : centre + 1][::-1]
    right = values[centre + 1 : centre + 1 + reach]
    if not rising:
        left, right = 2 * states.at(0.5) - left, 2 * states.at(0.5) - right
    low, high = states.at(0.1), states.at(0.9)
    below, above = np.flatnonzero(left <= low), np.flatnonzero(right >= high)
    if below.size == 0 or above.size == 0:
        return None
    i, j = int(below[0]), int(above[0])
    inner = left[i - 1] if i > 0 else right[0]
    begin = centre - i + (low - left[i]) / max(inner - left[i], 1e-300)
    outer = right[j - 1] if j > 0 else left[0]
    end = centre + 1 + j - (right[j] - high) / max(right[j] - outer, 1e-300)
    return float(end - begin)
