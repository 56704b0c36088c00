"""Phases that meet: both directions can be fitted, and the cycle turns where they cross."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.linear import Form, covariance, curvature_form, phase_form
from benchfit.cycle.observed import Observed
from benchfit.cycle.period import PeriodFit, fit_period
from benchfit.cycle.phases import Fitted, Layout, fit_phases, guarded, layout_from, meet
from benchfit.cycle.residuals import end_guards
from benchfit.cycle.scatter import correlation, mean_scatter, student
from benchfit.cycle.short import own_samples
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Crossings, Turns, block_means, find_turns

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

_ZONES = (0.08, 0.2)
_TESTED = 300


@dataclass(frozen=True, eq=False)
class Corners:
    """Turns between neighbouring phases: sample index, voltage, and which phase comes before."""

    index: Array
    voltage: Array
    before: NDArray[np.int64]
    top: Mask


@dataclass(frozen=True, eq=False)
class Met:
    """Fitted phases, the turns between them, and the samples left out at the start and the end of each kind."""

    fitted: Fitted
    index: Array
    top: Mask
    guards: dict[bool, tuple[int, int]]

    def rounded(self, top: bool) -> bool:
        """Whether samples were left out about the upper (or lower) turns."""
        return self.guards[top][1] > 0 or self.guards[not top][0] > 0


def observe_meeting(trace: Trace, passages: Crossings) -> Observed | None:
    """Fit the phases of a timing node that turns without a step; None where nothing can be fitted."""
    met = fit_corners(trace, with_ends(trace, find_turns(trace, passages)))
    if met is None:
        return None
    met = guard_corners(trace, met)
    return constants(trace, met)


def with_ends(trace: Trace, turns: Turns) -> Turns:
    """Turns before the first and after the last passage, where the record shows one."""
    values = block_means(trace.values, turns.block)
    noise = trace.noise / np.sqrt(turns.block)
    index, top = turns.index, turns.top
    inside = (index + 0.5) / turns.block - 0.5
    heights = values[np.clip(np.round(inside).astype(int), 0, values.size - 1)]
    swing = float(abs(np.median(heights[top]) - np.median(heights[~top]))) if top.any() and (~top).any() else 0.0
    margin = max(6.0 * noise, 0.05 * swing)
    head = values[: int(inside[0])] * (-1.0 if top[0] else 1.0)
    tail = values[int(np.ceil(inside[-1])) + 1 :] * (-1.0 if top[-1] else 1.0)
    if head.size > 2 and head.max() - head[0] > margin:
        index = np.concatenate([[(int(head.argmax()) + 0.5) * turns.block - 0.5], index])
        top = np.concatenate([[not top[0]], top])
    if tail.size > 2 and tail.max() - tail[-1] > margin:
        place = int(np.ceil(inside[-1])) + 1 + int(tail.argmax())
        index = np.concatenate([index, [(place + 0.5) * turns.block - 0.5]])
        top = np.concatenate([top, [not top[-1]]])
    return Turns(index, top, turns.block)


def fit_corners(trace: Trace, turns: Turns) -> Met | None:
    """Fit, find where the phases meet, and fit again with the samples that belong to each."""
    layout = layout_from(turns.index, turns.top, 0, trace.size)
    layout = _trim_ends(trace, layout, turns)
    inner = guarded(layout, _guard(layout), _guard(layout))
    fitted = fit_phases(trace, inner)
    index = turns.index
    for _ in range(8):
        if len(fitted.fits) < 2:
            return None
        met = meet(fitted, index)
        moved = np.abs(np.where(np.isnan(met), 0.0, met - index))
        index = np.where(np.isnan(met), index, met)
        if fitted.layout is not inner and (np.quantile(moved, 0.98) < 0.02 or _settled(moved, layout)):
            break
        layout = layout_from(index, turns.top, layout.first[0], layout.stop[-1])
        layout = _extend_ends(fitted, layout, trace, index, turns.top)
        layout = own_samples(fitted, layout, trace, trace.noise)
        fitted = fit_phases(trace, layout, begin=fitted)
    return Met(fitted, index, turns.top, {True: (0, 0), False: (0, 0)}) if len(fitted.fits) == 2 else None


def guard_corners(trace: Trace, met: Met) -> Met:
    """Leave samples out about the turns where, and only where, the residuals there ask for it."""
    whole = _some(met.fitted.layout)
    guards = {True: (0, 0), False: (0, 0)}
    open_kinds = {True, False}
    for zone in _ZONES:
        inner = fit_phases(trace, guarded(whole, *(2 * [np.maximum(zone * whole.length, 1)])), begin=met.fitted)
        for kind in sorted(open_kinds):
            if kind not in inner.fits:
                continue
            before, after, through = end_guards(trace, inner, whole, kind, zone)
            if not through:
                guards[kind] = (before, after)
                open_kinds.discard(kind)
        if not open_kinds:
            break
    if not any(a or b for a, b in guards.values()):
        return met
    return _refit(trace, met, guards)


def _some(layout: Layout) -> Layout:
    """A few hundred whole phases, evenly spread, for tests of the residuals."""
    mine = np.flatnonzero(layout.whole & (layout.length >= 8))
    if mine.size > 2 * _TESTED:
        mine = mine[np.linspace(0, mine.size - 1, 2 * _TESTED).astype(int)]
    return Layout(layout.first[mine], layout.stop[mine], layout.rising[mine], layout.whole[mine])


def _refit(trace: Trace, met: Met, guards: dict[bool, tuple[int, int]]) -> Met:
    fitted, index = met.fitted, met.index
    for _ in range(2):
        layout = layout_from(index, met.top, fitted.layout.first[0], fitted.layout.stop[-1])
        before = np.where(layout.rising, guards[True][0], guards[False][0])
        after = np.where(layout.rising, guards[True][1], guards[False][1])
        before[0] = after[-1] = 0
        fitted = fit_phases(trace, guarded(layout, before, after), begin=fitted)
        found = meet(fitted, index)
        index = np.where(np.isnan(found), index, found)
    return Met(fitted, index, met.top, guards)


def _settled(moved: Array, layout: Layout) -> bool:
    """Whether the turns moved by next to nothing against the shorter of the phases that they part."""
    shorter = np.minimum(layout.length[:-1], layout.length[1:])
    return bool(np.quantile(moved / np.maximum(shorter, 1), 0.98) < 2e-4)


def _guard(layout: Layout) -> Array:
    return np.where(layout.length >= 8, np.ceil(0.06 * layout.length), np.where(layout.length >= 4, 1, 0))


def _trim_ends(trace: Trace, layout: Layout, turns: Turns) -> Layout:
    """Leave out what lies before the first phase's and after the last phase's own extreme."""
    first, stop = layout.first.copy(), layout.stop.copy()
    values = block_means(trace.values[: stop[0]], turns.block) * (1.0 if layout.rising[0] else -1.0)
    if values.size > 1:
        first[0] = int(values.argmin()) * turns.block
    values = block_means(trace.values[first[-1] :], turns.block) * (-1.0 if layout.rising[-1] else 1.0)
    if values.size > 1:
        stop[-1] = min(trace.size, first[-1] + (int(values.argmin()) + 1) * turns.block)
    return Layout(first, np.maximum(stop, first + 1), layout.rising, layout.whole)


def _extend_ends(fitted: Fitted, layout: Layout, trace: Trace, index: Array, top: Mask) -> Layout:
    """Let the first and the last phase reach as far as their curves stay within the cycle's corners."""
    before = np.arange(index.size)
    heights = fitted.values_at(before, index)[0]
    upper, lower = np.nanmedian(heights[top]), np.nanmedian(heights[~top])
    first, stop = layout.first.copy(), layout.stop.copy()
    for end in (0, layout.size - 1):
        if not fitted.sound[end]:
            continue
        rising = bool(layout.rising[end])
        target = (lower if rising else upper) if end == 0 else (upper if rising else lower)
        reach = fitted.model(rising).time_to(target, fitted.level[end : end + 1])[0] / trace.interval
        limit = fitted.middle[end] + reach
        if not np.isfinite(limit):
            continue
        if end == 0:
            first[0] = int(np.clip(np.ceil(limit), 0, stop[0] - 1))
        else:
            stop[-1] = int(np.clip(np.floor(limit) + 1, first[-1] + 1, trace.size))
    return Layout(first, stop, layout.rising, layout.whole)


