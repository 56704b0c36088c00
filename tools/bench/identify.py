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
from numpy.typing import NDArray

from tools.bench.chain import screen
from tools.bench.designs import Spec
from tools.bench.engine import Array, Rig, Run, Values, advance, run
from tools.bench.faults import TIMING, Build
from tools.bench.parts import prepare
from tools.bench.rigs import RIGS
from tools.bench.simulate import settle

ORDER = 5
# Accuracy of the integration here: differences of 0.1 % are taken from it.
QUICK = 1e-8
# No share of the period counts as better known than this: the clock is not, and differences are noisy below
# it.
FLOOR = 3e-6
NODES, WEIGHTS = np.polynomial.legendre.leggauss(10)
BASIS = np.array([np.polynomial.legendre.Legendre.basis(k)(NODES) for k in range(ORDER)])
PROJECT = BASIS * WEIGHTS * (2 * np.arange(ORDER)[:, None] + 1) / 2


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


class Judge:
    """The linearised laboratory of one build."""

    def __init__(self, build: Build) -> None:
        self.build = build
        self.rig: Rig = RIGS[build.design.circuit]
        self.specs = [s for s in build.design.specs if s.high > s.low]
        self.fixed = {s.name: s.nominal for s in build.design.specs if s.high <= s.low}
        self.mid = np.array([_mid(s) for s in self.specs])
        self.u = np.array([_half(s) / np.sqrt(3) for s in self.specs])
        self.n = len(self.specs)
        self.nuisances = 1 + 2 * len(build.nodes)
        self._prior_scope()
        self.read = self._readings()
        truth = self.observe({k: np.array([v]) for k, v in build.true.items()})
        self.sigma = self._noise(truth[:, 0])
        self.keep = np.isfinite(self.sigma) & np.isfinite(truth[:, 0])
        self.data = truth[self.keep, 0]
        self.sigma = self.sigma[self.keep]

    def _readings(self) -> list[tuple[int, float, float]]:
        """Meter readings as (coordinate, true value there, u): the mean of what a meter would show."""
        index = {s.name: i for i, s in enumerate(self.specs)}
        found = []
        for name, (_, limit) in self.build.readings.items():
            if name in index:
                true, log = self.build.true[name], self.specs[index[name]].log
                u = 0.01 * limit / np.sqrt(3) * (1.0 if log else abs(true))
                found.append((index[name], float(np.log(true)) if log else true, u))
        return found

    def _prior_scope(self) -> None:
        b = self.build
        times = np.linspace(0, b.waves.period, 400)
        seen = b.waves.at(times)
        self.screens = {n: screen((1 + b.gains[n]) * seen[n] + b.offsets[n]) for n in b.nodes}
        spans = [float(np.ptp(seen[n])) for n in b.nodes]
        stated = "[scope]" in b.sheet
        gain = float(b.sheet.split('gain = "')[1].split("%")[0]) / 100 if stated else 0.03
        offset = (
            [float(b.sheet.split('offset = "')[1].split(" V")[0])] * len(spans)
            if stated
            else [0.02 * s for s in spans]
        )
        clock = 25e-6 if stated else 50e-6
        self.scope_u = np.array([clock, *(x for o in offset for x in (gain, o))]) / np.sqrt(3)

    # From coordinates to observables
    # -------------------------------------------------------------------------------

    def values(self, x: Array) -> dict[str, Array]:
        """Part values (N,) from coordinates (N, parts)."""
        out = {k: np.full(x.shape[0], v) for k, v in self.fixed.items()}
        order = sorted(range(self.n), key=lambda i: bool(self.specs[i].follows))
        nominal = self.build.design.nominal()
        for i in order:
            s = self.specs[i]
            value = np.exp(x[:, i]) if s.log else x[:, i].copy()
            if s.follows == "low":
                value += (out["V_breakover"] - out["V_breakback"]) - (
                    nominal["V_breakover"] - nominal["V_breakback"]
                )
            elif s.follows:
                now, meant = out[s.follows], nominal[s.follows]
                value = value * (now / meant) if s.log else value + (now - meant)
            out[s.name] = value
        return out

    def observe(self, values: Mapping[str, Array]) -> Array:
        """Observables (m, N) without noise or scope errors; NaN where a build does not oscillate."""
        flat = {"flat": 10 * QUICK} if "flat" in self.rig.defaults else {}
        p = prepare(self.rig, {**values, **flat}, self.build.probe)
        with np.errstate(all="ignore"):
            settled, alive = settle(self.rig, p, 25, QUICK, 10 * QUICK)
        m = 3 + 2 * ORDER * len(self.build.nodes)
        out = np.full((m, p.size), np.nan)
        index = np.flatnonzero(alive)
        if not index.size:
            return out
        done, mine = self._cycle(p, index, settled.state)
        if not (whole_cycle := (done.cycles >= 1) & (done.time > 0)).all():
            index = index[whole_cycle]
            if not index.size:
                return out
            done, mine = self._cycle(p, index, settled.state)
        high = _first_stretch(self.rig, done)
        out[0, index], out[1, index] = np.log(done.time), high / done.time
        out[2, index] = self._edge(mine) / done.time
        whole = _sample(self.rig, mine, done, high, self.build.nodes)
        for j, node in enumerate(self.build.nodes):
            for part in (0, 1):
                rows = 3 + (2 * j + part) * ORDER
                out[rows : rows + ORDER, index] = PROJECT @ whole[node][part]
        return out

    def _cycle(self, p: Values, index: NDArray[np.int64], state: Array) -> tuple[Run, Values]:
        mine = p.take(index)
        return run(self.rig, mine, self.rig.first, state[:, index], cycles=1, keep=True, rtol=QUICK), mine

    def _edge(self, p: Values) -> Array:
        if "slew" not in self.build.design.parasitics:
            return np.zeros(p.size)
        return np.where(np.isfinite(p.slew), 0.8 * (p.V_high - p.V_low) / p.slew, 0.0)

    def _noise(self, truth: Array) -> Array:
        """Standard deviation of every observable; infinite where the record does not show it."""
        b = self.build
        period, share = np.exp(truth[0]), truth[1]
        samples = next(iter(b.record.channels.values())).size
        cycles = samples * b.record.interval / period
        square = any(n in ("output", "collector1", "collector2") for n in b.nodes)
        instant = b.record.interval / np.sqrt(12) if square else 0.7 * b.record.interval
        jitter = 0.0 if b.waves.periods is None else float(np.std(b.waves.periods)) / period
        sigma = np.full(truth.size, np.inf)
        sigma[0] = np.hypot(instant / period * np.sqrt(12) / cycles**1.5, jitter / np.sqrt(cycles)) + FLOOR
        if min(share, 1 - share) * samples / cycles >= 3:
            sigma[1] = FLOOR + np.hypot(instant / period * 1.5 / np.sqrt(cycles), jitter / np.sqrt(cycles))
        if square and "slew" in b.design.parasitics:
            sigma[2] = max(0.5 * b.record.interval / period, 1e-5) / np.sqrt(cycles)
        for j, node in enumerate(b.nodes):
            low, high = self.screens[node]
            unit = (high - low) / 10.24
            white = np.hypot(b.inputs[node].noise_divisions * unit, (high - low) / 256 / np.sqrt(12))
            for part, some in enumerate((share, 1 - share)):
                count = samples * some
                shown = min(ORDER, int(count / max(cycles, 1) / 2))
                if count < 8 or shown < 1:
                    continue
                rows = 3 + (2 * j + part) * ORDER
                sigma[rows : rows + shown] = white * np.sqrt((2 * np.arange(shown) + 1) / count)
                # An interpolated corner smears what a node does near it.
                slope = np.abs(truth[rows + 1]) * 2 / (some * period)
                sigma[rows : rows + shown] = np.hypot(
                    sigma[rows : rows + shown], 0.1 * instant * slope / np.sqrt(cycles)
                )
        return sigma

    def shown(self, observables: Array, scope: Array) -> Array:
        """Observables (m, N) as the scope with errors (N, nuisances) shows them."""
        out = observables.copy()
        out[0] += scope[:, 0]
        for j in range(len(self.build.nodes)):
            rows = slice(3 + 2 * j * ORDER, 3 + 2 * (j + 1) * ORDER)
            out[rows] *= 1 + scope[:, 1 + 2 * j]
            out[3 + 2 * j * ORDER] += scope[:, 2 + 2 * j]
            out[3 + (2 * j + 1) * ORDER] += scope[:, 2 + 2 * j]
        return out

    # Hypotheses
    # ----------------------------------------------------------------------------------------------------

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
        timing = nominal.get(TIMING.get(self.build.design.circuit, "R"), nominal.get("R_charge"))
        volts = max(abs(nominal.get(k, 0.0)) for k in ("supply", "V_high", "V_low", "V_upper"))
        if timing is None:
            timing = volts / nominal["I_charge"]
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
            settled = np.isfinite(here) & (
                np.abs(here - np.where(np.isfinite(best[open_]), best[open_], 1e300)) < 0.02
            )
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
                move = _follow(plain, self.build.design.nominal(), true, s)
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
            start[k] = points[mine[best]] + self._limited(
                h, points[mine[best]], step[:, best] * self._scale()
            )
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

    def _posterior(
        self, hypothesis: list[Hypothesis], log_z: Array, misfit: Array, curve: Array
    ) -> Judgement:
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


