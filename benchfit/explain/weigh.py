"""Weigh every hypothesis against the data: evidence of single causes on grids, of pairs by Laplace's method."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc, logsumexp

from benchfit.explain import odds
from benchfit.explain.hypotheses import Freed, Hypothesis, freed_of, singles
from benchfit.explain.infer import IDENTITY, Batch, Relaxed, begin, relax, whitener
from benchfit.explain.model import Array, Model

STARTS = 9
# A held part this far out (its limits lie at 1.73) is a second cause to be asked about.
STRAINED = 2.0
_Q = np.array([-4.5, -3.0, -2.0, -1.2, -0.6, 0.0, 0.6, 1.2, 2.0, 3.0, 4.5])


@dataclass(frozen=True, eq=False)
class Weighed:
    """A hypothesis with its evidence and what it makes of the build.

    Attributes
    ----------
    causes : tuple of str
    prior : float
        Prior probability (of all variants of these causes together).
    log_evidence : float
        ln of the mean likelihood under the hypothesis, up to one common constant; −inf where nothing fits.
    mean : ndarray, shape (n,)
        Posterior mean of the state.
    covariance : ndarray, shape (n, n)
    mode : ndarray, shape (n,)
        Best state.
    misfit : float
        Squared whitened residuals and pulls of the priors at the best state.
    order : int
        How many independent causes it takes.
    probability : float
        Posterior probability.
    """

    causes: tuple[str, ...]
    prior: float
    log_evidence: float
    mean: Array
    covariance: Array
    mode: Array
    misfit: float
    order: int = 1
    probability: float = 0.0


@dataclass(frozen=True, eq=False)
class _Case:
    """A model with what all its hypotheses share: the whitener, and where to begin."""

    model: Model
    white: Array
    spare: Array | None

    @staticmethod
    def of(model: Model) -> _Case:
        white = whitener(model.covariance)
        return _Case(model, white, begin(model, white))


def _batch(case: _Case, hypotheses: Sequence[Hypothesis], owns: int, moves: bool = True) -> Batch:
    """One row a hypothesis, own parameters at the middle of their range."""
    model = case.model
    rows = len(hypotheses)
    center = np.tile(model.center, (rows, 1))
    spread = np.tile(model.spread, (rows, 1))
    own = np.full((rows, owns), -1)
    gauge = np.zeros((rows, owns), int)
    t, low, high = np.zeros((rows, owns)), np.zeros((rows, owns)), np.ones((rows, owns))
    for r, hypothesis in enumerate(hypotheses):
        for index, value in hypothesis.shifts:
            center[r, index] = value
        for k, way in enumerate(hypothesis.freed):
            own[r, k], gauge[r, k] = way.index, way.gauge
            low[r, k], high[r, k] = way.low, way.high
            t[r, k] = 0.5 * (way.low + way.high)
            spread[r, way.index] = 0.0
    return Batch(center, spread, own, gauge, t, low, high, moves, case.spare)


def _starts(way: Freed) -> Array:
    """Where the search of one freed parameter begins: all over its range, closer about the nominal."""
    even = np.linspace(way.low, way.high, STARTS)
    if way.hole is None:
        return even
    middle = 0.5 * (way.hole[0] + way.hole[1])
    near = middle + np.array([-0.3, 0.3]) * (way.near or 1.0)
    found: Array = np.clip(np.concatenate([even, near]), way.low, way.high)
    return found


def weigh(model: Model, pairs: bool = False) -> list[Weighed]:
    """Every hypothesis that the circuit and the sheet allow, by falling probability (which sum to 1).

    Two independent causes are tried where no single one explains the record, or where ``pairs`` asks for it.
    """
    case = _Case.of(model)
    hypotheses = singles(model)
    fixed = [h for h in hypotheses if not h.freed]
    free = [h for h in hypotheses if len(h.freed) == 1]
    families = [h for h in hypotheses if len(h.freed) == 2]
    found = _weigh_fixed(case, fixed) + _weigh_free(case, free)
    found += _weigh_families(case, families)
    merged = _merge(found)
    if pairs or not _explains(model, merged):
        merged = _merge(found + _weigh_pairs(case, merged))
    return merged


def _explains(model: Model, found: Sequence[Weighed]) -> bool:
    """Whether one of the live hypotheses fits the record as well as its noise and floors allow, with every part that
    it holds within its limits."""
    live = [w for w in found[:4] if w.probability > 0.02]
    best = min((w.misfit for w in live), default=np.inf)
    size = sum(not o.name.endswith("_jump") for o in model.observations)
    return bool(chdtrc(max(size, 1), best) > 0.2) and bool(live) and _strain(model, live[0]) < STRAINED


def _strain(model: Model, w: Weighed) -> float:
    """How far, in its prior's standard deviations, the most stretched of the held parts lies from its middle."""
    away = np.abs(w.mode - model.center) / np.where(model.spread > 0, model.spread, np.inf)
    held = [i for i, p in enumerate(model.parameters) if p.part is not None and p.name not in w.causes]
    return float(np.max(away[held], initial=0.0))