def noise_variance(fitted: Fitted) -> float:
    """Variance of a sample (V²) from what all phases leave."""
    rss = sum(f.rss for f in fitted.fits.values())
    return float(rss / max(sum(f.freedom for f in fitted.fits.values()), 1))


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


def constants(trace: Trace, met: Met) -> Observed | None:
    """Cycle constants of the fitted phases."""
    fitted = met.fitted
    variance = noise_variance(fitted)
    corner = corners(fitted, met.index)
    top, low = np.flatnonzero(corner.top), np.flatnonzero(~corner.top)
    if top.size == 0 or low.size == 0 or corner.index.size < 3:
        return None
    names: list[str] = []
    values: list[float] = []
    forms: list[Form] = []

    def add(name: str, value: float, form: Form) -> None:
        names.append(name)
        values.append(value)
        forms.append(form)

    period, period_form = _period(fitted, corner, variance)
    add("period", period.period, period_form)
    share, share_form = _share(fitted, corner)
    add("charge_share", share, share_form)
    for name, these in (("upper", top), ("lower", low)):
        weight = np.zeros(corner.index.size)
        weight[these] = 1.0 / these.size
        add(name, float(weight @ corner.voltage), corner_forms(fitted, corner, 0.0 * weight, weight))
    for name, rising in (("charge_curvature", True), ("discharge_curvature", False)):
        add(name, fitted.model(rising).curvature, curvature_form(fitted, rising))
    variance *= student(sum(f.freedom for f in fitted.fits.values())) ** 2
    cov = covariance(fitted, forms, variance)
    cov = cov + _scatter(fitted, corner, cov, share, variance, period.u)
    return Observed(
        tuple(names),
        np.array(values),
        cov,
        corner.index[~corner.top] * fitted.interval,
        period.jitter,
        float(np.sqrt(noise_variance(fitted))),
    )


