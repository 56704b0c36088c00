"""Which part's drift makes the frequency drift.

All measured quantities are regressed on the shape in time that the frequency's drift has; what they change by
along it is a fingerprint, with the covariance that the records' own scatter gives it. Every part (and pair
of parts) of the build is tried as the one that drifted: how far it must have moved to leave that
fingerprint, and how well it then does (evidence with a Gaussian prior on its effect). Parts whose
fingerprints are alike share the probability, and so the share of the drift: where the captures cannot tell,
the result says so.

A cause's share is what it changes ln f by, over what the frequency changed by, along a straight line in the
parts' coordinates as in the miss budget (Aumann & Shapley 1974: with one or two causes the mean slope of the
line).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Protocol

import numpy as np

from benchfit.burnin.drift import Array, Basis, Drift
from benchfit.burnin.result import Cause

EFFECT = 0.05
"""Prior standard deviation of a cause's effect on ln f."""
MOST = 0.3
"""Prior standard deviation of a part's own relative change, at most."""
FLOOR = 0.004
"""What the closed forms leave out of a real circuit's change, as a share of it."""
LIVE = 0.03
"""Probability from which a part counts as one that may have drifted."""
AWAY = 0.15
"""How far off the model may be in a quantity whose changes it is asked about (of the swing; in ln)."""
PAIR = 0.02
"""Prior odds of two drifting parts against one."""
ALIKE = 0.999
"""Cosine of two fingerprints from which on they are not tried as a pair."""
MOVES = {"delay": 0.02, "slew": 0.02, "C_stray": 0.02, "C_slope": 0.02, "ESR": 0.3, "I_leak": 0.5}
"""How readily a parasitic drifts in a burn-in, against how often it is there at all (judgement: a leak grows
or heals, an electrolytic dries out; a chip's speed and a board's layout stay what they are)."""
SHOWN = 0.02
"""Smallest share that is listed."""
_INDEPENDENT = (
    "charge_time",
    "discharge_time",
    "upper",
    "lower",
    "charge_asymptote",
    "discharge_asymptote",
    "charge_time_constant",
    "discharge_time_constant",
    "high",
    "low",
)


class Build(Protocol):
    """A build's forward model as :func:`benchfit.pipeline.expected` has it."""

    @property
    def names(self) -> tuple[str, ...]: ...
    @property
    def units(self) -> tuple[str, ...]: ...
    @property
    def coordinates(self) -> tuple[str, ...]: ...
    @property
    def weights(self) -> tuple[float, ...]: ...
    @property
    def sizes(self) -> tuple[float, ...]: ...
    def state(self, values: Mapping[str, float]) -> Array: ...
    def values(self, states: Array) -> dict[str, Array]: ...
    def measured(self, states: Array) -> dict[str, Array]: ...


@dataclass(frozen=True, eq=False)
class Fingerprint:
    """Changes over the run with their covariance: of voltages in V, of everything else as Δ ln.

    ``level`` is what they are in the middle of it, ``frequency`` is Δ ln f, ``swing`` (V) the size that
    voltages are of.
    """

    names: tuple[str, ...]
    change: Array
    covariance: Array
    level: Array
    frequency: float
    swing: float


@dataclass(frozen=True)
class Blamed:
    """Causes by share, what they leave of the drift (1 − their sum), or why nothing can be said."""

    causes: tuple[Cause, ...] = ()
    unexplained: float | None = None
    why: str = ""


def quantities(names: Sequence[str]) -> tuple[str, ...]:
    """The measured quantities that a fingerprint is made of, out of those that a log has."""
    found = tuple(n for n in _INDEPENDENT if n in names)
    if "charge_time" in found and "discharge_time" in found:
        return found
    return tuple(n for n in ("frequency", "duty") if n in names) + found


