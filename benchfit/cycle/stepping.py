"""Phases that begin with a step: gate pairs, series resistance; and a base that is held between its ramps."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.constants import PhaseFit
from benchfit.cycle.corners import Met, turn_guards
from benchfit.cycle.ends import begun, with_ends
from benchfit.cycle.gaps import Threshold, censored_mean
from benchfit.cycle.joints import Joints, clear_of, split
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
from benchfit.cycle.phase import ExponentialFit, PhaseModel
from benchfit.cycle.phases import Fitted, Layout, fit_phases, guarded
from benchfit.cycle.residuals import body_profile, poor_fit
from benchfit.cycle.scatter import mean_scatter
from benchfit.cycle.sequence import closed, put_in_order
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Crossings, find_turns

_FAST = 3


@dataclass(frozen=True, eq=False)
class Stepped:
    """Fitted phases with the joints between them."""

    fitted: Fitted
    joints: Joints
    held: bool


def observe_steps(trace: Trace, passages: Crossings) -> Observed | None:
    """Both directions are fitted, each from its own step; None where that cannot be done."""
    taken = passages.after - passages.before
    if np.median(taken) <= _FAST:
        # The steps themselves cross the band: each ends a phase of its own direction.
        found = fit_steps(trace, (passages.before + passages.after) / 2.0, passages.rising, None)
    else:
        turns = with_ends(trace, find_turns(trace, passages))
        found = fit_steps(trace, turns.index, turns.top, None)
    return None if found is None else constants(trace, found)


def steps_instead(trace: Trace, met: Met) -> Observed | None:
    """The constants with a step at every turn, where that explains the samples far better than corners do.

    Resistance in the capacitor's leg makes such steps. They must go inwards at both turns, the sum of squares
    must fall by more than the freedom to choose the turns takes anyway, and nothing may be left about the
    turns, as ringing leaves it.
    """
    found = fit_steps(trace, met.index, met.top, None)
    if found is None or len(found.fitted.fits) < 2:
        return None
    old = sum(f.rss for f in met.fitted.fits.values())
    new = sum(f.rss for f in found.fitted.fits.values())
    sigma2 = new / max(sum(f.freedom for f in found.fitted.fits.values()), 1)
    if old - new < sigma2 * (30.0 + 9.0 * met.index.size):
        return None
    if turn_guards(trace, found.fitted).needed:
        return None
    seen = constants(trace, found)
    if seen is None or "charge_start" not in seen.names:
        return None
    for outer, inner in (("upper", "discharge_start"), ("charge_start", "lower")):
        i, j = seen.names.index(outer), seen.names.index(inner)
        c = seen.covariance
        if not seen.values[i] - seen.values[j] > 4.0 * np.sqrt(max(c[i, i] + c[j, j] - 2.0 * c[i, j], 0.0)):
            return None
    return seen


def observe_held(trace: Trace, passages: Crossings) -> Observed | None:
    """Rising ramps that each begin with a kick down and end where the node is held."""
    holds = hold_ends(trace, passages)
    if holds is None:
        return None
    rough, top, level = holds
    found = fit_steps(trace, rough, top, level)
    return None if found is None else constants(trace, found)


def hold_ends(trace: Trace, passages: Crossings) -> tuple[Array, Array, float] | None:
    """Rough joints (end of ramp, kick, …), which of them are ends of a ramp, and the level of the hold (V)."""
    rises = np.flatnonzero(passages.rising[:-1])
    if rises.size < 1:
        return None
    starts, stops = passages.after[rises], passages.before[rises + 1] + 1
    tails = np.concatenate(
        [trace.values[(a + b) // 2 : b][:2000] for a, b in zip(starts[:50], stops[:50], strict=True)]
    )
    if tails.size == 0:
        return None
    level = float(np.median(tails))
    swing = level - trace.span[0]
    limit = level - max(4.0 * trace.noise, 0.02 * swing)
    above = np.flatnonzero(trace.values >= limit)
    if above.size == 0:
        return None
    ends = above[np.clip(np.searchsorted(above, starts), 0, above.size - 1)]
    kicks = (passages.before[~passages.rising] + passages.after[~passages.rising]) / 2.0
    rough = np.concatenate([ends.astype(float), kicks])
    top = np.concatenate([np.ones(ends.size, dtype=bool), np.zeros(kicks.size, dtype=bool)])
    order = np.argsort(rough, kind="stable")
    rough, top = rough[order], top[order]
    if np.any(top[1:] == top[:-1]):
        return None
    return rough, top, level


def fit_steps(trace: Trace, rough: Array, top: Array, level: float | None) -> Stepped | None:
    """Fit the phases between joints and find each joint by the split that both curves leave the least for."""
    last = np.floor(rough).astype(np.int64)
    joints = Joints(last, last + 1)
    layout = begun(trace, _layout(trace, joints, top))
    kinds = (True, False) if level is None else (True,)
    fitted = fit_phases(trace, guarded(layout, _guard(layout), _guard(layout)), kinds)
    for _ in range(4):
        if not all(k in fitted.fits for k in kinds):
            return None
        if level is not None:
            fitted = _with_hold(fitted, layout, level)
        reach = max(6, int(0.15 * np.median(layout.length[1:-1]))) if layout.size > 2 else 6
        sigma = float(np.sqrt(fitted.fits[True].variance))
        found = clear_of(
            trace, fitted, split(trace, fitted, joints.middle, reach), max(6.0 * sigma, 1e-3 * _swing(trace))
        )
        same = np.array_equal(found.last, joints.last) and np.array_equal(found.first, joints.first)
        joints = found
        layout = begun(trace, _layout(trace, joints, top))
        fitted = fit_phases(trace, layout, kinds, begin=fitted)
        if same:
            break
    if level is not None:
        fitted = _with_hold(fitted, layout, level)
    return Stepped(fitted, joints, level is not None)


def _swing(trace: Trace) -> float:
    return trace.span[1] - trace.span[0]


def _layout(trace: Trace, joints: Joints, top: Array) -> Layout:
    first = np.concatenate([[0], joints.first])
    stop = np.concatenate([joints.last + 1, [trace.size]])
    whole = np.ones(first.size, dtype=bool)
    whole[[0, -1]] = False
    return Layout(first, np.maximum(stop, first + 1), np.concatenate([top[:1], ~top]), whole)


def _guard(layout: Layout) -> Array:
    return np.where(layout.length >= 8, np.ceil(0.05 * layout.length) + 1, np.where(layout.length >= 4, 1, 0))


def _with_hold(fitted: Fitted, layout: Layout, level: float) -> Fitted:
    """The hold as a phase of its own that stays where it is."""
    mine = ~layout.rising
    levels = np.where(mine, level, fitted.level)
    size = int(mine.sum())
    flat = ExponentialFit(
        PhaseModel(level, 0.0, 0.0),
        np.full(size, level),
        np.full(size, np.inf),
        np.zeros((2, 2)),
        np.zeros((size, 2)),
        0.0,
        1,
    )
    information = np.where(mine, np.inf, fitted.information)
    middle = (layout.first + layout.stop - 1) / 2.0
    return replace(
        fitted,
        level=levels,
        information=information,
        sound=fitted.sound | mine,
        middle=np.where(mine, middle, fitted.middle),
        fits={**fitted.fits, False: flat},
    )


def constants(trace: Trace, found: Stepped) -> Observed | None:
    """Cycle constants of phases that begin with a step."""
    fitted, joints = found.fitted, found.joints
    ends = fitted.layout.rising[:-1]
    good = fitted.sound[:-1] & fitted.sound[1:]
    top, low = np.flatnonzero(ends & good), np.flatnonzero(~ends & good)
    if top.size == 0 or low.size == 0 or top.size + low.size < 3:
        return None
    real = {True: fitted.fits[True]} if found.held else fitted.fits
    rss, freedom = sum(f.rss for f in real.values()), sum(f.freedom for f in real.values())
    variance = float(rss / max(freedom, 1))
    variances = dict.fromkeys(fitted.fits, variance)
    upper = _threshold(fitted, joints, top, variance, before=True)
    # Where the node is held before, only the ramp's own start tells of the lower turn.
    lower = _threshold(fitted, joints, low, variance, before=not found.held)
    period, period_form = _period(fitted, joints, real, variance)
    parts: list[tuple[str, float, Form]] = [("period", period.period, period_form)]
    middles = joints.middle * trace.interval
    t_up, t_low = middles[top] + upper.shift, middles[low] + lower.shift
    share, share_variance = _share(t_up, t_low, bool(top[0] < low[0]), period.period)
    parts.append(("charge_share", share, extra_form(fitted, 1.0, -1.0) * (1.0 / period.period)))
    parts.append(("upper", upper.voltage, upper.form + extra_form(fitted, upper.rate, 0.0)))
    parts.append(("lower", lower.voltage, lower.form + extra_form(fitted, 0.0, lower.rate)))
    if not found.held:
        for name, these, side, shift, place in (
            ("charge_start", low, 1, lower.shift, (0.0, 1.0)),
            ("discharge_start", top, 1, upper.shift, (1.0, 0.0)),
        ):
            value, form, slope = _start(fitted, joints, these, side, shift)
            parts.append((name, value, form + extra_form(fitted, place[0] * slope, place[1] * slope)))
    for name, rising in (("charge_curvature", True), ("discharge_curvature", False)):
        if rising in real:
            parts.append((name, fitted.model(rising).curvature, shared_form(fitted, rising, 1)))
    names = tuple(p[0] for p in parts)
    cov = covariance(fitted, [p[2] for p in parts], variances, np.array([upper.variance, lower.variance]))
    cov[0, 0] = max(cov[0, 0], period.u**2)
    cov[1, 1] = max(cov[1, 1], share_variance)
    profiles = {k: p for k in real if (p := body_profile(trace, fitted, k)) is not None}
    cov = cov + structure_covariance(fitted, [p[2] for p in parts], profiles)
    values = np.array([p[1] for p in parts])
    extremes = _extremes(trace, found, names, values, cov)
    return Observed(
        names,
        values,
        cov,
        t_low,
        period.jitter,
        float(np.sqrt(variance)),
        *extremes,
        phases=_phase_fits(trace, found, names, values),
        remarks=poor_fit(profiles, values[2] - values[3]),
        series={"period": np.diff(t_low)},
        node=trace.node,
    )


def _extremes(
    trace: Trace, found: Stepped, names: tuple[str, ...], values: Array, cov: Array
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Highest and lowest voltage of the waveform without its noise, each with its u (V)."""
    known = {n: (float(v), float(u)) for n, v, u in zip(names, values, np.sqrt(np.diag(cov)), strict=True)}
    ends = [known[n] for n in ("upper", "lower", "charge_start", "discharge_start") if n in known]
    if found.held:
        ends.append((found.fitted.model(False).reference, trace.noise / np.sqrt(trace.size / 4.0)))
    return max(ends), min(ends)


