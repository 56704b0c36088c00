"""The phases of a record in order: which samples belong to each, and the exponentials fitted to them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.fold import PART, POINTS, Bins, bins_per_phase, fit_many, gather
from benchfit.cycle.phase import ExponentialFit, PhaseModel, fit_exponentials
from benchfit.cycle.trace import Trace


@dataclass(frozen=True, eq=False)
class Layout:
    """Which samples belong to which phase; phases are in order and rise and fall in turn.

    Attributes
    ----------
    first, stop : ndarray of int, shape (p,)
        Samples first … stop − 1.
    rising : ndarray of bool, shape (p,)
    whole : ndarray of bool, shape (p,)
        It begins and ends at a turn within the record.
    """

    first: Index
    stop: Index
    rising: Mask
    whole: Mask

    @property
    def size(self) -> int:
        return int(self.first.size)

    @property
    def length(self) -> Index:
        return self.stop - self.first


@dataclass(frozen=True, eq=False)
class Fitted:
    """Phases with their exponentials.

    ``level`` (V) is the voltage at ``middle`` (sample index), ``information`` and ``coupling`` as in
    ExponentialFit, all of shape (p,) in order; ``fits`` holds the fit of the rising (True) and of the falling
    (False) phases, where there is one. ``sound`` marks the phases that have one.
    """

    layout: Layout
    interval: float
    middle: Array
    level: Array
    information: Array
    coupling: Array
    sound: Mask
    fits: dict[bool, ExponentialFit]

    def model(self, rising: bool) -> PhaseModel:
        return self.fits[rising].model

    def values_at(self, phase: Index, index: Array) -> tuple[Array, Array]:
        """Voltage (V) and its rate (V/s) of phases at sample indices."""
        v, rate = np.full(index.shape, np.nan), np.full(index.shape, np.nan)
        t = (index - self.middle[phase]) * self.interval
        for kind, fit in self.fits.items():
            mine = self.layout.rising[phase] == kind
            v[mine] = fit.model.value(t[mine], self.level[phase[mine]])
            rate[mine] = fit.model.rate(v[mine])
        return v, rate

    def derivatives(self, phase: Index, index: Array) -> tuple[Array, Array]:
        """d v / d own error (n,) and d v / d (slope, curvature) (n, 2) of phases at sample indices."""
        own, shared = np.zeros(index.shape), np.zeros((index.size, 2))
        t = (index - self.middle[phase]) * self.interval
        for kind, fit in self.fits.items():
            mine = np.flatnonzero(self.layout.rising[phase] == kind)
            decay, ramp, bend = fit.model.columns(t[mine], self.level[phase[mine]])
            own[mine] = decay
            shared[mine] = np.stack([ramp, bend], axis=1) + decay[:, None] * self.coupling[phase[mine]]
        return own, shared


@dataclass(frozen=True, eq=False)
class Corners:
    """Turns between neighbouring phases: sample index, voltage, and which phase comes before."""

    index: Array
    voltage: Array
    before: Index
    top: Mask


def fit_phases(
    trace: Trace, layout: Layout, kinds: tuple[bool, ...] = (True, False), begin: Fitted | None = None
) -> Fitted:
    """Fit the phases of each kind: shared asymptote and κ, one level per phase.

    Some ten thousand bins are fitted at once. Of more, an evenly spread part gives a first model, from which
    Gauss-Newton steps over all of them go on. An earlier fit says where to ``begin``.
    """
    size = layout.size
    middle = (layout.first + layout.stop - 1) / 2.0
    level, information = np.full(size, np.nan), np.zeros(size)
    coupling, sound = np.zeros((size, 2)), np.zeros(size, dtype=bool)
    fits: dict[bool, ExponentialFit] = {}
    for kind in kinds:
        mine = np.flatnonzero((layout.rising == kind) & (layout.length >= 2))
        if mine.size == 0:
            continue
        model = begin.fits[kind].model if begin is not None and kind in begin.fits else None
        found = _fit_kind(trace, layout.first[mine], layout.stop[mine], middle[mine], model)
        if found is None:
            continue
        fit, seen = found
        mine = mine[seen]
        fits[kind] = fit
        level[mine], information[mine], coupling[mine] = fit.levels, fit.information, fit.coupling
        sound[mine] = True
    return Fitted(layout, trace.interval, middle, level, information, coupling, sound, fits)


def _fit_kind(
    trace: Trace, first: Index, stop: Index, middle: Array, model: PhaseModel | None
) -> tuple[ExponentialFit, Index] | None:
    """Fit of one kind's phases and which of them held usable samples."""
    size = first.size
    bins = bins_per_phase(size)
    points = np.minimum(stop - first, bins)
    if int(points.sum()) <= POINTS:
        return _fit_at_once(gather(trace, first, stop, middle, bins), model)
    if model is None:
        few = max(16, int(PART * size / points.sum()))
        part = np.unique(np.linspace(0, size - 1, min(few, size)).astype(int))
        begun = _fit_at_once(gather(trace, first[part], stop[part], middle[part], bins), None)
        if begun is None:
            return None
        model = begun[0].model
    return fit_many(trace, first, stop, middle, bins, model)


def _fit_at_once(bins: Bins, model: PhaseModel | None) -> tuple[ExponentialFit, Index] | None:
    seen, cycle = np.unique(bins.cycle, return_inverse=True)
    if bins.t.size < seen.size + 3:
        return None
    begin = None if model is None else model.curvature
    return fit_exponentials(bins.t, bins.v, cycle, bins.n, bins.spread, curvature=begin), seen


def meet(fitted: Fitted, guess: Array) -> Array:
    """Sample index at which each phase meets the next, from ``guess``; NaN where they do not."""
    size = fitted.layout.size
    before, after = np.arange(size - 1), np.arange(1, size)
    x = guess.copy()
    reach = 0.5 * np.minimum(fitted.layout.length[:-1], fitted.layout.length[1:]) + 2.0
    for _ in range(8):
        v0, r0 = fitted.values_at(before, x)
        v1, r1 = fitted.values_at(after, x)
        with np.errstate(invalid="ignore", divide="ignore"):
            step = np.clip((v1 - v0) / (r0 - r1) / fitted.interval, -reach, reach)
        x = x + step
        if not np.any(np.abs(step) > 1e-7):
            break
    far = np.abs(x - guess) > 2.0 * reach
    return np.where(far | ~(r0 * r1 < 0), np.nan, x)


def layout_from(turns: Array, top: Mask, first: int, stop: int) -> Layout:
    """Phases between turns (sample indices, ascending), with what lies before the first and after the last."""
    cut = np.floor(turns).astype(np.int64) + 1
    begin = np.concatenate([[first], cut])
    end = np.concatenate([cut, [stop]])
    rising = np.concatenate([top[:1], ~top])
    whole = np.ones(begin.size, dtype=bool)
    whole[[0, -1]] = False
    return Layout(begin, end, rising, whole)


def guarded(layout: Layout, before: Array, after: Array) -> Layout:
    """The same phases with so many samples left out at the start and at the end of each."""
    return replace(
        layout,
        first=np.minimum(layout.first + before.astype(np.int64), layout.stop - 1),
        stop=np.maximum(layout.stop - after.astype(np.int64), layout.first + 1),
    )