def fingerprint(base: Basis, names: Sequence[str], y: Array, period: Array, found: Drift) -> Fingerprint:
    """Regress every quantity on the shape that the period's drift has.

    Parameters
    ----------
    base : Basis
    names : sequence of str
    y : ndarray, shape (p, n)
        Block means of the quantities.
    period : ndarray, shape (n,)
        Block means of the period.
    found : Drift
        The period's drift.
    """
    column = base.rotated @ found.shape.over(base.blocks.time, base.blocks.width)
    share = (found.walk / found.sigma) ** 2 if found.sigma > 0 else 0.0
    w = 1 / (1 + share * base.power)
    rows = np.vstack([y, period])
    level = rows.mean(axis=1)
    z = ((rows - level[:, None]) @ base.rotated.T) * np.sqrt(w)
    design = np.stack([base.one, column], axis=1) * np.sqrt(w)[:, None]
    inverse = np.linalg.inv(design.T @ design)
    solution = inverse @ design.T @ z.T
    rest = z - (design @ solution).T
    spread = rest @ rest.T / max(rest.shape[1] - 2, 1)
    # Few blocks do not tell many quantities' correlations: lean towards none.
    lean = rows.shape[0] / (rows.shape[0] + rest.shape[1])
    spread = (1 - lean) * spread + lean * np.diag(np.diag(spread))
    ends = found.shape.at(np.array([0.0, base.span]))
    reach = float(ends[1] - ends[0])
    change = solution[1] * reach
    covariance = spread * inverse[1, 1] * reach**2
    start = level + solution[0] + solution[1] * float(ends[0])
    middle = start + 0.5 * change
    is_log = np.array([not _is_voltage(n) for n in (*names, "period")]) & (start > 0) & (start + change > 0)
    with np.errstate(invalid="ignore", divide="ignore"):
        change = np.where(is_log, np.log((start + change) / start), change)
    size = np.where(is_log, middle, 1.0)
    covariance = covariance / np.outer(size, size)
    by_name = dict(zip(names, level, strict=False))
    swing = abs(by_name.get("upper", 0.0) - by_name.get("lower", 0.0))
    swing = swing or abs(by_name.get("high", 1.0) - by_name.get("low", 0.0))
    return Fingerprint(tuple(names), change[:-1], covariance[:-1, :-1], middle[:-1], -float(change[-1]), swing)


def blame(build: Build, found: Fingerprint, parts: Mapping[str, float]) -> Blamed:
    """Shares of the frequency's drift by the parts that drifted.

    Parameters
    ----------
    build : Build
    found : Fingerprint
    parts : mapping of float
        The parts' effective values (SI) as the log has them.
    """
    middle = build.state(parts)
    here = {k: float(v[0]) for k, v in build.measured(middle[None, :]).items()}
    if not math.isfinite(here.get("frequency", math.nan)):
        return Blamed(why="the build sheet's circuit does not run with the parts found")
    use = [i for i, n in enumerate(found.names) if _is_spoken_of(found, i, here.get(n, math.nan))]
    if not use:
        return Blamed(why="nothing was measured that the circuit speaks of")
    names = [found.names[i] for i in use]
    change = found.change[use]
    white = _whitener(_with_floor(found, use))
    slopes, ln_f = _slopes(build, middle, names)
    slopes, ln_f = _secant(build, middle, names, slopes, ln_f, found.frequency)
    hypotheses = _weighed(build, white @ slopes.T, ln_f, white @ change)
    if not hypotheses:
        return Blamed(why="no part of the circuit moves what was measured")
    return _shared(build, hypotheses, ln_f, found, middle)


@dataclass(frozen=True, eq=False)
class _Hypothesis:
    parts: tuple[int, ...]
    log_odds: float
    amplitude: Array
    variance: Array


def _with_floor(found: Fingerprint, use: list[int]) -> Array:
    """The covariance, widened by what a closed form leaves out of a real circuit's change."""
    scale = np.array([found.swing if _is_voltage(found.names[i]) else 1.0 for i in use])
    floor = FLOOR * (np.abs(found.change[use]) + abs(found.frequency) * scale)
    return found.covariance[np.ix_(use, use)] + np.diag(floor**2)


