"""What a square output shows: its levels, its edges, its period and the share of it spent high."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.conditions import irregularities
from benchfit.cycle.edges import Edges, durations, find_edges
from benchfit.cycle.levels import States, state_levels
from benchfit.cycle.observed import Observed
from benchfit.cycle.period import fit_period
from benchfit.cycle.scatter import mean_scatter
from benchfit.cycle.sequence import Sequence, closed, put_in_order, regular
from benchfit.cycle.sharp import steady_share
from benchfit.cycle.trace import Trace
from benchfit.errors import Remark


@dataclass(frozen=True, eq=False)
class OutputFound:
    """Constants of an output (None without a full period), its levels, its regular edges and their order."""

    observed: Observed | None
    states: States
    edges: Edges
    order: Sequence


def observe_output(trace: Trace) -> OutputFound:
    """Constants of a square output; none where it has no full period."""
    states = state_levels(trace)
    edges = find_edges(trace, states)
    order = put_in_order(edges.index, edges.rising)
    if states.amplitude < 6.0 * trace.noise and not regular(edges.index, edges.rising):
        return OutputFound(None, states, edges, order)
    kept = edges.take(order.keep)
    if order.odd.size > 2 and order.odd[0]:
        kept, order = kept.take(np.arange(1, kept.size)), replace(order, odd=order.odd[1:])
    if kept.size < 3:
        return OutputFound(None, states, kept, order)
    dt = trace.interval
    at, number = closed(kept.index * dt, kept.rising, order.odd)
    fit = fit_period(at, number, kept.rising.astype(int), kept.variance * dt**2)
    share, share_variance, share_jitter = _share(kept, dt, order.odd)
    if kept.sharp.mean() > 0.8:
        run = _longest_run(order.odd)
        sharp = run[kept.sharp[run]]
        steady = steady_share(kept.before[sharp], kept.rising[sharp], number[sharp], fit.period / dt, fit.u / dt)
        if steady is not None:
            share, share_variance, share_jitter = *steady, 0.0
    names = ["period", "high_share", "high", "low"]
    values = [fit.period, share, states.high, states.low]
    variances = [fit.u**2, share_variance, *(_level_variance(trace, kept) for _ in range(2))]
    for name, rising in (("rise_time", True), ("fall_time", False)):
        found = durations(trace, states, kept, rising)
        if found is not None:
            names.append(name)
            values.append(found[0])
            variances.append(found[1] ** 2)
    turns = kept.index[kept.rising] * dt
    observed = Observed(
        tuple(names),
        np.array(values),
        np.diag(variances),
        turns,
        fit.jitter,
        trace.noise,
        remarks=tuple(_begun(trace, kept, order) + irregularities(trace.node, order)),
        series=_series(kept, dt, order.odd),
        share_jitter=share_jitter,
        node=trace.node,
    )
    return OutputFound(observed, states, kept, order)


def _longest_run(odd: Mask) -> Index:
    """The edges between two irregular intervals (or ends) of which there are most."""
    cuts = np.flatnonzero(odd) + 1
    runs = np.split(np.arange(odd.size + 1), cuts)
    return max(runs, key=len)


def _begun(trace: Trace, edges: Edges, order: Sequence) -> list[Remark]:
    """``startup``, where the record begins in a phase that has lasted longer already than all like it."""
    if order.leading != 1.0 or edges.size < 4:
        return []
    gaps = np.diff(edges.index)
    like = gaps[(edges.rising[:-1] != edges.rising[0]) & ~order.odd]
    if like.size == 0:
        return []
    lead, longest = float(edges.index[0]), float(like.max())
    if lead < longest + max(3.0, 0.05 * longest, 3.0 * float(np.ptp(like))):
        return []
    says = f"{trace.node}: the first phase lasts over {lead / longest:.3g} times as long as the others; left out"
    return [Remark("startup", says)]


def _share(edges: Edges, dt: float, odd: Mask) -> tuple[float, float, float]:
    """Mean high time over mean high plus mean low time, its variance, and how much of that is jitter."""
    lengths = np.diff(edges.index) * dt
    rises, falls = (np.flatnonzero((edges.rising[:-1] == d) & ~odd) for d in (True, False))
    if rises.size == 0 or falls.size == 0:
        rises, falls = (np.flatnonzero(edges.rising[:-1] == d) for d in (True, False))
    high, low = lengths[rises], lengths[falls]
    total = high.mean() + low.mean()
    share = float(high.mean() / total)
    weight = np.zeros(edges.size)
    for these, factor in ((rises, 1 - share), (falls, -share)):
        np.add.at(weight, these + 1, factor / these.size)
        np.add.at(weight, these, -factor / these.size)
    variance = float(np.sum((weight * dt) ** 2 * edges.variance))
    pairs = min(high.size, low.size)
    rest = (1 - share) * high[:pairs] - share * low[:pairs]
    single = float(np.mean(edges.variance)) * dt**2 * 2.0 * (1 - share + share**2)
    jitter = mean_scatter(rest, single)
    return share, (variance + jitter) / total**2, jitter / total**2


def _series(edges: Edges, dt: float, odd: Mask) -> dict[str, Array]:
    """Single periods between like edges, irregular ones left out."""
    periods = (edges.index[2:] - edges.index[:-2]) * dt
    fine = ~(odd[1:] | odd[:-1])
    return {"period": periods[fine][::2]}


def _level_variance(trace: Trace, edges: Edges) -> float:
    """Of a level, from the noise of the samples near it and the quantisation of the single states."""
    return float(max(4.0 * trace.noise**2 / trace.size, trace.resolution**2 / 12.0 / max(edges.size, 1)))