def _scatter(fitted: Fitted, corner: Corners, cov: Array, share: float, variance: float, u_period: float) -> Array:
    """What jitter of the cycles adds to the covariance of (period, charge_share, upper, lower)."""
    result = np.zeros_like(cov)
    cycles = Cycles.of(fitted, corner, share)
    extra = np.zeros(4)
    extra[0] = max(u_period**2 - cov[0, 0], 0.0)
    if cycles is not None:
        noise = cycles.noise(fitted, variance)
        for i in (1, 2, 3):
            extra[i] = mean_scatter(cycles.samples[:, i], float(noise[i, i]))
        extra[1] /= float(cycles.samples[:, 0].mean()) ** 2
        rho = correlation(cycles.samples, noise)
    else:
        rho = np.eye(4)
    size = np.sqrt(extra)
    result[:4, :4] = rho * np.outer(size, size)
    return result


@dataclass(frozen=True, eq=False)
class Cycles:
    """Single cycles from lower to lower turn: period, (1 − share)·rise − share·fall, upper, lower (s, s, V, V)."""

    first: NDArray[np.int64]
    samples: Array
    corner: Corners
    share: float

    @staticmethod
    def of(fitted: Fitted, corner: Corners, share: float) -> Cycles | None:
        """The whole cycles among the corners, None where there are fewer than two."""
        steps = np.diff(corner.before)
        first = np.flatnonzero((steps[:-1] == 1) & (steps[1:] == 1) & ~corner.top[:-2])
        if first.size < 2:
            return None
        t = corner.index * fitted.interval
        rise, fall = t[first + 1] - t[first], t[first + 2] - t[first + 1]
        samples = np.stack(
            [rise + fall, (1 - share) * rise - share * fall, corner.voltage[first + 1], corner.voltage[first]], axis=1
        )
        return Cycles(first, samples, corner, share)

    def noise(self, fitted: Fitted, variance: float) -> Array:
        """Covariance of a single cycle's quantities from the record's noise alone, of a typical cycle."""
        middle = self.first[self.first.size // 2]
        index, before = self.corner.index[middle : middle + 3], self.corner.before[middle : middle + 3]
        _, r0 = fitted.values_at(before, index)
        _, r1 = fitted.values_at(before + 1, index)
        own0, own1 = fitted.derivatives(before, index)[0], fitted.derivatives(before + 1, index)[0]
        # Each turn's time and voltage by the own errors of the phase before and of the phase after it.
        time, volt = np.zeros((3, 4)), np.zeros((3, 4))
        for j in range(3):
            gap = r0[j] - r1[j]
            time[j, j], time[j, j + 1] = -own0[j] / gap, own1[j] / gap
            volt[j, j], volt[j, j + 1] = -r1[j] * own0[j] / gap, r0[j] * own1[j] / gap
        rise, fall = time[1] - time[0], time[2] - time[1]
        form = np.stack([rise + fall, (1 - self.share) * rise - self.share * fall, volt[1], volt[0]])
        phases = np.arange(before[0], before[0] + 4)
        return np.asarray((form * (variance / fitted.information[phases])) @ form.T)


def _period(fitted: Fitted, corner: Corners, variance: float) -> tuple[PeriodFit, Form]:
    """The phases' shifts as instants of their own: each phase's passage through the middle level."""
    layout = fitted.layout
    middle_level = 0.5 * (corner.voltage[corner.top].mean() + corner.voltage[~corner.top].mean())
    instants = np.full(layout.size, np.nan)
    rate = np.full(layout.size, np.nan)
    for kind, fit in fitted.fits.items():
        mine = np.flatnonzero(fitted.sound & (layout.rising == kind))
        instants[mine] = fitted.middle[mine] * fitted.interval + fit.model.time_to(middle_level, fitted.level[mine])
        rate[mine] = fit.model.rate(np.array(middle_level))
    good = np.flatnonzero(np.isfinite(instants))
    number = (good + int(layout.rising[0])) // 2
    own, _ = fitted.derivatives(good, instants[good] / fitted.interval)
    spread = variance * own**2 / fitted.information[good] / rate[good] ** 2
    period = fit_period(instants[good], number, layout.rising[good].astype(int), spread)
    return period, phase_form(fitted, good, instants[good] / fitted.interval, -period.weights / rate[good])


def _share(fitted: Fitted, corner: Corners) -> tuple[float, Form]:
    """Mean rising time over mean rising plus mean falling time, from neighbouring corners."""
    neighbours = np.flatnonzero(np.diff(corner.before) == 1)
    rises = neighbours[~corner.top[neighbours]]
    falls = neighbours[corner.top[neighbours]]
    lengths = np.diff(corner.index) * fitted.interval
    charge, discharge = float(lengths[rises].mean()), float(lengths[falls].mean())
    total = charge + discharge
    weight = np.zeros(corner.index.size)
    for these, factor in ((rises, discharge / total**2), (falls, -charge / total**2)):
        np.add.at(weight, these + 1, factor / these.size)
        np.add.at(weight, these, -factor / these.size)
    return charge / total, corner_forms(fitted, corner, weight, 0.0 * weight)
