"""Corners of phases that meet: which samples belong to each phase, and where they turn."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Mask
from benchfit.cycle.ends import extend_ends, trim_ends
from benchfit.cycle.linear import Form, phase_form
from benchfit.cycle.phases import Corners, Fitted, Layout, fit_phases, guarded, layout_from, meet
from benchfit.cycle.residuals import end_guards
from benchfit.cycle.short import own_samples
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Turns

_ZONES = (0.08, 0.2)
_TESTED = 300


@dataclass(frozen=True, eq=False)
class Guards:
    """Samples left out at the start and at the end of the falling (False) and of the rising (True) phases."""

    left_out: dict[bool, tuple[int, int]]
    rings: bool = False

    @property
    def needed(self) -> bool:
        """Whether any are."""
        return any(a or b for a, b in self.left_out.values())


_NONE = Guards({True: (0, 0), False: (0, 0)})


@dataclass(frozen=True, eq=False)
class Met:
    """Fitted phases, the turns between them, and the samples left out at the start and the end of each kind."""

    fitted: Fitted
    index: Array
    top: Mask
    guards: Guards = _NONE

    def rounded(self, top: bool) -> bool:
        """Whether samples were left out about the upper (or lower) turns."""
        return self.guards.left_out[top][1] > 0 or self.guards.left_out[not top][0] > 0


def fit_corners(trace: Trace, turns: Turns) -> Met | None:
    """Fit, find where the phases meet, and fit again with the samples that belong to each."""
    layout = layout_from(turns.index, turns.top, 0, trace.size)
    layout = trim_ends(trace, layout, turns)
    inner = guarded(layout, _guard(layout), _guard(layout))
    fitted = fit_phases(trace, inner)
    index = turns.index
    for _ in range(8):
        if len(fitted.fits) < 2:
            return None
        met = meet(fitted, index)
        met = steadied(fitted, np.where(np.isnan(met), index, met), turns.top)
        moved, index = np.abs(met - index), met
        if fitted.layout is not inner and (np.quantile(moved, 0.98) < 0.02 or _settled(moved, layout)):
            break
        layout = layout_from(index, turns.top, layout.first[0], layout.stop[-1])
        layout = extend_ends(fitted, layout, trace, index, turns.top)
        layout = own_samples(fitted, layout, trace, trace.noise)
        fitted = fit_phases(trace, layout, begin=fitted)
    return Met(fitted, index, turns.top) if len(fitted.fits) == 2 else None


def steadied(fitted: Fitted, index: Array, top: Mask) -> Array:
    """Turns moved towards even spacing as far as their scatter is the record's noise and not the oscillator's.

    Only which samples belong to which phase is decided by them: a turn that follows its own samples' noise
    would pick them by that noise.
    """
    size = index.size
    if size < 16 or len(fitted.fits) < 2:
        return index
    number = np.arange(size) // 2
    line = np.empty(size)
    for side in (True, False):
        mine = top == side
        line[mine] = np.polynomial.polynomial.Polynomial.fit(number[mine], index[mine], 1)(number[mine])
    scatter = float(np.mean((index - line) ** 2))
    known = float(np.median(_turn_variance(fitted, index)))
    if not 0 < scatter < 3.0 * known:
        return index
    own = max(scatter - known, 0.0) / scatter
    return np.asarray(line + own * (index - line))


def _turn_variance(fitted: Fitted, index: Array) -> Array:
    """Variance of each turn (samples²) from the noise of the two phases that it parts."""
    before = np.arange(index.size)
    result = np.zeros(index.size)
    (_, r0), (_, r1) = fitted.values_at(before, index), fitted.values_at(before + 1, index)
    variance = sum(f.rss for f in fitted.fits.values()) / max(sum(f.freedom for f in fitted.fits.values()), 1)
    for phase in (before, before + 1):
        own = fitted.derivatives(phase, index)[0]
        information = fitted.information[phase]
        result += np.where(information > 0, own**2 * variance / np.where(information > 0, information, 1.0), np.inf)
    return result / ((r0 - r1) * fitted.interval) ** 2


def guard_corners(trace: Trace, met: Met) -> Met:
    """Leave samples out about the turns where, and only where, the residuals there ask for it."""
    guards = turn_guards(trace, met.fitted)
    return _refit(trace, met, guards) if guards.needed else met


def turn_guards(trace: Trace, fitted: Fitted) -> Guards:
    """Samples to leave out at the start and at the end of each kind of phase: 0 where its curve holds throughout."""
    whole = _some(fitted.layout)
    guards = {True: (0, 0), False: (0, 0)}
    open_kinds, rings = {True, False}, False
    for zone in _ZONES:
        depth = np.maximum(zone * whole.length, 1)
        inner = fit_phases(trace, guarded(whole, depth, depth), begin=fitted)
        for kind in sorted(open_kinds):
            if kind not in inner.fits:
                continue
            ends = end_guards(trace, inner, whole, kind, zone)
            if not ends.through:
                guards[kind] = (ends.before, ends.after)
                rings |= ends.rings
                open_kinds.discard(kind)
        if not open_kinds:
            break
    return Guards(guards, rings)


def _some(layout: Layout) -> Layout:
    """A few hundred whole phases, evenly spread, for tests of the residuals."""
    mine = np.flatnonzero(layout.whole & (layout.length >= 8))
    if mine.size > 2 * _TESTED:
        mine = mine[np.linspace(0, mine.size - 1, 2 * _TESTED).astype(int)]
    return Layout(layout.first[mine], layout.stop[mine], layout.rising[mine], layout.whole[mine])


def _refit(trace: Trace, met: Met, guards: Guards) -> Met:
    fitted, index = met.fitted, met.index
    for _ in range(2):
        layout = layout_from(index, met.top, fitted.layout.first[0], fitted.layout.stop[-1])
        before = np.where(layout.rising, guards.left_out[True][0], guards.left_out[False][0])
        after = np.where(layout.rising, guards.left_out[True][1], guards.left_out[False][1])
        before[0] = after[-1] = 0
        fitted = fit_phases(trace, guarded(layout, before, after), begin=fitted)
        found = meet(fitted, index)
        index = steadied(fitted, np.where(np.isnan(found), index, found), met.top)
    return Met(fitted, index, met.top, guards)


def _settled(moved: Array, layout: Layout) -> bool:
    """Whether the turns moved by next to nothing against the shorter of the phases that they part."""
    shorter = np.minimum(layout.length[:-1], layout.length[1:])
    return bool(np.quantile(moved / np.maximum(shorter, 1), 0.98) < 2e-4)


def _guard(layout: Layout) -> Array:
    return np.where(layout.length >= 8, np.ceil(0.06 * layout.length), np.where(layout.length >= 4, 1, 0))


def corners(fitted: Fitted, guess: Array) -> Corners:
    """Where neighbouring fitted phases meet."""
    layout = fitted.layout
    index = meet(fitted, guess)
    before = np.arange(layout.size - 1)
    good = np.flatnonzero(np.isfinite(index) & fitted.sound[:-1] & fitted.sound[1:])
    voltage = fitted.values_at(before[good], index[good])[0]
    return Corners(index[good], voltage, before[good], layout.rising[good])


def corner_forms(fitted: Fitted, corner: Corners, time: Array, voltage: Array) -> Form:
    """Σ (time·δt + voltage·δv) over corners, δt in s and δv in V."""
    _, r0 = fitted.values_at(corner.before, corner.index)
    _, r1 = fitted.values_at(corner.before + 1, corner.index)
    gap = r0 - r1
    left = phase_form(fitted, corner.before, corner.index, (-time - voltage * r1) / gap)
    right = phase_form(fitted, corner.before + 1, corner.index, (time + voltage * r0) / gap)
    return left + right


def extreme(trace: Trace, met: Met, corner: Corners, top: bool, noise: float) -> tuple[float, float] | None:
    """Extreme of the waveform about its upper or lower turns without its noise, with its u (V).

    None where the turns are sharp: there it is the corner itself. About rounded ones a low polynomial follows the
    mean of all cycles, aligned on the corners.
    """
    if not met.rounded(top):
        return None
    mine = np.flatnonzero(corner.top == top)
    if mine.size > _TESTED:
        mine = mine[np.linspace(0, mine.size - 1, _TESTED).astype(int)]
    reach = int(1.5 * max(met.guards.left_out[top][1], met.guards.left_out[not top][0])) + 3
    offsets = np.arange(-reach, reach + 1)
    index = np.round(corner.index[mine]).astype(np.int64)[:, None] + offsets
    inside = ((index >= 0) & (index < trace.size)).all(axis=1)
    if not inside.any():
        return None
    index = index[inside]
    x = ((index - corner.index[mine][inside][:, None]) / reach).ravel()
    columns = np.polynomial.legendre.legvander(np.clip(x, -1.1, 1.1), min(6, 2 * reach - 2))
    coefficients, *_ = np.linalg.lstsq(columns, trace.values[index].ravel(), rcond=None)
    grid = np.linspace(-1.0, 1.0, 401)
    curve = np.polynomial.legendre.legval(grid, coefficients)
    at = int(curve.argmax() if top else curve.argmin())
    row = np.polynomial.legendre.legvander(grid[at : at + 1], columns.shape[1] - 1)[0]
    spread = row @ np.linalg.pinv(columns.T @ columns) @ row
    return float(curve[at]), float(noise * np.sqrt(spread))