def _follow(
    specs: Mapping[str, Spec], nominal: Mapping[str, float], true: Mapping[str, float], s: Spec
) -> float:
    """How far a following part's limits moved with the true value of what it follows."""
    if s.follows == "low":
        return (true["V_breakover"] - true["V_breakback"]) - (nominal["V_breakover"] - nominal["V_breakback"])
    now, meant = true[s.follows], nominal[s.follows]
    return now / meant if s.log else now - meant


def _mid(s: Spec) -> float:
    return float(0.5 * np.log(s.low * s.high)) if s.log else 0.5 * (s.low + s.high)


def _half(s: Spec) -> float:
    return float(0.5 * np.log(s.high / s.low)) if s.log else 0.5 * (s.high - s.low)


def _reach(s: Spec) -> float:
    """How far a part may be off when it is the cause."""
    if s.kind in ("resistor", "capacitor", "current"):
        return 2 * float(np.log(10))
    if s.kind == "device":
        return max(float(np.log(6)), 2.5 * _half(s)) if s.log else 6 * _half(s)
    if s.log:
        return max(float(np.log(2)), 1.5 * _half(s))
    return max(0.5 * abs(s.nominal), 6 * _half(s))


def _first_stretch(rig: Rig, done: Run) -> Array:
    """Time at which each element first leaves the ``high`` modes."""
    out = done.time.copy()
    for entry in done.entries:
        if entry.before in rig.high and entry.after not in rig.high:
            out[entry.element] = np.minimum(out[entry.element], entry.time)
    return out


