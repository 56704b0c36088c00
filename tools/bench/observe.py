"""What a record shows of a build, as numbers with their noise: the settled cycle of the bench's own
integration.

The data are the period, shares, and the first Legendre coefficients of every probed node over the two
stretches of the cycle, with the noise that the record's samples leave on them.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from tools.bench.builds import Build
from tools.bench.chain import screen
from tools.bench.engine import Array, Rig, Run, Values, advance, run
from tools.bench.parts import prepare
from tools.bench.rigs import RIGS
from tools.bench.simulate import settle
from tools.bench.specs import Spec

ORDER = 5
# Accuracy of the integration here: differences of 0.1 % are taken from it.
QUICK = 1e-8
# No share of the period counts as better known than this: the clock is not, and differences are noisy below
# it.
FLOOR = 3e-6
NODES, WEIGHTS = np.polynomial.legendre.leggauss(10)
BASIS = np.array([np.polynomial.legendre.Legendre.basis(k)(NODES) for k in range(ORDER)])
PROJECT = BASIS * WEIGHTS * (2 * np.arange(ORDER)[:, None] + 1) / 2


class Laboratory:
    """A build's record as whitened data, and how they follow from coordinates of its parts."""

    def __init__(self, build: Build) -> None:
        self.build = build
        self.rig: Rig = RIGS[build.design.circuit]
        self.specs = [s for s in build.design.specs if s.high > s.low]
        self.fixed = {s.name: s.nominal for s in build.design.specs if s.high <= s.low}
        self.mid = np.array([middle(s) for s in self.specs])
        self.u = np.array([half(s) / np.sqrt(3) for s in self.specs])
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
            [float(b.sheet.split('offset = "')[1].split(" V")[0])] * len(spans) if stated else [0.02 * s for s in spans]
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
                value += (out["V_breakover"] - out["V_breakback"]) - (nominal["V_breakover"] - nominal["V_breakback"])
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


def follow(specs: Mapping[str, Spec], nominal: Mapping[str, float], true: Mapping[str, float], s: Spec) -> float:
    """How far a following part's limits moved with the true value of what it follows."""
    if s.follows == "low":
        return (true["V_breakover"] - true["V_breakback"]) - (nominal["V_breakover"] - nominal["V_breakback"])
    now, meant = true[s.follows], nominal[s.follows]
    return now / meant if s.log else now - meant


def middle(s: Spec) -> float:
    return float(0.5 * np.log(s.low * s.high)) if s.log else 0.5 * (s.low + s.high)


def half(s: Spec) -> float:
    return float(0.5 * np.log(s.high / s.low)) if s.log else 0.5 * (s.high - s.low)


def _first_stretch(rig: Rig, done: Run) -> Array:
    """Time at which each element first leaves the ``high`` modes."""
    out = done.time.copy()
    for entry in done.entries:
        if entry.before in rig.high and entry.after not in rig.high:
            out[entry.element] = np.minimum(out[entry.element], entry.time)
    return out


def _sample(rig: Rig, p: Values, done: Run, high: Array, nodes: tuple[str, ...]) -> dict[str, tuple[Array, Array]]:
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
    return {node: (v.reshape(2 * count, n)[:count], v.reshape(2 * count, n)[count:]) for node, v in out.items()}
