"""Exponential phases by variable projection: shared drive and curvature, one level per cycle.

A phase obeys dv/dt = s − κ·(v − v0), so that with m the level at t = 0

    v(t) = v0 + (m − v0)·e^(−κt) + s·φ(t),    φ(t) = (1 − e^(−κt))/κ,

which is linear in everything but κ and goes over into a straight ramp at κ = 0 without a special case.
The linear parameters are projected out and κ is found by Gauss-Newton steps on what is left (G. H. Golub and
V. Pereyra, SIAM J. Numer. Anal. 10 (1973) 413, with the simplification of L. Kaufman, BIT 15 (1975) 49).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index

# Kurtosis of a uniform distribution: bins hold evenly spaced samples.
_KURTOSIS = 9.0 / 5.0
# Of a span: beyond, an exponential is a step.
_STEEP = 50.0


@dataclass(frozen=True, eq=False)
class PhaseModel:
    """What all cycles of one phase share: dv/dt = slope − curvature·(v − reference)."""

    reference: float
    slope: float
    curvature: float

    @property
    def asymptote(self) -> float:
        """v0 + s/κ (V); infinite for a straight ramp."""
        if self.curvature == 0.0:
            return float(np.copysign(np.inf, self.slope))
        return self.reference + self.slope / self.curvature

    def value(self, t: Array, level: Array) -> Array:
        """Voltage at time t after the instant at which it was ``level``."""
        decay = np.exp(-self.curvature * t)
        return np.asarray(
            self.reference + (level - self.reference) * decay + self.slope * phi(t, self.curvature)
        )

    def rate(self, v: Array) -> Array:
        """dv/dt at voltage v (V/s)."""
        return self.slope - self.curvature * (v - self.reference)

    def time_to(self, target: Array | float, level: Array) -> Array:
        """Time from ``level`` to ``target`` (s); NaN where the phase never gets there."""
        start = self.rate(np.asarray(level, dtype=float))
        with np.errstate(invalid="ignore", divide="ignore"):
            x = (np.asarray(target) - level) / start
            # −ln(1 − κx)/κ, regular at κ = 0.
            y = self.curvature * x
            t = x * np.where(np.abs(y) < 1e-8, 1.0 + 0.5 * y, -np.log1p(-y) / np.where(y == 0, 1.0, y))
        return np.asarray(np.where(1.0 - y > 0, t, np.nan))

    def columns(self, t: Array, level: Array) -> tuple[Array, Array, Array]:
        """Derivatives of ``value`` by level, slope and curvature."""
        decay, ramp, bend = basis(t, np.zeros_like(t), self.curvature)
        return decay, ramp, self.slope * bend - (level - self.reference) * t * decay


@dataclass(frozen=True, eq=False)
class ExponentialFit:
    """One phase seen in many cycles.

    Attributes
    ----------
    model : PhaseModel
    levels : ndarray, shape (cycles,)
        Level (V) of each cycle at its own time 0.
    information : ndarray, shape (cycles,)
        Σ w·e², so that a level's variance, slope and curvature held, is ``variance / information``.
    shared : ndarray, shape (2, 2)
        Covariance of (slope, curvature) for unit variance of weight 1.
    coupling : ndarray, shape (cycles, 2)
        d level / d (slope, curvature) along the fit: a level's whole error is its own plus coupling·(those errors).
    rss : float
        Weighted sum of squared residuals.
    freedom : int
        Points less parameters.
    """

    model: PhaseModel
    levels: Array
    information: Array
    shared: Array
    coupling: Array
    rss: float
    freedom: int

    @property
    def variance(self) -> float:
        """Variance of a point of weight 1 (V²), as the residuals have it."""
        return self.rss / max(self.freedom, 1)

    @property
    def asymptote(self) -> float:
        """Shared asymptote (V)."""
        return self.model.asymptote

    def covariance(self) -> Array:
        """Covariance of (asymptote, curvature), shape (2, 2), from the residuals' own variance."""
        s, k = self.model.slope, self.model.curvature
        jacobian = np.array([[1.0 / k, -s / k**2], [0.0, 1.0]])
        return np.asarray(self.variance * jacobian @ self.shared @ jacobian.T)


def phi(t: Array, curvature: float) -> Array:
    """φ(t) = (1 − e^(−κt))/κ, t itself at κ = 0."""
    x = curvature * t
    safe = np.where(x == 0.0, 1.0, x)
    return np.asarray(t * np.where(x == 0.0, 1.0, -np.expm1(-x) / safe))


