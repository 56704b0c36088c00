"""Ramps with a flyback too short to be fitted: lamps, unijunctions, trigger diodes, reset ramps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.conditions import irregularities
from benchfit.cycle.constants import PhaseFit
from benchfit.cycle.ends import begun, follows, started_beyond
from benchfit.cycle.gaps import Gaps, Threshold, censored_mean, find_gaps, rough_gaps
from benchfit.cycle.linear import (
    Form,
    covariance,
    extra_form,
    phase_form,
    shared_form,
    structure_covariance,
)
from benchfit.cycle.observed import Observed
from benchfit.cycle.period import PeriodFit, fit_period
from benchfit.cycle.phases import Fitted, Layout, fit_phases, guarded
from benchfit.cycle.residuals import Profile, body_profile, poor_fit
from benchfit.cycle.scatter import correlation, student
from benchfit.cycle.sequence import Sequence, evened, odd_periods
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Crossings

FEW = 4


def fast_direction(passages: Crossings) -> bool | None:
    """The direction (True: rising) whose passages take no more than a few samples, None where both are slow."""
    taken = passages.after - passages.before
    medians = {
        up: float(np.median(taken[passages.rising == up])) for up in (True, False) if np.any(passages.rising == up)
    }
    if len(medians) < 2:
        return None
    fast = min(medians, key=lambda up: medians[up])
    return fast if medians[fast] <= FEW - 1 and medians[not fast] >= 3 * medians[fast] else None


@dataclass(frozen=True, eq=False)
class Ramps:
    """Fitted ramps, the gaps between them, and which way the flyback goes."""

    fitted: Fitted
    gaps: Gaps
    fast: bool

    @property
    def resolved(self) -> bool:
        """Whether the flybacks hold enough samples to be fitted after all."""
        return float(np.median(self.gaps.between)) >= FEW


def fit_ramps(trace: Trace, passages: Crossings, fast: bool) -> Ramps | None:
    """Fit all ramps with the samples that are theirs."""
    gaps = rough_gaps(passages, fast)
    if gaps.last.size == 0:
        return None
    layout = begun(trace, _layout(trace, gaps, fast, 0, trace.size))
    fitted = fit_phases(trace, _guarded(layout), (not fast,))
    for _ in range(3):
        if not fitted.fits:
            return None
        fit = fitted.fits[not fast]
        sigma = float(np.sqrt(max(fit.variance, trace.resolution**2 / 12.0)))
        swing = _reach(fitted)
        gaps = find_gaps(trace, gaps, fitted, max(4.5 * sigma, 0.002 * swing))
        first = follows(fitted, trace, 0, int(layout.first[0]), 0, swing, 0.0)
        layout = _layout(trace, gaps, fast, first, trace.size)
        fitted = fit_phases(trace, layout, (not fast,), begin=fitted)
    return Ramps(fitted, gaps, fast) if fitted.fits else None


def _reach(fitted: Fitted) -> float:
    layout = fitted.layout
    phase = np.arange(layout.size)
    ends = fitted.values_at(phase, layout.stop - 1.0)[0] - fitted.values_at(phase, layout.first.astype(float))[0]
    return float(np.nanmedian(np.abs(ends)))


def _layout(trace: Trace, gaps: Gaps, fast: bool, begin: int, end: int) -> Layout:
    first = np.concatenate([[begin], gaps.first])
    stop = np.concatenate([gaps.last + 1, [end]])
    whole = np.ones(first.size, dtype=bool)
    whole[[0, -1]] = False
    return Layout(first, np.maximum(stop, first + 1), np.full(first.size, not fast), whole)


def _guarded(layout: Layout) -> Layout:
    before = np.where(layout.length >= 12, np.maximum(2, 0.05 * layout.length), 0)
    after = np.where(layout.length >= 12, 3, np.where(layout.length >= 4, 1, 0))
    before[0] = 0
    return guarded(layout, before, after)


def observe_ramps(trace: Trace, ramps: Ramps) -> Observed | None:
    """Cycle constants of ramps; None with fewer than two turns."""
    fitted, gaps, rising = ramps.fitted, ramps.gaps, not ramps.fast
    joints = np.flatnonzero(fitted.sound[:-1] & fitted.sound[1:])
    if joints.size < 2:
        return None
    fit = fitted.fits[rising]
    profile = body_profile(trace, fitted, rising)
    profiles = {} if profile is None else {rising: profile}
    variance = fit.variance * student(fit.freedom) ** 2 * (1.0 if profile is None else profile.colour)
    phase = np.concatenate([joints[:1], joints + 1])
    odd, missing, doubled = odd_periods(_passages(fitted, phase)[0])
    fine = joints[~np.concatenate([[False], odd])[: joints.size]]
    end = _threshold(fitted, gaps, fine, fine, variance)
    start = _threshold(fitted, gaps, joints, joints + 1, variance)
    instants, rates = _passages(fitted, phase)
    own, _ = fitted.derivatives(phase, instants / fitted.interval)
    spread = variance * own**2 / fitted.information[phase] / rates**2
    number = np.arange(phase.size)
    period = fit_period(evened(instants, odd), number, np.zeros_like(number), spread)
    model = fit.model
    r_end, r_start = (float(model.rate(np.array(x.mean))) for x in (end, start))
    ramp_time = min(float(model.time_to(end.mean, np.array([start.mean]))[0]), period.period)
    sign, share = (1.0 if rising else -1.0), ramp_time / period.period
    end_form, end_extra = _corner_form(fitted, gaps, fine, fine, r_end, end, variance)
    start_form, start_extra = _corner_form(fitted, gaps, joints, joints + 1, r_start, start, variance)
    # ``extra`` is (upper, lower) in the order (end, start) of a ramp, whichever way it runs.
    forms = [
        phase_form(fitted, phase, instants / fitted.interval, -period.weights / rates),
        extra_form(fitted, 1.0, -1.0) * (sign / period.period),
        end_form + extra_form(fitted, r_end, 0.0),
        start_form + extra_form(fitted, 0.0, r_start),
        shared_form(fitted, rising, 1),
    ]
    names = ["period", "charge_share", *(("upper", "lower") if rising else ("lower", "upper"))]
    names.append("charge_curvature" if rising else "discharge_curvature")
    cov = covariance(fitted, forms, {rising: variance}, np.array([end_extra, start_extra]))
    cov = cov + structure_covariance(fitted, forms, profiles)
    values = [period.period, share if rising else 1.0 - share, end.mean, start.mean, model.curvature]
    levels = _middles(fitted, gaps, fine)
    cov = cov + _jitter(period, cov, share * sign, levels, np.diff(instants), r_end * fitted.interval)
    if profile is not None and profile.bow_u > 0:
        names.append("charge_bow" if rising else "discharge_bow")
        values.append(profile.bow)
        cov = np.pad(cov, (0, 1))
        cov[-1, -1] = profile.bow_u**2
    return _observed(trace, ramps, names, np.array(values), cov, period, profiles, (missing, doubled))


def _observed(
    trace: Trace,
    ramps: Ramps,
    names: list[str],
    values: Array,
    cov: Array,
    period: PeriodFit,
    profiles: dict[bool, Profile],
    irregular: tuple[int, int],
) -> Observed:
    fitted, gaps, rising = ramps.fitted, ramps.gaps, not ramps.fast
    known = dict(zip(names, values, strict=True))
    u = dict(zip(names, np.sqrt(np.diag(cov)), strict=True))
    start, end = (known["lower"], known["upper"]) if rising else (known["upper"], known["lower"])
    fit = fitted.fits[rising]
    ratio = 1.0 if not profiles or profiles[rising].sigma == 0 else np.sqrt(fit.variance) / profiles[rising].sigma
    length = known["charge_share"] if rising else 1.0 - known["charge_share"]
    drawn = PhaseFit(
        trace.node,
        rising,
        float(start),
        float(end),
        fit.model.curvature,
        float(length * known["period"]),
        max(float(ratio), 1.0),
    )
    order = Sequence(np.empty(0, dtype=np.int64), np.empty(0, dtype=bool), 0, 1.0, *irregular)
    begin = float(fitted.values_at(np.zeros(1, dtype=np.int64), fitted.layout.first[:1].astype(float))[0][0])
    remarks = poor_fit(profiles, end - start) + tuple(irregularities(trace.node, order))
    remarks += tuple(started_beyond(trace, begin, rising, known["lower"], known["upper"]))
    instants = _passages(fitted, np.flatnonzero(fitted.sound))[0]
    sigma = [p.sigma for p in profiles.values() if p.structure > 0]
    return Observed(
        tuple(names),
        values,
        cov,
        (gaps.first if rising else gaps.last) * fitted.interval,
        period.jitter,
        float(sigma[0] if sigma else np.sqrt(fit.variance)),
        (float(known["upper"]), float(u["upper"])),
        (float(known["lower"]), float(u["lower"])),
        (drawn,),
        remarks,
        {"period": np.diff(instants)},
        node=trace.node,
    )


def _middles(fitted: Fitted, gaps: Gaps, joints: Index) -> Array:
    """Each ramp's own voltage in the middle of the gap at its end."""
    return fitted.values_at(joints, gaps.last[joints] + 0.5)[0]


