"""Phases that meet: both directions can be fitted, and the cycle turns where they cross."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Mask
from benchfit.cycle.closure import close_cycle, constants_of
from benchfit.cycle.conditions import irregularities
from benchfit.cycle.constants import PhaseFit
from benchfit.cycle.corners import Met, corner_forms, corners, extreme, fit_corners, guard_corners
from benchfit.cycle.cycles import Cycles
from benchfit.cycle.ends import started, with_ends
from benchfit.cycle.linear import Form, covariance, phase_form, shared_form, structure_covariance
from benchfit.cycle.observed import Observed
from benchfit.cycle.period import PeriodFit, fit_period
from benchfit.cycle.phases import Corners, Fitted
from benchfit.cycle.residuals import Profile, body_profile, poor_fit
from benchfit.cycle.scatter import correlation, mean_scatter, student
from benchfit.cycle.sequence import Sequence, closed, put_in_order
from benchfit.cycle.spikes import without_spikes
from benchfit.cycle.stepping import steps_instead
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Turns
from benchfit.errors import Remark


@dataclass(frozen=True, eq=False)
class _View:
    """A fit with all that the constants are drawn from.

    ``variance`` is that of a sample (V²) of each kind, widened for slow noise; ``order`` tells the regular
    intervals between the corners.
    """

    trace: Trace
    met: Met
    corner: Corners
    order: Sequence
    profiles: dict[bool, Profile]
    variance: dict[bool, float]
    spikes: int = 0

    @property
    def fitted(self) -> Fitted:
        return self.met.fitted


def observe_meeting(trace: Trace, turns: Turns) -> Observed | None:
    """Fit the phases of a timing node that turns without a step; None where there is no full period."""
    met = fit_corners(trace, with_ends(trace, turns))
    if met is None:
        return None
    trace, met, spikes = without_spikes(trace, met)
    plain = met
    met = guard_corners(trace, met)
    if met.guards.needed and (stepped := steps_instead(trace, plain)) is not None:
        return stepped
    corner = corners(met.fitted, met.index)
    if (
        not (corner.top.any() and (~corner.top).any())
        or max(np.bincount(met.fitted.layout.rising[met.fitted.sound])) < 2
    ):
        return None
    profiles = {k: p for k in met.fitted.fits if (p := body_profile(trace, met.fitted, k)) is not None}
    order = put_in_order(corner.index, ~corner.top)
    return _constants(_View(trace, met, corner, order, profiles, _variances(met.fitted, profiles), spikes))


def noise_variance(fitted: Fitted) -> float:
    """Variance of a sample (V²) from what all phases leave."""
    rss = sum(f.rss for f in fitted.fits.values())
    return float(rss / max(sum(f.freedom for f in fitted.fits.values()), 1))


def _variances(fitted: Fitted, profiles: dict[bool, Profile]) -> dict[bool, float]:
    freedom = sum(f.freedom for f in fitted.fits.values())
    base = noise_variance(fitted) * student(freedom) ** 2
    return {kind: base * (profiles[kind].colour if kind in profiles else 1.0) for kind in fitted.fits}


def _constants(view: _View) -> Observed | None:
    """Cycle constants of the fitted phases."""
    fitted, corner = view.fitted, view.corner
    upper, lower = (_level_weights(view, top) for top in (True, False))
    heights = [float(w @ corner.voltage) for w in (upper, lower)]
    period, period_form = _period(view, *heights)
    still = np.zeros(corner.index.size)
    forms = [period_form, *(corner_forms(fitted, corner, still, w) for w in (upper, lower))]
    seven = [period.period, *heights]
    for rising in (True, False):
        seven += [fitted.model(rising).slope, fitted.model(rising).curvature]
        forms += [shared_form(fitted, rising, 0), shared_form(fitted, rising, 1)]
    models = fitted.model(True), fitted.model(False)
    cov = covariance(fitted, forms, view.variance)
    slack = 2.0 * (2.0 * period.jitter[0] / fitted.layout.size) ** 2
    x, closed_cov = close_cycle(np.array(seven), cov, slack, *models)
    values, jacobian = constants_of(x, *models, cov)
    cov = jacobian @ closed_cov @ jacobian.T
    jitter, series = _scatter(view, cov, float(values[1]), period.u)
    cov = cov + jitter + jacobian @ structure_covariance(fitted, forms, view.profiles) @ jacobian.T
    names = ["period", "charge_share", "upper", "lower", "charge_curvature", "discharge_curvature"]
    names, values_array, cov = _with_bows(view, names, values, cov)
    ends = {}
    for top, name in ((True, "upper"), (False, "lower")):
        i = names.index(name)
        plain = (float(values_array[i]), float(np.sqrt(cov[i, i])))
        ends[top] = extreme(view.trace, view.met, corner, top, np.sqrt(noise_variance(fitted))) or plain
    starts = corner.index[~corner.top] if (~corner.top).any() else corner.index
    return Observed(
        tuple(names),
        values_array,
        cov,
        starts * fitted.interval,
        period.jitter,
        _sample_noise(view),
        ends[True],
        ends[False],
        _phase_fits(view, values_array, names),
        poor_fit(view.profiles, values_array[2] - values_array[3]) + _irregular(view),
        series,
        float(jitter[1, 1]),
        view.trace.node,
    )


def _sample_noise(view: _View) -> float:
    """Noise of a sample (V rms): of neighbours where structure would pass for noise, else of all residuals."""
    sigma = [p.sigma for p in view.profiles.values() if p.structure > 0]
    return float(np.sqrt(noise_variance(view.fitted))) if not sigma else float(min(sigma))


def _irregular(view: _View) -> tuple[Remark, ...]:
    node = view.trace.node
    remarks = irregularities(node, view.order) + started(view.trace, view.fitted, view.corner)
    if view.spikes:
        remarks.append(Remark("glitches", f"{node}: {view.spikes} samples stand out as spikes; they are left out"))
    if view.met.guards.rings:
        longest = max(max(g) for g in view.met.guards.left_out.values()) * view.trace.interval
        says = f"{node} rings after its turns: up to {longest:.2g} s are left out of the fit; use a shorter ground lead"
        remarks.append(Remark("ringing", says))
    return tuple(remarks)


def _level_weights(view: _View, top: bool) -> Array:
    """Equal weights of the corners of one kind, those at the end of an irregular phase left out."""
    mine = view.corner.top == top
    after_odd = np.concatenate([[False], view.order.odd]) if view.order.odd.size == mine.size - 1 else ~mine
    fine = mine & ~after_odd
    chosen = fine if fine.any() else mine
    return np.asarray(chosen / chosen.sum())


def _scatter(view: _View, cov: Array, share: float, u_period: float) -> tuple[Array, dict[str, Array]]:
    """What jitter of the cycles adds to the covariance of (period, charge_share, upper, lower), and the cycles."""
    result = np.zeros_like(cov)
    cycles = Cycles.of(view.fitted, view.corner, share, view.order.odd)
    extra = np.zeros(4)
    extra[0] = max(u_period**2 - cov[0, 0], 0.0)
    rho, series = np.eye(4), {}
    if cycles is not None:
        noise = cycles.noise(view.fitted, view.variance)
        for i in (1, 2, 3):
            extra[i] = mean_scatter(cycles.samples[:, i], float(noise[i, i]))
        extra[1] /= float(cycles.samples[:, 0].mean()) ** 2
        rho = correlation(cycles.samples, noise)
        series = {name: cycles.samples[:, i] for name, i in (("period", 0), ("upper", 2), ("lower", 3))}
    size = np.sqrt(extra)
    result[:4, :4] = rho * np.outer(size, size)
    return np.asarray(result), series


def _period(view: _View, upper: float, lower: float) -> tuple[PeriodFit, Form]:
    """The phases' shifts as instants of their own: each phase's passage through the middle level."""
    fitted, layout = view.fitted, view.fitted.layout
    middle_level = 0.5 * (upper + lower)
    instants, rate, sigma2 = (np.full(layout.size, np.nan) for _ in range(3))
    for kind, fit in fitted.fits.items():
        mine = np.flatnonzero(fitted.sound & (layout.rising == kind))
        passage = fit.model.time_to(middle_level, fitted.level[mine])
        instants[mine] = fitted.middle[mine] * fitted.interval + passage
        rate[mine] = fit.model.rate(np.array(middle_level))
        sigma2[mine] = view.variance[kind]
    good = np.flatnonzero(np.isfinite(instants))
    index = instants[good] / fitted.interval
    own, shared = fitted.derivatives(good, index)
    spread = sigma2[good] * own**2 / fitted.information[good] / rate[good] ** 2
    rising = layout.rising[good]
    at, number = instants[good], (good + int(layout.rising[0])) // 2
    if np.all(rising[1:] != rising[:-1]):
        at, number = closed(at, rising, put_in_order(at, rising).odd)
    period = fit_period(at, number, rising.astype(int), spread, _common(view, rising, shared, rate[good]))
    return period, phase_form(fitted, good, index, -period.weights / rate[good])


def _common(view: _View, rising: Mask, shared: Array, rate: Array) -> Array | None:
    """Covariance (s²) of a few instants from what their curves share: a phase cut off by the edge feels it most."""
    if rising.size > 64:
        return None
    result = np.zeros((rising.size, rising.size))
    for kind, fit in view.fitted.fits.items():
        row = np.where((rising == kind)[:, None], shared / rate[:, None], 0.0)
        result += view.variance[kind] * (row @ fit.shared @ row.T)
    return result


def _with_bows(view: _View, names: list[str], values: Array, cov: Array) -> tuple[list[str], Array, Array]:
    """The bows, whose errors are those that the fit has not taken: independent of all the rest."""
    for kind, name in ((True, "charge_bow"), (False, "discharge_bow")):
        profile = view.profiles.get(kind)
        if profile is None or profile.bow_u == 0.0:
            continue
        names = [*names, name]
        values = np.append(values, profile.bow)
        cov = np.pad(cov, (0, 1))
        cov[-1, -1] = profile.bow_u**2
    return names, values, cov


def _phase_fits(view: _View, values: Array, names: list[str]) -> tuple[PhaseFit, ...]:
    known = dict(zip(names, values, strict=True))
    result = []
    for rising in (True, False):
        fit, profile = view.fitted.fits[rising], view.profiles.get(rising)
        ends = (known["lower"], known["upper"])
        share = known["charge_share"] if rising else 1.0 - known["charge_share"]
        left = 1.0 if profile is None or profile.sigma == 0.0 else np.sqrt(fit.variance) / profile.sigma
        start, end = ends if rising else ends[::-1]
        result.append(
            PhaseFit(
                view.trace.node,
                rising,
                start,
                end,
                fit.model.curvature,
                share * known["period"],
                float(max(left, 1.0)),
            )
        )
    return tuple(result)
