"""Ramps with a flyback too short to be fitted: lamps, unijunctions, trigger diodes, reset ramps."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.gaps import Gaps, Threshold, censored_mean, find_gaps, rough_gaps
from benchfit.cycle.linear import Form, covariance, curvature_form, extra_form, phase_form
from benchfit.cycle.observed import Observed
from benchfit.cycle.period import fit_period
from benchfit.cycle.phases import Fitted, Layout, fit_phases, guarded
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Crossings

FEW = 4


def fast_direction(passages: Crossings) -> bool | None:
    """The direction (True: rising) whose passages take no more than a few samples, None where both are slow."""
    taken = passages.after - passages.before
    medians = {
        up: float(np.median(taken[passages.rising == up]))
        for up in (True, False)
        if np.any(passages.rising == up)
    }
    if len(medians) < 2:
        return None
    fast = min(medians, key=lambda up: medians[up])
    return fast if medians[fast] <= FEW - 1 and medians[not fast] >= 3 * medians[fast] else None


def fit_ramps(trace: Trace, passages: Crossings, fast: bool) -> tuple[Fitted, Gaps] | None:
    """Fit all ramps with the samples that are theirs."""
    gaps = rough_gaps(passages, fast)
    if gaps.last.size == 0:
        return None
    layout = _layout(trace, gaps, fast)
    fitted = fit_phases(trace, _guarded(layout), (not fast,))
    for _ in range(3):
        if not fitted.fits:
            return None
        fit = fitted.fits[not fast]
        sigma = float(np.sqrt(max(fit.variance, trace.resolution**2 / 12.0)))
        swing = float(np.ptp(fitted.values_at(np.arange(layout.size), layout.stop - 1.0)[0])) + _reach(fitted)
        gaps = find_gaps(trace, gaps, fitted, max(4.5 * sigma, 0.002 * swing))
        layout = _layout(trace, gaps, fast)
        fitted = fit_phases(trace, layout, (not fast,))
    return (fitted, gaps) if fitted.fits else None


def _reach(fitted: Fitted) -> float:
    layout = fitted.layout
    phase = np.arange(layout.size)
    ends = (
        fitted.values_at(phase, layout.stop - 1.0)[0] - fitted.values_at(phase, layout.first.astype(float))[0]
    )
    return float(np.nanmedian(np.abs(ends)))


def _layout(trace: Trace, gaps: Gaps, fast: bool) -> Layout:
    first = np.concatenate([[0], gaps.first])
    stop = np.concatenate([gaps.last + 1, [trace.size]])
    whole = np.ones(first.size, dtype=bool)
    whole[[0, -1]] = False
    return Layout(first, np.maximum(stop, first + 1), np.full(first.size, not fast), whole)


def _guarded(layout: Layout) -> Layout:
    before = np.where(layout.length >= 12, np.maximum(2, 0.05 * layout.length), 0)
    after = np.where(layout.length >= 12, 3, np.where(layout.length >= 4, 1, 0))
    before[0] = 0
    return guarded(layout, before, after)


def observe_ramps(fitted: Fitted, gaps: Gaps, fast: bool, noise: float, node: str) -> Observed | None:
    """Cycle constants of ramps; None with fewer than two turns."""
    joints = np.flatnonzero(fitted.sound[:-1] & fitted.sound[1:])
    if joints.size < 2:
        return None
    rising = not fast
    fit = fitted.fits[rising]
    variance = noise**2
    end = _threshold(fitted, gaps, joints, joints, variance)
    start = _threshold(fitted, gaps, joints, joints + 1, variance)
    instants, rates, spread = _shifts(fitted, joints, end.mean, start.mean, variance)
    number = np.arange(instants.size)
    phase = np.concatenate([joints[:1], joints + 1])
    period = fit_period(instants, number, np.zeros_like(number), spread)
    period_form = phase_form(fitted, phase, instants / fitted.interval, -period.weights / rates)
    model = fit.model
    r_end, r_start = (float(model.rate(np.array(x.mean))) for x in (end, start))
    ramp_time = float(model.time_to(end.mean, np.array([start.mean]))[0])
    ramp_time = min(ramp_time, period.period)
    sign = 1.0 if rising else -1.0
    share = ramp_time / period.period if rising else 1.0 - ramp_time / period.period
    share_form = extra_form(fitted, 1.0, -1.0) * (sign / period.period)
    end_form, end_extra = _corner_form(fitted, gaps, joints, joints, r_end, end, variance)
    start_form, start_extra = _corner_form(fitted, gaps, joints, joints + 1, r_start, start, variance)
    # ``extra`` is (upper, lower) in the order (end, start) of a ramp, whichever way it runs.
    forms = [
        period_form,
        share_form,
        end_form + extra_form(fitted, r_end, 0.0),
        start_form + extra_form(fitted, 0.0, r_start),
        curvature_form(fitted, rising),
    ]
    names = ["period", "charge_share", *(("upper", "lower") if rising else ("lower", "upper"))]
    names.append("charge_curvature" if rising else "discharge_curvature")
    cov = covariance(fitted, forms, {rising: variance}, np.array([end_extra, start_extra]))
    cov[0, 0] = max(period.u**2, cov[0, 0])
    values = np.array([period.period, share, end.mean, start.mean, model.curvature])
    turns = gaps.last[joints] * fitted.interval
    series = {"period": np.diff(instants)}
    return Observed(tuple(names), values, cov, turns, period.jitter, noise, series=series, node=node)


def _bounds(fitted: Fitted, gaps: Gaps, joints: Index, phase: Index) -> tuple[Array, Array]:
    """Voltages of the ramp at the samples that bound its turn: after its last, or before its first."""
    if phase[0] == joints[0]:
        at = gaps.last[joints].astype(float)
        other = at + 1.0
    else:
        other = gaps.first[joints].astype(float)
        at = other - 1.0
    return fitted.values_at(phase, at)[0], fitted.values_at(phase, other)[0]


def _threshold(fitted: Fitted, gaps: Gaps, joints: Index, phase: Index, variance: float) -> Threshold:
    a, b = _bounds(fitted, gaps, joints, phase)
    own = float(np.sqrt(np.median(variance / fitted.information[phase])))
    return censored_mean(np.minimum(a, b), np.maximum(a, b), own)


def _corner_form(
    fitted: Fitted,
    gaps: Gaps,
    joints: Index,
    phase: Index,
    rate: float,
    threshold: Threshold,
    variance: float,
) -> tuple[Form, float]:
    """The curve's own error at the turn, and the variance (s²) of the turn's instant that is left beside it."""
    index = (gaps.last[joints] + 0.5) if phase[0] == joints[0] else (gaps.first[joints] - 0.5)
    form = phase_form(fitted, phase, index, np.full(joints.size, 1.0 / joints.size))
    own = float(np.sum(variance * form.own**2 / np.where(fitted.information > 0, fitted.information, np.inf)))
    return form, max(threshold.u**2 - own, 0.0) / rate**2


def _shifts(
    fitted: Fitted, joints: Index, end: float, start: float, variance: float
) -> tuple[Array, Array, Array]:
    """Instants (s) at which the ramps pass their middle level, their rates there, and the instants' variances."""
    phase = np.concatenate([joints[:1], joints + 1])
    model = fitted.model(bool(fitted.layout.rising[0]))
    middle = 0.5 * (end + start)
    instants = fitted.middle[phase] * fitted.interval + model.time_to(middle, fitted.level[phase])
    rates = np.full(phase.size, float(model.rate(np.array(middle))))
    own, _ = fitted.derivatives(phase, instants / fitted.interval)
    return instants, rates, variance * own**2 / fitted.information[phase] / rates**2


def resolved(gaps: Gaps) -> bool:
    """Whether the flybacks hold enough samples to be fitted after all."""
    return float(np.median(gaps.between)) >= FEW


def relabelled(observed: Observed, turns: Array) -> Observed:
    """The same with other turning instants."""
    return replace(observed, turns=turns)