@dataclass(frozen=True, eq=False)
class _Turn:
    """A turn: voltage (V), its rate (V/s), the shift of its instants from the joints' middles (s), variance (s²)."""

    voltage: float
    rate: float
    shift: float
    variance: float
    form: Form


def _threshold(fitted: Fitted, joints: Joints, these: Index, variance: float, before: bool) -> _Turn:
    """A common threshold from the bounds that the samples on both sides of the joints give."""
    phase = these if before else these + 1
    a = fitted.values_at(phase, joints.last[these].astype(float))[0]
    b = fitted.values_at(phase, joints.first[these].astype(float))[0]
    middle, rates = fitted.values_at(phase, joints.middle[these])
    information = fitted.information[phase]
    own = float(np.sqrt(np.median(variance / information)))
    found: Threshold = censored_mean(np.minimum(a, b), np.maximum(a, b), own)
    rate = float(rates.mean())
    form = phase_form(fitted, phase, joints.middle[these], np.full(these.size, 1.0 / these.size))
    spread = float(
        np.sum(variance * form.own[information_held(fitted)] ** 2 / fitted.information[information_held(fitted)])
    )
    return _Turn(
        found.mean, rate, (found.mean - float(middle.mean())) / rate, max(found.u**2 - spread, 0.0) / rate**2, form
    )


