"""Where the cycle turns, to within a sample or so: level crossings with hysteresis, then extremes between them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.noise import stretches
from benchfit.cycle.trace import Trace

_CHUNK = 1 << 20
_LEVELS = 33


@dataclass(frozen=True, eq=False)
class Band:
    """A hysteresis band: the level that most cycles cross, and half the width around it (V)."""

    middle: float
    half: float
    swing: float

    @property
    def limits(self) -> tuple[float, float]:
        return self.middle - self.half, self.middle + self.half


@dataclass(frozen=True, eq=False)
class Crossings:
    """Passages through a band.

    ``before`` is the last sample outside the band on the old side, ``after`` the first on the new side,
    ``rising`` their direction; they alternate.
    """

    before: Index
    after: Index
    rising: Mask

    @property
    def size(self) -> int:
        return int(self.before.size)

    def take(self, which: Index) -> Crossings:
        """Some of the passages."""
        return Crossings(self.before[which], self.after[which], self.rising[which])


def crossings(values: Array, lower: float, upper: float) -> Crossings:
    """All passages through [lower, upper], in chunks so that memory stays small."""
    before, after, up = [], [], []
    last_side, last_index = 0, -1
    for begin in range(0, values.size, _CHUNK):
        part = values[begin : begin + _CHUNK]
        side = (part > upper).astype(np.int8) - (part < lower).astype(np.int8)
        index = np.flatnonzero(side)
        if index.size == 0:
            continue
        sides = side[index]
        index = index + begin
        if last_side and sides[0] != last_side:
            before.append(np.array([last_index]))
            after.append(index[:1])
            up.append(sides[:1] > 0)
        change = np.flatnonzero(sides[1:] != sides[:-1])
        before.append(index[change])
        after.append(index[change + 1])
        up.append(sides[change + 1] > 0)
        last_side, last_index = int(sides[-1]), int(index[-1])
    if not before:
        empty = np.empty(0, dtype=np.int64)
        return Crossings(empty, empty, np.empty(0, dtype=bool))
    return Crossings(np.concatenate(before), np.concatenate(after), np.concatenate(up))


def find_band(trace: Trace) -> Band | None:
    """The band that most passages cross, or None where nothing comes and goes.

    Levels between the record's extremes are tried on a few windows at full resolution and, where these
    hold few passages, on the whole record averaged down: so neither a long start from 0 V nor a slow cycle
    in a long record hides the oscillation.
    """
    windows = [trace.values[s] for s in stretches(trace.size)]
    band = _best_band(windows, trace.noise)
    if band[0] < 4 * len(windows) and trace.size > sum(w.size for w in windows):
        block = trace.size // (1 << 17) + 1
        coarse = block_means(trace.values, block)
        other = _best_band([coarse], trace.noise / np.sqrt(block))
        band = other if other[0] >= band[0] else band
    return band[1]


def _best_band(windows: list[Array], noise: float) -> tuple[int, Band | None]:
    low = min(float(w.min()) for w in windows)
    high = max(float(w.max()) for w in windows)
    span = high - low
    half = min(max(5.0 * noise, 0.02 * span), 0.2 * span)
    if span == 0.0:
        return 0, None
    levels = np.linspace(low + half, high - half, _LEVELS)
    counts = np.array([sum(crossings(w, x - half, x + half).size for w in windows) for x in levels])
    if int(counts.max()) < 2:
        return int(counts.max()), None
    # The cycle's swing is where many passages cross many levels: a start-up crosses many levels once, ringing
    # a few levels often.
    candidates = [(int(c) * run.size, int(c), run) for c in np.unique(counts[counts >= 2]) for run in _runs(counts, c)]
    _, most, run = max(candidates, key=lambda x: x[:2])
    bottom, top = levels[run[0]] - half, levels[run[-1]] + half
    swing = float(top - bottom)
    return most, Band(float(bottom + top) / 2, min(max(0.25 * swing, half), 0.45 * swing), swing)


def _runs(counts: Index, count: int) -> list[Index]:
    """Stretches of levels that nearly so many passages cross."""
    good = np.flatnonzero(counts >= 0.8 * count)
    return np.split(good, np.flatnonzero(np.diff(good) > 1) + 1)


def block_means(values: Array, block: int) -> Array:
    """Means over ``block`` samples each; a remainder at the end is left out."""
    if block <= 1:
        return values
    size = values.size // block
    return np.asarray(values[: size * block].reshape(size, block).mean(axis=1))


@dataclass(frozen=True, eq=False)
class Turns:
    """Extremes between passages, in order.

    ``index`` in samples (fractions where the record was averaged), ``top`` True for an upper turn.
    """

    index: Array
    top: Mask
    block: int


def find_turns(trace: Trace, passages: Crossings, points: int = 400) -> Turns:
    """The extreme sample between each two passages, on a record averaged to ``points`` per cycle."""
    spacing = (passages.after[-1] - passages.after[0]) / max(passages.size - 1, 1) * 2.0
    block = max(1, int(spacing / points))
    values = block_means(trace.values, block)
    starts, stops = passages.after[:-1] // block, passages.before[1:] // block + 1
    starts = np.minimum(starts, values.size - 1)
    stops = np.clip(stops, starts + 1, values.size)
    top = passages.rising[:-1]
    index = np.where(top, _extreme(values, starts, stops, True), _extreme(values, starts, stops, False))
    index = _off_spikes(values, index, starts, stops, top, trace.noise / np.sqrt(block))
    return Turns(_near_passages((index + 0.5) * block - 0.5, passages), top, block)


def _off_spikes(values: Array, index: Index, starts: Index, stops: Index, top: Mask, noise: float) -> Index:
    """The extremes of the few turns that are spikes found anew, on the median of neighbours."""
    around = np.clip(index[:, None] + np.arange(-3, 4), 0, values.size - 1)
    away = np.abs(values[index] - np.median(values[around], axis=1))
    spiky = np.flatnonzero(away > max(8.0 * noise, 4.0 * float(np.median(away))))
    if spiky.size > 0.25 * index.size:
        return index
    index = index.copy()
    for k in spiky:
        calm = running_median(values[starts[k] : stops[k]])
        index[k] = starts[k] + int(calm.argmax() if top[k] else calm.argmin())
    return index


def running_median(values: Array, width: int = 7) -> Array:
    """Median of ``width`` neighbours; fewer than that are left as they are."""
    if values.size < width:
        return values
    half = width // 2
    result = np.empty(values.size)
    for begin in range(0, values.size, _CHUNK // 4):
        end = min(begin + _CHUNK // 4, values.size)
        low, high = max(begin - half, 0), min(end + half, values.size)
        # At the record's own ends the window stays whole and inside.
        windows = np.lib.stride_tricks.sliding_window_view(values[min(low, max(high - width, 0)) : high], width)
        medians = np.median(windows, axis=1)
        at = np.clip(np.arange(begin, end) - half - min(low, max(high - width, 0)), 0, medians.size - 1)
        result[begin:end] = medians[at]
    return result


def _near_passages(index: Array, passages: Crossings) -> Array:
    """Keep a turn near the faster of its two passages: noise on a flat ramp throws the extreme far off.

    The band holds about half of the swing, so a phase is over within a few times as long as its passage takes.
    """
    taken = 4.0 * (passages.after - passages.before) + 1.0
    latest = passages.after[:-1] + taken[:-1]
    earliest = passages.before[1:] - taken[1:]
    apart = earliest <= latest
    return np.where(apart, np.clip(index, np.minimum(earliest, latest), np.maximum(earliest, latest)), index)


def _extreme(values: Array, starts: Index, stops: Index, largest: bool) -> Index:
    bounds = np.stack([starts, stops], axis=1).ravel()
    trim = bounds[-1] >= values.size
    reduce = np.maximum if largest else np.minimum
    best = reduce.reduceat(values, bounds[:-1] if trim else bounds)[::2]
    # First sample of each stretch that equals its extreme.
    out = np.empty(starts.size, dtype=np.int64)
    run = np.repeat(np.arange(starts.size), stops - starts)
    first = np.cumsum(stops - starts) - (stops - starts)
    position = np.arange(run.size) - first[run] + starts[run]
    hit = np.flatnonzero(values[position] == best[run])
    out[run[hit][::-1]] = position[hit][::-1]
    return out