def _sample(
    rig: Rig, p: Values, done: Run, high: Array, nodes: tuple[str, ...]
) -> dict[str, tuple[Array, Array]]:
    """Node voltages at the quadrature points of both stretches: {node: ((points, N), (points, N))}."""
    element = np.concatenate([s.element for s in done.steps])
    time = np.concatenate([s.time for s in done.steps])
    owner = np.concatenate([np.full(s.time.size, i) for i, s in enumerate(done.steps)])
    inner = np.concatenate([np.arange(s.time.size) for s in done.steps])
    period = done.time
    key = element + 0.5 * time / period[element]
    order = np.argsort(key, kind="stable")
    key, owner, inner = key[order], owner[order], inner[order]
    n = p.size
    x = 0.5 * (1 + NODES)[:, None]
    stretch = np.concatenate([high * x, high + (period - high) * x])
    who = np.broadcast_to(np.arange(n), stretch.shape).ravel()
    when = stretch.ravel()
    place = np.clip(np.searchsorted(key, who + 0.5 * when / period[who], side="right") - 1, 0, key.size - 1)
    out = {node: np.empty(when.size) for node in nodes}
    for i, steps in enumerate(done.steps):
        mine = np.flatnonzero(owner[place] == i)
        if not mine.size:
            continue
        k = inner[place[mine]]
        mode = rig.modes[steps.mode](p.take(steps.element[k]))
        h = np.clip(when[mine] - steps.time[k], 0.0, steps.length[k])
        state = advance(mode.rates, steps.state[:, k], h)[0]
        seen = mode.nodes(state)
        for node in nodes:
            out[node][mine] = seen[node]
    count = NODES.size
    return {
        node: (v.reshape(2 * count, n)[:count], v.reshape(2 * count, n)[count:]) for node, v in out.items()
    }


def judge(build: Build) -> Judgement:
    """How far the capture of this build can decide between single causes; its build must oscillate."""
    return Judge(build).judge()