def _bend(x: Array) -> Array:
    """(x·e^(−x) − (1 − e^(−x)))/x², by its series near 0, where the difference cancels."""
    small = np.abs(x) < 0.2
    z = np.where(small, x, 0.0)
    series = -1 / 2 + z * (
        1 / 3
        + z
        * (
            -1 / 8
            + z
            * (
                1 / 30
                + z
                * (
                    -1 / 144
                    + z * (1 / 840 + z * (-1 / 5760 + z * (1 / 45360 + z * (-1 / 403200 + z / 3991680))))
                )
            )
        )
    )
    y = np.where(small, 1.0, x)
    e = np.exp(-y)
    return np.where(small, series, (y * e - 1.0 + e) / y**2)


def basis(t: Array, spread: Array, curvature: float, bent: bool = True) -> tuple[Array, Array, Array]:
    """Means of e^(−κt), φ(t) and ∂φ/∂κ over bins of mean time t and variance ``spread`` (s²) of time within.

    Without ``bent`` the third is left at 0.

    The bin means come from the central moments up to the fourth; what is left out is below 1e-9 of the
    swing while a bin is shorter than a fifth of the time constant.
    """
    decay = np.exp(-curvature * t)
    ramp = phi(t, curvature)
    bend = t * t * _bend(curvature * t) if bent else np.zeros_like(t)
    if np.any(spread):
        k2 = curvature**2 * spread
        lift = spread * (0.5 + _KURTOSIS * k2 / 24.0)  # (R − 1)/κ² with R the bin mean over the mid value
        if bent:
            bend = bend - lift * decay * (1.0 - curvature * t) - decay * _KURTOSIS * k2 * spread / 12.0
        ramp = ramp - curvature * lift * decay
        decay = decay * (1.0 + curvature**2 * lift)
    return decay, ramp, bend


def fit_exponentials(
    t: Array,
    v: Array,
    cycle: Index | None = None,
    weight: Array | None = None,
    spread: Array | None = None,
    start: float | None = None,
    curvature: float | None = None,
    hold: bool = False,
) -> ExponentialFit:
    """Fit one phase in many cycles: shared asymptote and κ, one amplitude per cycle.

    Parameters
    ----------
    t, v : ndarray, shape (n,)
        Time (s, each cycle's own zero, best in its middle) and mean voltage (V) of each bin.
    cycle : ndarray of int, shape (n,), optional
        Cycle that a bin belongs to, ascending from 0; one cycle where left out.
    weight : ndarray, shape (n,), optional
        Number of samples in the bin.
    spread : ndarray, shape (n,), optional
        Variance (s²) of the samples' times within the bin: 0 for single samples.
    start : float, optional
        Level (V) at t = 0 where it is known; no amplitude is then fitted.
    curvature : float, optional
        Where to begin the search (1/s); else a coarse scan finds it.
    hold : bool
        Keep to ``curvature`` (0 where it is left out: a straight line).
    """
    problem = _Problem(t, v, cycle, weight, spread, start)
    if hold:
        return problem.finish((curvature or 0.0) * problem.unit_t, held=True)
    begin = problem.scan() if curvature is None else curvature * problem.unit_t
    return problem.solve(begin)


@dataclass(frozen=True, eq=False)
class LevelFit:
    """Levels of many cycles with the shared part held: as in ExponentialFit, and for every bin the ``residual`` (V)
    and its derivatives by (slope, curvature), the levels projected out: ``bare``, shape (2, n).
    """

    levels: Array
    information: Array
    coupling: Array
    residual: Array
    bare: Array


def fit_levels(model: PhaseModel, t: Array, v: Array, cycle: Index, weight: Array, spread: Array) -> LevelFit:
    """Fit each cycle's level with the shared part held."""
    count = int(cycle[-1]) + 1
    decay, ramp, bend = basis(t, spread, model.curvature)
    wd = weight * decay
    see = np.bincount(cycle, wd * decay, count)
    y = v - model.reference - model.slope * ramp
    own = np.bincount(cycle, wd * y, count) / see
    bent = model.slope * bend - own[cycle] * t * decay
    coupling = np.stack([-np.bincount(cycle, wd * c, count) / see for c in (ramp, bent)])
    bare = np.stack([c + decay * k[cycle] for c, k in zip((ramp, bent), coupling, strict=True)])
    return LevelFit(model.reference + own, see, coupling.T, y - own[cycle] * decay, bare)


