"""How well the cycle stage measures: ``python tools/study_cycle.py [bound] [coverage] [jitter] [conditions]``.

``bound``      root-mean-square errors over the Cramér–Rao bound, on white noise
``coverage``   how often 95 % intervals hold the truth, and how wide they are against the best possible
``jitter``     the same with jitter, 8 bits and scope errors drawn, intervals with the scope's terms
``conditions`` how often each condition of the bench is named where it is, and where it is not

Closed-form exponential trains are the right signals for the first two: they ask what the estimators make of white
noise, and their truth must be exact. All other captures are integrated (``tools/bench``). What the stage costs, and how
it stands against an hour's own work, is in ``benchmark_cycle.py``.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from benchfit.capture.model import Capture, Channel  # noqa: E402
from benchfit.cycle import Assignment, CycleConstants, measure  # noqa: E402

Array = NDArray[np.float64]
NODE = (Assignment("CH1", "capacitor"),)


@dataclass(frozen=True)
class Train:
    """A closed-form exponential train: (A − S)/(A − E) of both phases, cycles, samples per cycle, noise/swing."""

    x_up: float
    x_down: float
    cycles: float
    per_cycle: float
    noise: float
    lower: float = -1.0
    upper: float = 1.0
    tau: float = 1.0

    @property
    def swing(self) -> float:
        return self.upper - self.lower

    @property
    def asymptotes(self) -> tuple[float, float]:
        up = self.lower + self.swing * self.x_up / (self.x_up - 1)
        return up, self.upper - self.swing * self.x_down / (self.x_down - 1)

    @property
    def times(self) -> tuple[float, float]:
        return self.tau * np.log(self.x_up), self.tau * np.log(self.x_down)

    @property
    def period(self) -> float:
        return float(sum(self.times))

    @property
    def interval(self) -> float:
        return self.period / self.per_cycle

    def grid(self, phase: float) -> Array:
        """Time (s) since a lower turn of every sample; the record begins ``phase`` of a period after one."""
        return phase * self.period + self.interval * np.arange(round(self.cycles * self.per_cycle))

    def volts(self, t: Array) -> Array:
        u = np.mod(t, self.period)
        (a, b), (rise, _) = self.asymptotes, self.times
        up = a - (a - self.lower) * np.exp(-u / self.tau)
        down = b - (b - self.upper) * np.exp(-(u - rise) / self.tau)
        return np.where(u < rise, up, down)

    def capture(self, phase: float, seed: int) -> Capture:
        t = self.grid(phase)
        v = self.volts(t) + self.noise * self.swing * np.random.default_rng(seed).standard_normal(t.size)
        return Capture("train", self.interval, 0.0, (Channel("CH1", "V", v),))

    def truth(self) -> dict[str, float]:
        rise, _ = self.times
        slopes = [(a - 0.5 * (self.lower + self.upper)) / self.tau for a in self.asymptotes]
        return {
            "period": self.period, "charge_share": rise / self.period, "upper": self.upper, "lower": self.lower,
            "charge_curvature": 1 / self.tau, "discharge_curvature": 1 / self.tau,
            "charge_slope": slopes[0], "discharge_slope": slopes[1],
            "charge_asymptote": self.asymptotes[0], "discharge_asymptote": self.asymptotes[1],
        }


def bound(train: Train, phase: float) -> dict[str, float]:
    """Cramér–Rao bounds (standard deviations) of the model with asymptote and κ shared by the cycles and one amplitude
    per phase and cycle; of what all cycles have in common, those of the best linear combination of the cycles.
    """
    t = train.grid(phase)
    rise, _ = train.times
    whole = np.floor(t / train.period + 1e-12).astype(int)
    number = whole * 2 + (t - whole * train.period >= rise)
    first = int(number[0])
    phases = int(number[-1]) - first + 1
    # Parameters: asymptote, κ of rising and of falling phases; then each phase's amplitude at its start.
    columns = np.zeros((t.size, 4 + phases))
    begins = np.array([(k // 2) * train.period + (rise if k % 2 else 0.0) for k in range(first, first + phases)])
    amplitude = np.array([train.lower - train.asymptotes[0], train.upper - train.asymptotes[1]])
    kind = np.arange(first, first + phases) % 2
    own = number - first
    tau = t - begins[own]
    decay = np.exp(-tau / train.tau)
    rows = np.arange(t.size)
    columns[rows, 2 * kind[own]] = 1.0
    columns[rows, 2 * kind[own] + 1] = -tau * amplitude[kind[own]] * decay
    columns[rows, 4 + own] = decay
    covariance = np.linalg.pinv(columns.T @ columns, hermitian=True) * (train.noise * train.swing) ** 2
    forms = _turn_forms(train, kind, amplitude, phases)
    result: dict[str, float] = {}
    for i, name in enumerate(("charge", "discharge")):
        (a, k), c = (train.asymptotes[i], 1 / train.tau), covariance[2 * i : 2 * i + 2, 2 * i : 2 * i + 2]
        slope = np.array([k, a - 0.5 * (train.lower + train.upper)])
        result[f"{name}_asymptote"], result[f"{name}_curvature"] = np.sqrt(np.diag(c))
        result[f"{name}_slope"] = float(np.sqrt(slope @ c @ slope))
    times, volts = forms
    ct, cv = times @ covariance @ times.T, volts @ covariance @ volts.T
    top = kind[:-1] == 0
    result["turns"] = float(np.sqrt(np.mean(np.diag(ct)[~top])))
    result["upper"], result["lower"] = (_best_mean(cv[np.ix_(m, m)]) for m in (top, ~top))
    where = begins[1:]
    design = np.stack([where / train.period, top, ~top], axis=1).astype(float)
    result["period"] = float(np.sqrt(np.linalg.inv(design.T @ np.linalg.solve(ct, design))[0, 0]))
    return result


def _turn_forms(train: Train, kind: NDArray[np.int64], amplitude: Array, phases: int) -> tuple[Array, Array]:
    """Each inner turn's time and voltage as linear forms in the parameters."""
    times, volts = np.zeros((phases - 1, 4 + phases)), np.zeros((phases - 1, 4 + phases))
    for j in range(phases - 1):
        before, after = int(kind[j]), int(kind[j + 1])
        length = train.times[before]
        e = np.exp(-length / train.tau)
        r0, r1 = -amplitude[before] * e / train.tau, -amplitude[after] / train.tau
        p, n = np.zeros(4 + phases), np.zeros(4 + phases)
        p[2 * before], p[2 * before + 1], p[4 + j] = 1.0, -length * amplitude[before] * e, e
        n[2 * after], n[4 + j + 1] = 1.0, 1.0
        times[j], volts[j] = (n - p) / (r0 - r1), (r0 * n - r1 * p) / (r0 - r1)
    return times, volts