def information_held(fitted: Fitted) -> Array:
    """Phases whose level has an error of its own."""
    return np.asarray((fitted.information > 0) & np.isfinite(fitted.information))


def _start(fitted: Fitted, joints: Joints, these: Index, side: int, shift: float) -> tuple[float, Form, float]:
    """Voltage at which a phase starts, at the instants that its predecessor's end gives."""
    index = joints.middle[these] + shift / fitted.interval
    v, rates = fitted.values_at(these + side, index)
    form = phase_form(fitted, these + side, index, np.full(these.size, 1.0 / these.size))
    return float(v.mean()), form, float(rates.mean())


def _period(
    fitted: Fitted, joints: Joints, real: dict[bool, ExponentialFit], variance: float
) -> tuple[PeriodFit, Form]:
    layout = fitted.layout
    instants, rate = np.full(layout.size, np.nan), np.full(layout.size, np.nan)
    for kind, fit in real.items():
        mine = np.flatnonzero(fitted.sound & (layout.rising == kind))
        whole = mine[layout.whole[mine]]
        # Half-way through a whole phase; where there is none, the middle of what there is.
        level = float(np.median(fitted.level[whole if whole.size else mine]))
        instants[mine] = fitted.middle[mine] * fitted.interval + fit.model.time_to(level, fitted.level[mine])
        rate[mine] = fit.model.rate(np.array(level))
    good = np.flatnonzero(np.isfinite(instants))
    index = instants[good] / fitted.interval
    own, _ = fitted.derivatives(good, index)
    spread = variance * own**2 / fitted.information[good] / rate[good] ** 2
    rising = layout.rising[good]
    at, number = instants[good], (good + int(layout.rising[0])) // 2
    if rising.size > 1 and np.all(rising[1:] != rising[:-1]):
        at, number = closed(at, rising, put_in_order(at, rising).odd)
    period = fit_period(at, number, rising.astype(int), spread)
    return period, phase_form(fitted, good, index, -period.weights / rate[good])