def _is_spoken_of(found: Fingerprint, i: int, expected: float) -> bool:
    """Whether the model has a quantity, and puts it where it was measured: what it misses (a flyback shorter
    than a sample, a node that something holds) it cannot explain the changes of."""
    level = float(found.level[i])
    if _is_voltage(found.names[i]):
        return abs(expected - level) < AWAY * found.swing
    return expected > 0 and level > 0 and abs(math.log(expected / level)) < AWAY


def _is_voltage(name: str) -> bool:
    return name in ("upper", "lower", "high", "low") or name.endswith("asymptote")


def _whitener(covariance: Array) -> Array:
    size = np.sqrt(np.diag(covariance))
    size = np.where(size > 0, size, 1.0)
    power, vectors = np.linalg.eigh(covariance / np.outer(size, size))
    power = np.maximum(power, 1e-9 * power.max())
    return np.asarray((vectors / np.sqrt(power)).T / size)


def _slopes(build: Build, middle: Array, names: Sequence[str]) -> tuple[Array, Array]:
    """d(fingerprint)/d(coordinate), shape (parts, names), and d(ln f)/d(coordinate)."""
    facts = zip(build.coordinates, build.sizes, middle, strict=False)
    step = np.array([_step(coordinate, size, x) for coordinate, size, x in facts])
    rows = np.nan_to_num(_moved(build, middle, step, (*names, "frequency")) / step)
    return rows[:-1].T, rows[-1]


def _step(coordinate: str, size: float, x: float) -> float:
    """A step small enough for a derivative: of ln x, of a part's size, of a level's (V) that may be 0."""
    if coordinate == "log":
        return 1e-3
    return 1e-3 * (abs(x) or (size if 0 < size < math.inf else 0.1))


def _moved(build: Build, middle: Array, step: Array, names: Sequence[str]) -> Array:
    """Differences between + and − half a step, one-sided where a side does not run: (names, parts)."""
    count = len(build.names)
    up, down = np.tile(middle, (count, 1)), np.tile(middle, (count, 1))
    index = np.arange(count)
    up[index, index] += step / 2
    down[index, index] -= step / 2
    here, above, below = (_scaled(build.measured(x), names) for x in (middle[None, :], up, down))
    rows = []
    for name in names:
        both = above[name] - below[name]
        one = 2 * (above[name] - here[name])
        rows.append(np.where(np.isfinite(both), both, np.nan_to_num(one)))
    return np.array(rows)


def _scaled(measured: Mapping[str, Array], names: Sequence[str]) -> dict[str, Array]:
    """Voltages as they are, the logarithm of everything else."""
    with np.errstate(invalid="ignore", divide="ignore"):
        return {n: measured[n] if _is_voltage(n) else np.log(measured[n]) for n in names}


def _secant(
    build: Build, middle: Array, names: Sequence[str], slopes: Array, ln_f: Array, moved: float
) -> tuple[Array, Array]:
    """Slopes over as much of a change as would make the whole drift, where that much is sensible."""
    with np.errstate(divide="ignore", invalid="ignore"):
        step = moved / ln_f
    limit = np.array([MOST if c == "log" else np.inf for c in build.coordinates])
    sensible = np.isfinite(step) & (np.abs(step) < limit) & (step != 0)
    step = np.where(sensible, step, 1.0)
    rows = _moved(build, middle, step, (*names, "frequency"))
    fine = sensible & np.isfinite(rows).all(axis=0)
    new, ratio = rows[:-1].T / step[:, None], rows[-1] / step
    return np.where(fine[:, None], new, slopes), np.where(fine, ratio, ln_f)