def _best_mean(covariance: Array) -> float:
    ones = np.ones(len(covariance))
    return float(1.0 / np.sqrt(ones @ np.linalg.solve(covariance, ones)))


def derived(found: CycleConstants, middle: float = 0.0) -> dict[str, float]:
    """The constants with the asymptotes and the slopes at ``middle`` (V) that follow from them."""
    values = {n: float(v) for n, v in zip(found.names, found.values, strict=True)}
    for name, start, end, share in (
        ("charge", values["lower"], values["upper"], values["charge_share"]),
        ("discharge", values["upper"], values["lower"], 1 - values["charge_share"]),
    ):
        k = values[f"{name}_curvature"]
        a = start + (end - start) / -np.expm1(-k * share * values["period"])
        values[f"{name}_asymptote"] = a
        values[f"{name}_slope"] = k * (a - middle)
    return values


STUDIED = (
    "charge_curvature", "charge_slope", "charge_asymptote", "discharge_curvature", "discharge_slope",
    "discharge_asymptote", "upper", "lower", "turns", "period",
)


def study_bound(repeats: int = 60) -> None:
    """Root-mean-square error over the bound, pooled in several ways."""
    grid = [
        (Train(x, y, n + 0.4, per, noise), repeats if n < 500 else max(repeats // 4, 8))
        for x, y in ((1.2, 1.2), (1.5, 2.5), (2.0, 2.0), (3.0, 3.0), (5.0, 1.5))
        for n, per in ((3, 400.3), (10, 200.3), (100, 60.21), (1000, 40.37))
        for noise in (0.001, 0.01, 0.03)
    ]
    rows: list[tuple[Train, dict[str, float]]] = []
    for i, (train, count) in enumerate(grid):
        for k in range(count):
            rows.append((train, _squares(train, 10_000 * i + k)))
    print("rms error / Cramér–Rao bound (mean of squares over captures; ± its own standard error)")
    _table("all", rows)
    for n in (3, 10, 100, 1000):
        _table(f"{n} cycles", [r for r in rows if int(r[0].cycles) == n])
    for x in (1.2, 1.5, 2.0, 3.0, 5.0):
        _table(f"x = {x}", [r for r in rows if r[0].x_up == x])
    for noise in (0.001, 0.01, 0.03):
        _table(f"noise {100 * noise} %", [r for r in rows if r[0].noise == noise])


def _squares(train: Train, seed: int) -> dict[str, float]:
    phase = float(np.random.default_rng(seed + 77).random())
    found = measure(train.capture(phase, seed), NODE)
    limit = bound(train, phase) if train.cycles < 50 else _long_bound(train)
    truth, values = train.truth(), derived(found)
    squares = {n: ((values[n] - truth[n]) / limit[n]) ** 2 for n in STUDIED if n != "turns"}
    if limit["charge_curvature"] * train.tau > 0.1:
        del squares["charge_asymptote"]
    if limit["discharge_curvature"] * train.tau > 0.1:
        del squares["discharge_asymptote"]
    at = found.turns + phase * train.period
    error = at - np.round(at / train.period) * train.period
    squares["turns"] = float(np.mean(error**2)) / limit["turns"] ** 2
    return squares


_KNOWN: dict[Train, dict[str, float]] = {}


def _long_bound(train: Train) -> dict[str, float]:
    """Of many cycles, at any phase: what is shared goes with N^−½, the period with N^−3/2, single turns stay."""
    if train not in _KNOWN:
        part = Train(train.x_up, train.x_down, min(train.cycles, 60.4), train.per_cycle, train.noise)
        ratio = part.cycles / train.cycles
        powers = {"period": 1.5, "turns": 0.0}
        _KNOWN[train] = {n: v * ratio ** powers.get(n, 0.5) for n, v in bound(part, 0.2).items()}
    return _KNOWN[train]


def _table(title: str, rows: list[tuple[Train, dict[str, float]]]) -> None:
    cells = []
    for name in STUDIED:
        squares = np.array([r[1][name] for r in rows if name in r[1]])
        if squares.size:
            ratio = float(np.sqrt(squares.mean()))
            error = 0.5 * ratio * squares.std() / squares.mean() / np.sqrt(squares.size)
            short = name.replace("discharge", "dis").replace("charge", "ch")
            cells.append(f"{short} {ratio:.3f}±{error:.3f}")
    print(f"  {title:12s} " + "  ".join(cells))


COVERED = (
    "period", "charge_share", "upper", "lower", "charge_curvature", "discharge_curvature", "charge_slope",
    "discharge_slope",
)


def study_coverage(repeats: int = 2000) -> None:
    """Coverage of 95 % intervals from the record's own u on white noise, then with jitter, 8 bits, scope errors."""
    rng = np.random.default_rng(5)
    rows = []
    for k in range(repeats):
        x, y = rng.uniform(1.2, 5.0, 2)
        cycles = float(np.exp(rng.uniform(np.log(2.2), np.log(60.0))))
        train = Train(x, y, cycles, float(rng.uniform(40, 300)), float(10 ** rng.uniform(-3, -1.52)))
        phase = float(rng.random())
        found = measure(train.capture(phase, 50_000 + k), NODE)
        truth = train.truth()
        limit = bound(train, phase) if k % 10 == 0 else {}
        row = {}
        for name in COVERED[:6]:
            z = (found.value(name) - truth[name]) / found.u(name)
            row[name] = (z, found.u(name) / limit[name] if name in limit else np.nan, cycles)
        rows.append(row)
    print(f"white noise, {repeats} captures of 2 to 60 cycles: share of 95 % intervals (u_noise) that hold the truth")
    _coverage_table(rows)
    print("the same, by number of cycles")
    for low, high in ((2, 4), (4, 8), (8, 20), (20, 60)):
        _coverage_table([r for r in rows if low <= r["period"][2] < high], f"{low} to {high} cycles")


def _coverage_table(rows: list[dict[str, tuple[float, float, float]]], title: str = "all") -> None:
    cells, every = [], []
    for name in COVERED[:6]:
        z = np.array([r[name][0] for r in rows])
        width = np.array([r[name][1] for r in rows])
        every.append(np.abs(z) < 1.96)
        sharp = np.nanmean(width) if np.isfinite(width).any() else np.nan
        cells.append(f"{name} {100 * np.mean(every[-1]):.1f} % (u/bound {sharp:.2f})")
    print(f"  {title:16s} all together {100 * np.mean(every):.1f} %;  " + ", ".join(cells))


def study_jitter(repeats: int = 400) -> None:
    """With jitter, 8 bits and scope errors drawn: intervals from u, that is with the scope's own terms."""
    from tools.bench.chain import Input
    from tools.bench.chain import measure as record
    from tools.bench.simulate import simulate
    from tools.cycle_families import nodes, op_amp_parts, op_amp_truth, to_capture

    rng = np.random.default_rng(8)
    held: dict[str, list[bool]] = {}
    sharp: dict[str, list[float]] = {}
    for k in range(repeats):
        parts = op_amp_parts(rng)
        truth = op_amp_truth(parts, simulate("op-amp", parts))
        swing = truth["upper"] - truth["lower"]
        cycles, per_cycle = float(np.exp(rng.uniform(np.log(4), np.log(40)))), float(rng.uniform(100, 400))
        jitter = 10 ** rng.uniform(-4, -2.3) * swing
        waves = simulate("op-amp", parts, cycles=int(cycles) + 4, seed=k, threshold_noise=jitter)
        error = {"gain": rng.uniform(-0.03, 0.03), "offset": rng.uniform(-0.02, 0.02) * swing,
                 "timebase": rng.uniform(-50e-6, 50e-6)}
        interval = truth["period"] / per_cycle
        setting = Input(gain=error["gain"], offset=error["offset"], noise_divisions=float(rng.uniform(0.02, 0.06)))
        seen = record(waves, {"capacitor": setting}, interval, int(cycles * per_cycle), timebase=error["timebase"],
                      seed=k + 1)
        found = measure(to_capture(seen.channels, interval), nodes("capacitor"))
        for name in COVERED[:6]:
            level = name in ("upper", "lower")
            clock = 0.0 if level or name == "charge_share" else 50e-6 / np.sqrt(3) * truth[name]
            scope = np.hypot(0.03 / np.sqrt(3) * truth[name], 0.02 * swing / np.sqrt(3)) if level else clock
            u = float(np.hypot(found.u(name), scope))
            held.setdefault(name, []).append(abs(found.value(name) - truth[name]) < 1.96 * u)
            sharp.setdefault(name, []).append(u / (swing if level else truth[name]))
    print(f"jitter, 8 bits and scope errors, {repeats} captures: share of 95 % intervals (u) that hold the truth")
    cells = [f"{n} {100 * np.mean(held[n]):.1f} % (median u {np.median(sharp[n]):.1e})" for n in held]
    print(f"  all together {100 * np.mean(list(held.values())):.1f} %;  " + ", ".join(cells))


def study_conditions(repeats: int = 100) -> None:
    """How often each condition is named, how often something else is, and how often the constants are within 3 u."""
    from tools.cycle_families import FAMILIES

    print(f"conditions, {repeats} captures each: named; named beside it; constants within 3 u of the truth")
    for family, build in FAMILIES.items():
        named, beside, within = 0, dict[str, int](), list[bool]()
        for seed in range(repeats):
            case = build(seed)
            found = measure(case.capture, case.assignments)
            codes = {r.code for r in found.remarks}
            named += case.code in codes
            for code in codes - {case.code}:
                beside[code] = beside.get(code, 0) + 1
            within += [abs(found.value(n) - t) < 3 * found.u(n) for n, t in case.truth.items() if n in found]
        wanted = f"{build(0).code} {100 * named / repeats:.0f} %" if build(0).code else "nothing to name"
        others = ", ".join(f"{c} {100 * n / repeats:.0f} %" for c, n in beside.items()) or "nothing"
        print(f"  {family:18s} {wanted:24s} beside it: {others:40s} within 3 u: {100 * np.mean(within):.1f} %")


STUDIES: dict[str, Callable[[], None]] = {
    "bound": study_bound, "coverage": study_coverage, "jitter": study_jitter, "conditions": study_conditions,
}


def main(words: list[str]) -> None:
    for word in words or list(STUDIES):
        began = time.perf_counter()
        print(f"\n== {word}")
        STUDIES[word]()
        print(f"   ({time.perf_counter() - began:.0f} s)")


if __name__ == "__main__":
    main(sys.argv[1:])
