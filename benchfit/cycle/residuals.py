"""What the fitted phases leave: structure over the phase, at its ends, and the colour of the noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.fold import Bins, gather
from benchfit.cycle.phase import basis, fit_levels
from benchfit.cycle.phases import Fitted, Layout
from benchfit.cycle.trace import Trace
from benchfit.errors import Remark

_BODY = 20
_BINS = 40
_PHASES = 600
_CLEAR = 4.5
_MATTERS = 1.5e-3


@dataclass(frozen=True, eq=False)
class Profile:
    """Residuals of one kind of phase over its course.

    Attributes
    ----------
    place : ndarray
        Position within the phase, −1 … 1.
    mean, error : ndarray
        Mean residual over the cycles and its standard error (V).
    structure : float
        Rms of the mean residual beyond its errors (V), 0 where it is not significant.
    sigma : float
        Noise of a sample as neighbouring bins differ by (V).
    colour : float
        Factor by which slow noise exceeds what white noise of ``sigma`` would give in means (variance; 1 = white).
    bow, bow_u : float
        Third Legendre coefficient of the residual and its standard uncertainty (V).
    """

    place: Array
    mean: Array
    error: Array
    structure: float
    sigma: float
    colour: float
    bow: float
    bow_u: float


def body_profile(trace: Trace, fitted: Fitted, kind: bool) -> Profile | None:
    """Profile of the whole phases of one kind; None where these are too short to have one."""
    bins = _gather_some(trace, fitted, kind)
    if bins is None:
        return None
    cycle = np.unique(bins.cycle, return_inverse=True)[1]
    model = fitted.model(kind)
    residual = fit_levels(model, bins.t, bins.v, cycle, bins.n, bins.spread).residual
    half = np.zeros(int(cycle[-1]) + 1)
    np.maximum.at(half, cycle, np.abs(bins.t) + 0.5 * bins.n * trace.interval)
    u = bins.t / half[cycle]
    place = np.clip(((u + 1.0) * 0.5 * _BODY).astype(int), 0, _BODY - 1)
    sigma, colour = _noise(bins, residual, cycle, place)
    n = np.bincount(place, bins.n, _BODY)
    held = n > 0.1 * n.max()
    mean = np.bincount(place, bins.n * residual, _BODY)[held] / n[held]
    error = sigma * np.sqrt(colour / n[held])
    degrees = float(np.maximum(np.count_nonzero(held) - 3, 1))
    chi2 = float(np.sum((mean / error) ** 2)) if np.all(error > 0) else 0.0
    found = bool(chi2 > degrees + _CLEAR * np.sqrt(2.0 * degrees) + 4.0)
    structure = float(np.sqrt(max(float(np.average(mean**2 - error**2, weights=n[held])), 0.0))) if found else 0.0
    bow, bow_u = _bow(bins, residual, u, fitted, kind, sigma * np.sqrt(colour))
    return Profile(
        np.linspace(-1, 1, 2 * _BODY + 1)[1::2][held], mean, error, structure, sigma, colour, bow, bow_u
    )


def _gather_some(trace: Trace, fitted: Fitted, kind: bool) -> Bins | None:
    layout = fitted.layout
    mine = np.flatnonzero((layout.rising == kind) & fitted.sound & layout.whole & (layout.length >= 8))
    if mine.size == 0:
        return None
    if mine.size > _PHASES:
        mine = mine[np.linspace(0, mine.size - 1, _PHASES).astype(int)]
    bins = gather(trace, layout.first[mine], layout.stop[mine], fitted.middle[mine], _BINS)
    return bins if bins.t.size > 8 else None


def _noise(bins: Bins, residual: Array, cycle: Index, place: Index) -> tuple[float, float]:
    """Sample noise from neighbouring bins, and how much more the residuals' slow part holds."""
    near = cycle[1:] == cycle[:-1]
    weight = 1.0 / (1.0 / bins.n[1:] + 1.0 / bins.n[:-1])
    steps = (np.diff(residual) ** 2 * weight)[near]
    if steps.size == 0:
        return 0.0, 1.0
    sigma2 = float(steps.mean())
    smooth = np.bincount(place, bins.n * residual, _BODY) / np.maximum(np.bincount(place, bins.n, _BODY), 1)
    rest = residual - smooth[place]
    # Four neighbouring bins at a time: white noise leaves each such mean σ²/n.
    block = np.arange(rest.size) // 4 + 100_000 * cycle
    ids, inverse, count = np.unique(block, return_inverse=True, return_counts=True)
    total = np.bincount(inverse, bins.n)
    means = np.bincount(inverse, bins.n * rest) / total
    full = count == 4
    blocks = int(full.sum())
    if blocks < 10 or sigma2 == 0.0:
        return float(np.sqrt(sigma2)), 1.0
    # Level, slope and curvature were fitted to each phase: that takes its share of the slow part.
    taken = 1.0 - min(0.9, (ids.size and 1.0) * (np.unique(cycle).size + 2.0) / blocks)
    ratio = float(np.mean(means[full] ** 2 * total[full]) / sigma2 / taken)
    clear = ratio > 1.0 + 4.0 * np.sqrt(2.0 / blocks)
    return float(np.sqrt(sigma2)), ratio if clear else 1.0