def _weighed(build: Build, columns: Array, ln_f: Array, seen: Array) -> list[_Hypothesis]:
    """Every part and pair with its log odds; columns: whitened fingerprints, shape (names, parts)."""
    weights = np.array([w * MOVES.get(n, 1.0) for n, w in zip(build.names, build.weights, strict=True)])
    weights = weights / weights.sum()
    with np.errstate(divide="ignore"):
        scale = np.where(np.abs(ln_f) > 1e-9, EFFECT / np.abs(ln_f), 0.0)
    log = np.array(build.coordinates) == "log"
    scale = np.minimum(scale, np.where(log, MOST, np.array(build.sizes)))
    live = [j for j in range(columns.shape[1]) if scale[j] > 0 and weights[j] > 0 and np.any(columns[:, j])]
    found = [_hypothesis((j,), columns, scale, seen, math.log(weights[j])) for j in live]
    best = sorted(found, key=lambda h: -h.log_odds)[:12]
    for a, b in combinations([h.parts[0] for h in best], 2):
        if _cosine(columns[:, a], columns[:, b]) < ALIKE:
            prior = math.log(PAIR * weights[a] * weights[b])
            found.append(_hypothesis((a, b), columns, scale, seen, prior))
    return found


def _hypothesis(parts: tuple[int, ...], columns: Array, scale: Array, seen: Array, prior: float) -> _Hypothesis:
    """Evidence and amplitudes of parts with N(0, scale²) priors under unit noise: conjugate normal model."""
    own = columns[:, parts] * scale[list(parts)]
    precision = np.eye(len(parts)) + own.T @ own
    mean = np.linalg.solve(precision, own.T @ seen)
    gain = 0.5 * float(seen @ own @ mean) - 0.5 * float(np.linalg.slogdet(precision)[1])
    variance = np.diag(np.linalg.inv(precision)) * scale[list(parts)] ** 2
    return _Hypothesis(parts, prior + gain, mean * scale[list(parts)], variance)


def _cosine(a: Array, b: Array) -> float:
    return abs(float(a @ b)) / math.sqrt(float(a @ a) * float(b @ b))


def _shared(build: Build, hypotheses: list[_Hypothesis], ln_f: Array, found: Fingerprint, middle: Array) -> Blamed:
    """Shares averaged over the hypotheses."""
    odds = np.array([h.log_odds for h in hypotheses])
    probability = np.exp(odds - odds.max())
    probability /= probability.sum()
    count = len(build.names)
    mean, square, moved = np.zeros(count), np.zeros(count), np.zeros(count)
    for p, h in zip(probability, hypotheses, strict=True):
        for j, amplitude, variance in zip(h.parts, h.amplitude, h.variance, strict=True):
            share = amplitude * ln_f[j] / found.frequency
            mean[j] += p * share
            square[j] += p * (share**2 + variance * (ln_f[j] / found.frequency) ** 2)
            moved[j] += p * amplitude
    live = [j for j in np.argsort(-np.abs(mean)) if abs(mean[j]) >= SHOWN]
    # Parts that would each do alone: no capture of this run tells one from the other.
    rivals = {h.parts[0] for p, h in zip(probability, hypotheses, strict=True) if len(h.parts) == 1 and p > LIVE}
    causes = []
    for j in live:
        chance = float(sum(p for p, h in zip(probability, hypotheses, strict=True) if j in h.parts))
        change, unit = _own_change(build, middle, j, moved[j] / chance)
        either = tuple(build.names[k] for k in live if k != j and {j, k} <= rivals)
        u = math.sqrt(max(square[j] - mean[j] ** 2, 0.0))
        share = float(mean[j])
        causes.append(Cause(build.names[j], share, u, share * found.frequency, change, unit, either))
    if not causes:
        return Blamed(why="no part's drift, nor any pair's, explains what was measured")
    return Blamed(tuple(causes), 1 - sum(c.share for c in causes))


def _own_change(build: Build, middle: Array, part: int, amplitude: float) -> tuple[float, str]:
    """By how much a part moved: relative, or in its unit where it may be 0."""
    states = np.tile(middle, (2, 1))
    states[0, part] -= amplitude / 2
    states[1, part] += amplitude / 2
    before, after = (float(v) for v in build.values(states)[build.names[part]])
    if build.coordinates[part] == "log" and before > 0:
        return after / before - 1, "1"
    if build.coordinates[part] == "inverse":
        return amplitude, "S" if build.units[part] == "Ω" else f"1/({build.units[part]})"
    return after - before, build.units[part]