def _weigh_fixed(case: _Case, hypotheses: Sequence[Hypothesis]) -> list[Weighed]:
    done = relax(case.model, _batch(case, hypotheses, 0), 6, case.white)
    return [
        Weighed(
            h.causes,
            h.weight,
            float(done.log_weight[r]),
            done.state[r],
            done.covariance[r],
            done.state[r],
            float(done.cost[r]),
            h.order,
        )
        for r, h in enumerate(hypotheses)
    ]


def _weigh_free(case: _Case, hypotheses: Sequence[Hypothesis]) -> list[Weighed]:
    if not hypotheses:
        return []
    best = _search(case, hypotheses)
    # A grid about the best value, cut where the tolerance begins: evidence is an integral, not a height.
    repeated: list[int] = []
    points: list[float] = []
    weights: list[float] = []
    for r, h in enumerate(hypotheses):
        way = h.freed[0]
        width = best.own_u[r, 0]
        width = float(width) if np.isfinite(width) and width > 0 else (way.high - way.low) / 4
        for low, high in _pieces(way):
            t = np.unique(_piece_grid(low, high, float(best.t[r, 0]), width))
            if t.size < 2:
                continue
            repeated.extend([r] * t.size)
            points.extend(t)
            gaps = np.diff(t)
            weights.extend(0.5 * (np.concatenate([[0.0], gaps]) + np.concatenate([gaps, [0.0]])))
    rows = np.array(repeated)
    batch = _batch(case, hypotheses, 1, moves=False).take(rows)
    batch = replace(batch, t=np.array(points)[:, None])
    done = relax(case.model, batch, 4, case.white)
    found = []
    for r, h in enumerate(hypotheses):
        mine = np.flatnonzero(rows == r)
        way = h.freed[0]
        t = batch.t[mine, 0]
        inner = np.clip(t, way.low, way.high)
        if way.hole is not None:
            inner = np.where(np.abs(inner - way.hole[1]) < 1e-12, way.hole[1] + 1e-9, inner)
            inner = np.where(np.abs(inner - way.hole[0]) < 1e-12, way.hole[0] - 1e-9, inner)
        with np.errstate(divide="ignore"):
            logs = done.log_weight[mine] + np.log(way.density(inner) * np.array(weights)[mine])
        found.append(_averaged(h, logs, done, mine, best, r))
    return found


def _pieces(way: Freed) -> list[tuple[float, float]]:
    if way.hole is None:
        return [(way.low, way.high)]
    pieces = [(way.low, min(way.high, way.hole[0])), (max(way.low, way.hole[1]), way.high)]
    return [(a, b) for a, b in pieces if b > a]


def _piece_grid(low: float, high: float, best: float, width: float) -> Array:
    center = float(np.clip(best, low, high))
    grid = np.concatenate([center + width * _Q, np.linspace(low, high, 5)])
    if not low < best < high:
        # The tail beyond the edge: it falls off with the distance from the best value.
        tail = width * width / max(abs(best - center), width)
        grid = np.concatenate([grid, center + tail * _Q])
    kept: Array = np.clip(grid, low, high)
    return kept


