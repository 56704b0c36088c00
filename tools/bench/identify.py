"""What a capture can tell at all: the posterior of the true cause, judged by the bench and not by the
program.

The data are the settled cycle as the bench computes it for the true parts: period, shares, and the first
Legendre coefficients of every probed node over the two stretches of the cycle, with the noise that the
record's samples leave on them. Each hypothesis frees one part (or parasitic) over a wide range and holds the
others to their tolerances; the scope's gain, offset and clock are free within their limits. Its evidence is
Laplace's approximation about the best fit (finite-difference Jacobians of the bench's own integration,
Gauss–Newton from a grid over the freed part), and the posterior gives all causes equal odds. Two readings of
the mean data that fit alike therefore share it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from tools.bench.builds import Build
from tools.bench.engine import Array
from tools.bench.faults import scale_of
from tools.bench.observe import Laboratory, follow, half
from tools.bench.specs import Spec


@dataclass(frozen=True)
class Hypothesis:
    """One cause: which coordinate is free, over what range, and where prior centres move (a swap)."""

    causes: tuple[str, ...]
    free: int | None = None
    low: float = 0.0
    high: float = 0.0
    parasitic: str = ""
    sign: float = 1.0
    shifts: tuple[tuple[int, float], ...] = ()


@dataclass(frozen=True)
class Judgement:
    """Posterior of every cause under equal odds, and each part's standard uncertainty under the true one.

    ``excess``: by how much the best single cause misfits (chi-square) more than the true parts do.
    """

    excess: float
    posterior: Mapping[tuple[str, ...], float]
    truth: float
    u: Mapping[str, float]
    misfit: Mapping[tuple[str, ...], float]


class Judge(Laboratory):
    """The hypotheses about one build, and their fits."""

    def hypotheses(self) -> list[Hypothesis]:
        """Nothing off, every part, every parasitic, every swap."""
        found = [Hypothesis(())]
        for i, s in enumerate(self.specs):
            if s.name in ("I_peak", "I_valley"):
                continue
            reach = _reach(s)
            found.append(Hypothesis((s.name,), i, self.mid[i] - reach, self.mid[i] + reach))
        for name in self.build.design.parasitics:
            low, high = self._range(name)
            for sign in (1.0, -1.0) if name in ("C_slope", "I_leak") else (1.0,):
                found.append(Hypothesis((name,), self.n, np.log(low), np.log(high), name, sign))
        index = {s.name: i for i, s in enumerate(self.specs)}
        for one, two in self.build.design.swaps:
            i, j = index[one], index[two]
            found.append(Hypothesis((one, two), shifts=((i, self.mid[j]), (j, self.mid[i]))))
        return found

    def _range(self, name: str) -> tuple[float, float]:
        nominal = self.build.design.nominal()
        volts = max(abs(nominal.get(k, 0.0)) for k in ("supply", "V_high", "V_low", "V_upper"))
        timing = scale_of(self.build.design.circuit, nominal, volts)
        period = 1 / self.build.target
        swing = abs(nominal.get("V_high", 1.0) - nominal.get("V_low", 0.0))
        return {
            "R_leak": (0.3 * timing, 300 * timing),
            "R_leak_supply": (0.3 * timing, 300 * timing),
            "I_leak": (0.003 * volts / timing, 0.7 * volts / timing),
            "C_stray": (2e-12, 500e-12),
            "ESR": (0.002 * timing, timing),
            "C_slope": (0.02 / volts, 0.9 / volts),
            "delay": (0.001 * period, 0.3 * period),
            "slew": (swing / (0.4 * period), swing / (0.002 * period)),
        }[name]

    def _parts(self, x: Array, hypothesis: list[Hypothesis]) -> dict[str, Array]:
        values = self.values(x[:, : self.n])
        size = np.exp(x[:, self.n])
        for name in self.build.design.parasitics:
            mine = np.array([h.parasitic == name for h in hypothesis])
            sign = np.array([h.sign for h in hypothesis])
            absent = np.inf if name in ("R_leak", "R_leak_supply", "slew") else 0.0
            values[name] = np.where(mine, sign * size, absent)
        return values

    # The fit
    # -------------------------------------------------------------------------------------------------------

    def _model(self, x: Array, hypothesis: list[Hypothesis]) -> Array:
        """Whitened residuals of the data (m, N)."""
        seen = self.shown(self.observe(self._parts(x, hypothesis)), x[:, self.n + 1 :])[self.keep]
        rows = [(seen - self.data[:, None]) / self.sigma[:, None]]
        rows += [((x[:, i] - value) / u)[None] for i, value, u in self.read]
        return np.concatenate(rows)

    def _centre(self, h: Hypothesis) -> Array:
        x = np.concatenate([self.mid, [0.0], np.zeros(self.nuisances)])
        for i, value in h.shifts:
            x[i] = value
        return x

    def _scale(self) -> Array:
        return np.concatenate([self.u, [1.0], self.scope_u])

    def _linearise(self, x: Array, hypothesis: list[Hypothesis]) -> tuple[Array, Array]:
        """Residuals (H, m) and Jacobians (H, m, d) in units of the prior's u."""
        count, d = x.shape
        scale = self._scale()
        h = np.where(np.arange(d) < self.n + 1, np.minimum(0.02, 1e-3 / np.maximum(scale, 1e-12)), 0.05)
        rows = np.repeat(x, d + 1, axis=0)
        for k in range(d):
            rows[k + 1 :: d + 1, k] += h[k] * scale[k]
        many = [hyp for hyp in hypothesis for _ in range(d + 1)]
        out = self._model(rows, many).T.reshape(count, d + 1, -1)
        jacobian = (out[:, 1:] - out[:, :1]) / h[None, :, None]
        return out[:, 0], np.swapaxes(jacobian, 1, 2)

    def _solve(self, x: Array, hypothesis: list[Hypothesis]) -> tuple[Array, Array, Array, Array]:
        """One Gauss–Newton step: misfit here, misfit foreseen, the next x, and the curvature (H, d, d)."""
        residual, jacobian = self._linearise(x, hypothesis)
        scale, d = self._scale(), x.shape[1]
        here, ahead = np.full(len(hypothesis), np.inf), np.full(len(hypothesis), np.inf)
        after, curvature = x.copy(), np.tile(np.eye(d), (len(hypothesis), 1, 1))
        for k, h in enumerate(hypothesis):
            if not np.isfinite(residual[k]).all() or not np.isfinite(jacobian[k]).all():
                continue
            prior = np.ones(d)
            if h.free is not None:
                prior[h.free] = 0.0
            z = (x[k] - self._centre(h)) / scale
            matrix = jacobian[k].T @ jacobian[k] + np.diag(prior)
            gradient = jacobian[k].T @ residual[k] + prior * z
            damped = matrix + 1e-9 * np.diag(np.diag(matrix) + 1e-9)
            step = -np.linalg.solve(damped, gradient)
            here[k] = residual[k] @ residual[k] + (prior * z) @ z
            ahead[k] = here[k] + step @ gradient
            after[k] = x[k] + self._limited(h, x[k], step * scale)
            curvature[k] = matrix
        return here, ahead, after, curvature

    def _limited(self, h: Hypothesis, x: Array, step: Array) -> Array:
        step = step.copy()
        step[: self.n + 1] = np.clip(
            step[: self.n + 1], -0.7 - 3 * self._scale()[: self.n + 1], 0.7 + 3 * self._scale()[: self.n + 1]
        )
        if h.free is not None:
            step[h.free] = np.clip(x[h.free] + step[h.free], h.low, h.high) - x[h.free]
        return step

    def judge(self) -> Judgement:
        """The posterior of every cause under equal odds."""
        hypothesis = self.hypotheses()
        x = np.array([self._scan_start(h) for h in hypothesis])
        x = self._scan(hypothesis, x)
        true, sort = self._truth()
        for k, h in enumerate(hypothesis):
            if h.causes == self.build.fault.causes and (not h.parasitic or h.sign == sort.sign):
                x[k] = true
        best = np.full(len(hypothesis), np.inf)
        kept, curve = x.copy(), np.tile(np.eye(x.shape[1]), (len(hypothesis), 1, 1))
        open_ = np.arange(len(hypothesis))
        for _ in range(9):
            if not open_.size:
                break
            here, _, after, curvature = self._solve(x[open_], [hypothesis[k] for k in open_])
            settled = np.isfinite(here) & (np.abs(here - np.where(np.isfinite(best[open_]), best[open_], 1e300)) < 0.02)
            better = here < best[open_]
            some = open_[better]
            best[some], kept[some], curve[some] = here[better], x[some], curvature[better]
            lost = ~np.isfinite(here)
            # A step may overshoot in the period, which is known to parts per million; the next one mends
            # that.
            x[open_] = np.where(lost[:, None], 0.5 * (kept[open_] + x[open_]), after)
            open_ = open_[~settled]
        log_z = np.array([self._evidence(h, best[k], curve[k]) for k, h in enumerate(hypothesis)])
        return self._posterior(hypothesis, log_z, best, curve)

    def _scan_start(self, h: Hypothesis) -> Array:
        x = self._centre(h)
        if h.parasitic:
            x[self.n] = h.low
        return x

    def _truth(self) -> tuple[Array, Hypothesis]:
        """The true parts as coordinates, and the cause that goes with them."""
        true = dict(self.build.true)
        x = self._centre(Hypothesis(()))
        plain = {s.name: s for s in self.specs}
        for i, s in enumerate(self.specs):
            value = true[s.name]
            if s.follows:
                move = follow(plain, self.build.design.nominal(), true, s)
                value = value / move if s.log else value - move
            x[i] = np.log(value) if s.log else value
        causes = [c for c in self.build.fault.causes if c in self.build.design.parasitics]
        if not causes:
            return x, Hypothesis(())
        cause = causes[0]
        x[self.n] = np.log(abs(true[cause]))
        return x, Hypothesis((), parasitic=cause, sign=float(np.sign(true[cause])))

    def _at_truth(self) -> Array:
        """Jacobian (m, d) at the true parts: whatever explains the data bends them there much as the truth
        does."""
        x, hypothesis = self._truth()
        jacobian: Array = self._linearise(x[None], [hypothesis])[1][0]
        jacobian[:, self.n] = 0.0
        return jacobian

    def _scan(self, hypothesis: list[Hypothesis], x: Array) -> Array:
        """Start every hypothesis where, on a grid over its freed part, the misfit is least once the rest has
        moved."""
        rows, owners = [], []
        for k, h in enumerate(hypothesis):
            grid = [x[k]]
            if h.free is not None:
                count = 25 if h.high - h.low > 3 * np.log(2) else 11
                grid = [
                    x[k] + (value - x[k][h.free]) * (np.arange(x.shape[1]) == h.free)
                    for value in np.linspace(h.low, h.high, count)
                ]
            rows += grid
            owners += [k] * len(grid)
        points, owner = np.array(rows), np.array(owners)
        residual = self._model(points, [hypothesis[k] for k in owners])
        jacobian = np.nan_to_num(self._at_truth())
        start = x.copy()
        for k, h in enumerate(hypothesis):
            mine = np.flatnonzero((owner == k) & np.isfinite(residual).all(axis=0))
            if not mine.size:
                continue
            use = jacobian.copy()
            if h.free is not None:
                use[:, h.free] = 0.0
            matrix = use.T @ use + np.eye(use.shape[1])
            step = -np.linalg.solve(matrix, use.T @ residual[:, mine])
            left = residual[:, mine] + use @ step
            misfit = (left**2).sum(axis=0) + (step**2).sum(axis=0)
            best = int(np.argmin(misfit))
            start[k] = points[mine[best]] + self._limited(h, points[mine[best]], step[:, best] * self._scale())
        return start

    def _evidence(self, h: Hypothesis, misfit: float, curvature: Array) -> float:
        """Laplace's approximation; a freed part that the data leave open costs nothing, one they fix its
        range."""
        if not np.isfinite(misfit):
            return -np.inf
        curvature = curvature.copy()
        more = 0.0
        if h.free is not None:
            width = (h.high - h.low) / self._scale()[h.free]
            curvature[h.free, h.free] += 12.0 / width**2
            more = -float(np.log(width / np.sqrt(2 * np.pi)))
        return float(-0.5 * misfit - 0.5 * np.linalg.slogdet(curvature)[1] + more)

    def _posterior(self, hypothesis: list[Hypothesis], log_z: Array, misfit: Array, curve: Array) -> Judgement:
        weight = np.exp(log_z - log_z.max())
        sums: dict[tuple[str, ...], float] = {}
        fits: dict[tuple[str, ...], float] = {}
        ways: dict[tuple[str, ...], int] = {}
        for h, w, f in zip(hypothesis, weight, misfit, strict=True):
            sums[h.causes] = sums.get(h.causes, 0.0) + float(w)
            ways[h.causes] = ways.get(h.causes, 0) + 1
            fits[h.causes] = min(fits.get(h.causes, np.inf), float(f))
        shared = {k: v / ways[k] for k, v in sums.items()}
        total = sum(shared.values())
        posterior = {k: v / total for k, v in sorted(shared.items(), key=lambda kv: -kv[1])}
        truth = self.build.fault.causes
        k = next((i for i, h in enumerate(hypothesis) if h.causes == truth), 0)
        sd = np.sqrt(np.abs(np.diag(np.linalg.pinv(curve[k])))) * self._scale()
        u = {s.name: float(sd[i]) for i, s in enumerate(self.specs)}
        return Judgement(min(fits.values()) - self._penalty(), posterior, posterior.get(truth, 0.0), u, fits)

    def _penalty(self) -> float:
        """Chi-square of the true parts against their tolerances, what is off left out."""
        x, _ = self._truth()
        z = ((x - self._centre(Hypothesis(()))) / self._scale())[: self.n]
        off = {i for i, s in enumerate(self.specs) if s.name in self.build.fault.causes}
        return float(sum(z[i] ** 2 for i in range(self.n) if i not in off))


def _reach(s: Spec) -> float:
    """How far a part may be off when it is the cause."""
    if s.kind in ("resistor", "capacitor", "current"):
        return 2 * float(np.log(10))
    if s.kind == "device":
        return max(float(np.log(6)), 2.5 * half(s)) if s.log else 6 * half(s)
    if s.log:
        return max(float(np.log(2)), 1.5 * half(s))
    return max(0.5 * abs(s.nominal), 6 * half(s))


def judge(build: Build) -> Judgement:
    """How far the capture of this build can decide between single causes; its build must oscillate."""
    return Judge(build).judge()
