"""Phases that meet: both directions can be fitted, and the cycle turns where they cross."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.linear import Form, covariance, curvature_form, phase_form
from benchfit.cycle.observed import Observed
from benchfit.cycle.period import PeriodFit, fit_period
from benchfit.cycle.phases import Fitted, Layout, fit_phases, guarded, layout_from, meet
from benchfit.cycle.scatter import correlation, mean_scatter, student
from benchfit.cycle.short import own_samples
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Crossings, Turns, block_means, find_turns

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Corners:
    """Turns between neighbouring phases: sample index, voltage, and which phase comes before."""

    index: Array
    voltage: Array
    before: NDArray[np.int64]
    top: Mask


def observe_meeting(trace: Trace, passages: Crossings) -> Observed | None:
    """Fit the phases of a timing node that turns without a step; None where nothing can be fitted."""
    turns = with_ends(trace, find_turns(trace, passages))
    fitted = fit_corners(trace, turns)
    if fitted is None:
        return None
    return constants(fitted, noise_variance(fitted))


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


def fit_corners(trace: Trace, turns: Turns) -> Fitted | None:
    """Fit, find where the phases meet, and fit again with the samples that belong to each."""
    layout = layout_from(turns.index, turns.top, 0, trace.size)
    layout = _trim_ends(trace, layout, turns)
    inner = guarded(layout, _guard(layout), _guard(layout))
    fitted = fit_phases(trace, inner)
    index = turns.index
    for _ in range(4):
        if len(fitted.fits) < 2:
            return None
        met = meet(fitted, index)
        moved = np.abs(np.where(np.isnan(met), 0.0, met - index))
        index = np.where(np.isnan(met), index, met)
        if fitted.layout is not inner and np.mean(moved) < 0.1 * np.sqrt(np.mean(layout.length)) * 0.1:
            break
        layout = layout_from(index, turns.top, layout.first[0], layout.stop[-1])
        layout = _extend_ends(fitted, layout, trace, index, turns.top)
        layout = own_samples(fitted, layout, trace, trace.noise)
        fitted = fit_phases(trace, layout, begin=fitted)
    return fitted if len(fitted.fits) == 2 else None


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


def corners(fitted: Fitted) -> Corners:
    """Where neighbouring fitted phases meet."""
    layout = fitted.layout
    index = meet(fitted, layout.stop[:-1] - 0.5)
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


def constants(fitted: Fitted, variance: float) -> Observed | None:
    """Cycle constants of the fitted phases."""
    corner = corners(fitted)
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