def _averaged(
    h: Hypothesis, logs: Array, done: Relaxed, mine: NDArray[np.int64], best: Relaxed, row: int
) -> Weighed:
    total = float(logsumexp(logs)) if logs.size and np.any(np.isfinite(logs)) else -np.inf
    if not np.isfinite(total):
        return Weighed(
            h.causes,
            h.weight,
            -np.inf,
            best.state[row],
            best.covariance[row],
            best.state[row],
            np.inf,
            h.order,
        )
    p = np.exp(logs - total)
    live = p > 1e-9
    p, rows = p[live], mine[live]
    states = done.state[rows]
    mean = p @ np.nan_to_num(states)
    away = np.nan_to_num(states) - mean
    covariance = np.tensordot(p, done.covariance[rows], 1) + (away * p[:, None]).T @ away
    top = rows[np.argmax(p)]
    return Weighed(
        h.causes, h.weight, total, mean, covariance, done.state[top], float(np.min(done.cost[rows])), h.order
    )


def _search(case: _Case, hypotheses: Sequence[Hypothesis]) -> Relaxed:
    """The best state of each hypothesis with one freed parameter, from many starts."""
    begins = [_starts(h.freed[0]) for h in hypotheses]
    rows = np.repeat(np.arange(len(hypotheses)), [b.size for b in begins])
    batch = _batch(case, hypotheses, 1).take(rows)
    batch = replace(batch, t=np.concatenate(begins)[:, None])
    rough = relax(case.model, batch, 3, case.white)
    keep = []
    for r in range(len(hypotheses)):
        mine = np.flatnonzero(rows == r)
        keep.append(mine[np.argmin(rough.cost[mine])])
    chosen = np.array(keep)
    return relax(case.model, replace(batch.take(chosen), t=rough.t[chosen]), 8, case.white)


def _weigh_pairs(case: _Case, found: Sequence[Weighed]) -> list[Weighed]:
    """Two causes at once: the best single ones with every other that the data can tell from it."""
    model = case.model
    freed = freed_of(model)
    names = list(freed)
    alone = {w.causes[0]: w for w in found if len(w.causes) == 1 and np.isfinite(w.log_evidence)}
    weights = {n: odds.weight(n, model.circuit.part(n).kind) for n in names}
    total = sum(weights[a] * weights[b] for i, a in enumerate(names) for b in names[i + 1 :])
    known = {frozenset(f) for f in model.circuit.families}
    hypotheses: list[Hypothesis] = []
    begins: list[list[tuple[float, float]]] = []
    for first in list(alone)[:6]:
        for second in names:
            pair = frozenset((first, second))
            if first == second or pair in known:
                continue
            known.add(pair)
            prior = odds.PAIR * weights[first] * weights[second] / total
            for a in freed[first]:
                at = _gauged(a, float(alone[first].mode[a.index]))
                for b in freed[second]:
                    hypotheses.append(Hypothesis((first, second), prior, (), (a, b), 2))
                    along = np.linspace(b.low, b.high, 7)
                    begins.append([(x, float(y)) for y in along for x in (at, 0.5 * (a.low + a.high))])
    return _weigh_double(case, hypotheses, begins)


def _weigh_families(case: _Case, hypotheses: Sequence[Hypothesis]) -> list[Weighed]:
    """Two parts that one cause moves together."""
    begins = []
    for h in hypotheses:
        a, b = h.freed
        along = [np.linspace(w.low, w.high, 5) for w in (a, b)]
        begins.append([(float(x), float(y)) for x in along[0] for y in along[1]])
    return _weigh_double(case, hypotheses, begins)