class _Problem:
    """The fit in units of its own span, in which κ is of order one."""

    def __init__(
        self,
        t: Array,
        v: Array,
        cycle: Index | None,
        weight: Array | None,
        spread: Array | None,
        start: float | None,
    ) -> None:
        t, v = np.asarray(t, dtype=float), np.asarray(v, dtype=float)
        self.cycle = np.zeros(t.size, dtype=np.int64) if cycle is None else np.asarray(cycle)
        self.count = int(self.cycle[-1]) + 1 if t.size else 0
        self.w = np.ones(t.size) if weight is None else np.asarray(weight, dtype=float)
        self.unit_t = float(np.ptp(t)) or 1.0
        self.reference = float(np.average(v, weights=self.w))
        self.unit_v = float(np.ptp(v)) or 1.0
        self.t = t / self.unit_t
        self.v = (v - self.reference) / self.unit_v
        self.spread = np.zeros(t.size) if spread is None else np.asarray(spread) / self.unit_t**2
        self.fixed = None if start is None else (start - self.reference) / self.unit_v
        self.freedom = t.size - 2 - (self.count if start is None else 0)

    def group(self, x: Array) -> Array:
        return np.bincount(self.cycle, weights=x, minlength=self.count)

    def linear(self, k: float, bent: bool = True) -> tuple[float, Array, Array, tuple[Array, Array, Array]]:
        """Slope, levels, residuals and basis at curvature k."""
        decay, ramp, bend = basis(self.t, self.spread, k, bent)
        if self.fixed is not None:
            y = self.v - self.fixed * decay
            slope = float(np.sum(self.w * ramp * y) / np.sum(self.w * ramp * ramp))
            return slope, np.full(self.count, self.fixed), y - slope * ramp, (decay, ramp, bend)
        wd = self.w * decay
        see = self.group(wd * decay)
        ramp_on, v_on = self.group(wd * ramp) / see, self.group(wd * self.v) / see
        bare = ramp - decay * ramp_on[self.cycle]
        slope = float(np.sum(self.w * bare * self.v) / max(np.sum(self.w * bare * bare), 1e-300))
        levels = v_on - slope * ramp_on
        residual = self.v - slope * ramp - levels[self.cycle] * decay
        return slope, levels, residual, (decay, ramp, bend)

    def rss(self, k: float) -> float:
        return float(np.sum(self.w * self.linear(k, False)[2] ** 2))

    def scan(self) -> float:
        trial = (-4.0, -1.5, -0.5, 0.0, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0)
        return min(trial, key=self.rss)

    def jacobian(self, k: float) -> tuple[Array, Array, Array, float, Array, Array]:
        slope, levels, residual, (decay, ramp, bend) = self.linear(k)
        lift = 1.0 + self.spread * 0.5 * k * k
        d_decay = -self.t * decay + k * self.spread * decay / lift
        columns = np.stack([ramp, slope * bend + levels[self.cycle] * d_decay])
        if self.fixed is not None:
            return columns, np.zeros((self.count, 2)), np.full(self.count, np.inf), slope, levels, residual
        wd = self.w * decay
        see = self.group(wd * decay)
        on = np.stack([self.group(wd * c) / see for c in columns])
        return columns - decay * on[:, self.cycle], -on.T, see, slope, levels, residual

    def solve(self, k: float) -> ExponentialFit:
        rss = self.rss(k)
        for _ in range(60):
            bare, _, _, _, _, residual = self.jacobian(k)
            normal = (bare * self.w) @ bare.T
            gradient = (bare * self.w) @ residual
            step = float(np.clip(k + _solve2(normal, gradient)[1], -_STEEP, 10.0 * _STEEP)) - k
            moved = False
            for _ in range(40):
                trial = self.rss(k + step)
                if trial <= rss:
                    moved = True
                    break
                step *= 0.5
            if not moved:
                break
            k, rss = k + step, trial
            if abs(step) < 1e-11 * (1.0 + abs(k)):
                break
        return self.finish(k)

    def finish(self, k: float, held: bool = False) -> ExponentialFit:
        bare, coupling, see, slope, levels, residual = self.jacobian(k)
        if held:
            bare[1] = 0.0
        shared = _inverse2((bare * self.w) @ bare.T)
        units = np.array([self.unit_v / self.unit_t, 1.0 / self.unit_t])
        return ExponentialFit(
            model=PhaseModel(self.reference, slope * units[0], k * units[1]),
            levels=self.reference + levels * self.unit_v,
            information=see,
            shared=shared * np.outer(units, units) / self.unit_v**2,
            coupling=coupling * self.unit_v / units,
            rss=float(np.sum(self.w * residual**2)) * self.unit_v**2,
            freedom=self.freedom + int(held),
        )


def _inverse2(a: Array) -> Array:
    scale = np.sqrt(np.maximum(np.diag(a), 1e-300))
    return np.asarray(np.linalg.pinv(a / np.outer(scale, scale)) / np.outer(scale, scale))


def _solve2(a: Array, b: Array) -> Array:
    return np.asarray(_inverse2(a) @ b)