def _bow(
    bins: Bins, residual: Array, u: Array, fitted: Fitted, kind: bool, sigma: float
) -> tuple[float, float]:
    """Third Legendre coefficient of the residual; its variance knows what of that shape the fit has taken."""
    legendre = 0.5 * (5.0 * u**3 - 3.0 * u)
    weight = float(np.sum(bins.n * legendre**2))
    if weight == 0.0:
        return 0.0, 0.0
    bow = float(np.sum(bins.n * residual * legendre) / weight)
    decay, ramp, bend = basis(bins.t, bins.spread, fitted.model(kind).curvature)
    columns = np.stack([decay, ramp, bend - bins.t * decay * 0.0], axis=1) * np.sqrt(bins.n)[:, None]
    target = legendre * np.sqrt(bins.n)
    left = target - columns @ np.linalg.lstsq(columns, target, rcond=None)[0]
    return bow, float(sigma * np.sqrt(np.sum(left**2)) / weight)


def poor_fit(profiles: dict[bool, Profile], swing: float) -> tuple[Remark, ...]:
    """A remark where one exponential leaves structure that matters: over 0.15 % of the swing, or half the noise."""
    says = []
    for kind, profile in profiles.items():
        if profile.structure < min(_MATTERS * abs(swing), 0.5 * profile.sigma) or profile.structure == 0.0:
            continue
        worst = int(np.argmax(np.abs(profile.mean)))
        where = 50.0 * (profile.place[worst] + 1.0)
        bent = abs(profile.bow) > 0.7 * profile.structure * np.sqrt(7.0)
        shape = (
            "bends as a whole (a capacitance that changes with voltage does that)"
            if bent
            else (
                f"departs most at {where:.0f} % of its course (a clamp, or an input that draws current, does that)"
            )
        )
        says.append(
            f"the {'rising' if kind else 'falling'} phase is not one exponential: it {shape},"
            f" by {abs(profile.mean[worst]):.2g} V"
        )
    return (Remark("poor-fit", "; ".join(says)),) if says else ()


@dataclass(frozen=True)
class Ends:
    """Samples at the start and at the end of a kind's phases that do not follow the exponential between them.

    ``through``: the departure does not stop within the zone looked at, so that it is no matter of the ends;
    ``rings``: it goes to both sides.
    """

    before: int
    after: int
    through: bool
    rings: bool


def end_guards(trace: Trace, fitted: Fitted, layout: Layout, kind: bool, zone: float) -> Ends:
    """What departs from the exponential at the ends of a kind's phases.

    ``fitted`` is a fit that left a share ``zone`` of each phase out at both ends; ``layout`` has the whole phases.
    """
    mine = np.flatnonzero((layout.rising == kind) & fitted.sound & layout.whole & (layout.length >= 8))
    if mine.size == 0:
        return Ends(0, 0, False, False)
    if mine.size > _PHASES:
        mine = mine[np.linspace(0, mine.size - 1, _PHASES).astype(int)]
    depth = np.maximum((zone * layout.length[mine]).astype(np.int64), 1)
    guards, through, rings = [], False, False
    for at_start in (True, False):
        first = layout.first[mine] if at_start else layout.stop[mine] - depth
        stop = first + depth
        bins = gather(trace, first, stop, fitted.middle[mine], _BINS)
        origin = layout.first[mine] if at_start else layout.stop[mine] - 1
        index = fitted.middle[mine][bins.cycle] + bins.t / trace.interval
        distance = np.abs(index - origin[bins.cycle])
        guard, deep, both = _reach(fitted, mine, bins, index, distance, int(depth.min()))
        guards.append(guard)
        through |= deep
        rings |= both
    return Ends(guards[0], guards[1], through, rings)


def _reach(
    fitted: Fitted, mine: Index, bins: Bins, index: Array, distance: Array, depth: int
) -> tuple[int, bool, bool]:
    """How far from the turn the residuals are more than noise and the fit's own error, whether to the zone's end,
    and whether to both sides.
    """
    edges = np.unique(np.concatenate([[0], np.geomspace(1, max(depth, 2), 12).astype(int)]))
    place = np.clip(np.searchsorted(edges, distance + 0.5, side="right") - 1, 0, edges.size - 2)
    curve, _ = fitted.values_at(mine[bins.cycle], index)
    own, shared = fitted.derivatives(mine[bins.cycle], index)
    kind = bool(fitted.layout.rising[mine[0]])
    fit = fitted.fits[kind]
    classes = edges.size - 1
    n = np.bincount(place, bins.n, classes)
    held = np.flatnonzero(n > 0)
    mean = np.bincount(place, bins.n * (bins.v - curve), classes)[held] / n[held]
    steer = np.stack([np.bincount(place, bins.n * s, classes)[held] / n[held] for s in shared.T], axis=1)
    level = (np.bincount(place, bins.n * own, classes)[held] / n[held]) ** 2
    information = float(np.sum(fitted.information[mine]))
    variance = fit.variance * (
        1.0 / n[held] + level / information + np.einsum("ci,ij,cj->c", steer, fit.shared, steer)
    )
    clear = np.abs(mean) > _CLEAR * np.sqrt(variance)
    if not clear.any():
        return 0, False, False
    last = int(np.flatnonzero(clear)[-1])
    # What dies out goes on below what can be told from noise.
    reach = int(np.ceil(1.7 * edges[held[last] + 1])) + 2
    both = bool(np.any(mean[clear] > 0) and np.any(mean[clear] < 0))
    deep = bool(last == held.size - 1 and held.size > 1 and clear[-2:].all())
    return reach, deep, both