def _jitter(period: PeriodFit, cov: Array, share: float, levels: Array, periods: Array, step: float) -> Array:
    """What the oscillator's own jitter adds: the ramp takes all of it, the flyback none."""
    result = np.zeros_like(cov)
    size = np.sqrt(max(period.u**2 - cov[0, 0], 0.0))
    rest = np.sign(share) * (1.0 - abs(share)) / period.period
    direction = np.zeros(len(cov))
    direction[0], direction[1] = 1.0, rest
    result += size**2 * np.outer(direction, direction)
    count = min(levels.size - 1, periods.size)
    if count >= 8 and size > 0:
        # The k-th interval between ramps ends with the (k + 1)-th ramp's turn.
        samples = np.stack([periods[:count], levels[1 : count + 1]], axis=1)
        noise = np.diag([2.0 * cov[0, 0], step**2 / 12.0])
        rho = correlation(samples, noise)[0, 1]
        result[0, 2] = result[2, 0] = rho * size * np.sqrt(cov[2, 2])
    return result


def _passages(fitted: Fitted, phase: Index) -> tuple[Array, Array]:
    """Instants (s) at which ramps pass a level half-way up all of them, and their rates there (V/s)."""
    model = fitted.model(bool(fitted.layout.rising[0]))
    whole = phase[fitted.layout.whole[phase]]
    middle = float(np.median(fitted.level[whole if whole.size else phase]))
    instants = fitted.middle[phase] * fitted.interval + model.time_to(middle, fitted.level[phase])
    return instants, np.full(phase.size, float(model.rate(np.array(middle))))


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