def _weigh_double(
    case: _Case,
    hypotheses: Sequence[Hypothesis],
    begins: Sequence[Sequence[tuple[float, float]]],
) -> list[Weighed]:
    """Hypotheses that free two parts: the best of many starts, weighed by Laplace's method."""
    if not hypotheses:
        return []
    rows = np.repeat(np.arange(len(hypotheses)), [len(b) for b in begins])
    starts = np.array([pair for b in begins for pair in b])
    batch = replace(_batch(case, hypotheses, 2).take(rows), t=starts)
    rough = relax(case.model, batch, 3, case.white)
    keep = np.array(
        [(mine := np.flatnonzero(rows == g))[np.argmin(rough.cost[mine])] for g in range(len(hypotheses))]
    )
    fine = relax(case.model, replace(batch.take(keep), t=rough.t[keep]), 8, case.white)
    return [_pair(h, fine, r) for r, h in enumerate(hypotheses)]


def _gauged(way: Freed, x: float) -> float:
    if way.gauge == IDENTITY:
        return float(np.clip(x, way.low, way.high))
    size = abs(x)
    if size == 0:
        return 0.5 * (way.low + way.high)
    t = -np.log(size) if way.gauge == 3 else np.log(size)
    return float(np.clip(t, way.low, way.high))


def _is_ridge(h: Hypothesis, own_u: Array) -> bool:
    """Whether the data fix the two freed parts only together: no pair that is unseparated is a hypothesis."""
    return all(not u < 0.25 * (way.high - way.low) for u, way in zip(own_u, h.freed, strict=True))


def _pair(h: Hypothesis, fine: Relaxed, r: int) -> Weighed:
    """Laplace in the two freed parameters; a width beyond the range counts as the range."""
    if _is_ridge(h, fine.own_u[r]):
        return Weighed(
            h.causes, h.weight, -np.inf, fine.state[r], fine.covariance[r], fine.state[r], np.inf, h.order
        )
    density = 1.0
    volume = 1.0
    for k, way in enumerate(h.freed):
        width = way.high - way.low
        t = np.array([fine.t[r, k]])
        density *= float(way.density(t)[0])
        u = fine.own_u[r, k]
        volume *= min(np.sqrt(2 * np.pi) * u, width) if np.isfinite(u) else width
    if density <= 0 or not np.isfinite(fine.cost[r]):
        return Weighed(
            h.causes, h.weight, -np.inf, fine.state[r], fine.covariance[r], fine.state[r], np.inf, h.order
        )
    evidence = float(fine.log_weight[r] + np.log(density * volume))
    return Weighed(
        h.causes,
        h.weight,
        evidence,
        fine.state[r],
        fine.covariance[r],
        fine.state[r],
        float(fine.cost[r]),
        h.order,
    )


def _merge(found: Sequence[Weighed]) -> list[Weighed]:
    """Variants with the same causes become one entry; probabilities are normalised."""
    groups: dict[frozenset[str], list[Weighed]] = {}
    for w in found:
        groups.setdefault(frozenset(w.causes), []).append(w)
    merged = []
    for variants in groups.values():
        prior = sum(v.prior for v in variants)
        logs = np.array([v.log_evidence + np.log(v.prior) if v.prior > 0 else -np.inf for v in variants])
        total = float(logsumexp(logs)) if np.any(np.isfinite(logs)) else -np.inf
        best = variants[int(np.argmax(logs))]
        if not np.isfinite(total):
            merged.append(replace(best, prior=prior, log_evidence=-np.inf))
            continue
        p = np.exp(logs - total)
        mean = sum((q * v.mean for q, v in zip(p, variants, strict=True) if q > 0), np.zeros_like(best.mean))
        covariance = np.zeros_like(best.covariance)
        for q, v in zip(p, variants, strict=True):
            if q > 0:
                covariance += q * (v.covariance + np.outer(v.mean - mean, v.mean - mean))
        merged.append(
            Weighed(
                best.causes,
                prior,
                total - float(np.log(prior)),
                mean,
                covariance,
                best.mode,
                best.misfit,
                best.order,
            )
        )
    logs = np.array([w.log_evidence + np.log(w.prior) for w in merged])
    if not np.any(np.isfinite(logs)):
        return merged
    p = np.exp(logs - logsumexp(logs))
    done = [replace(w, probability=float(q)) for w, q in zip(merged, p, strict=True)]
    return sorted(done, key=lambda w: (-w.probability, len(w.causes)))