def _share(t_up: Array, t_low: Array, up_first: bool, period: float) -> tuple[float, float]:
    """Mean rising time over the period, and the variance that the single cycles' scatter gives it."""
    ups = t_up[1:] if up_first else t_up
    count = min(ups.size, t_low.size)
    rises = ups[:count] - t_low[:count]
    share = float(rises.mean()) / period
    falls = (t_low[: t_up.size] - t_up[: t_low.size]) if up_first else (t_low[1:] - t_up[: t_low.size - 1])
    pairs = min(rises.size, falls.size)
    rest = (1 - share) * rises[:pairs] - share * falls[:pairs]
    return share, mean_scatter(rest, 1e-30) / period**2 if pairs > 2 else 0.0


def _phase_fits(trace: Trace, found: Stepped, names: tuple[str, ...], values: Array) -> tuple[PhaseFit, ...]:
    known = dict(zip(names, values, strict=True))
    rise = PhaseFit(
        trace.node,
        True,
        known.get("charge_start", known["lower"]),
        known["upper"],
        known["charge_curvature"],
        known["charge_share"] * known["period"],
    )
    if found.held:
        return (rise,)
    fall = PhaseFit(
        trace.node,
        False,
        known["discharge_start"],
        known["lower"],
        known["discharge_curvature"],
        (1.0 - known["charge_share"]) * known["period"],
    )
    return rise, fall
