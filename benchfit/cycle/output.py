"""What a square output shows: its levels, its edges, its period and the share of it spent high."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.edges import Edges, durations, find_edges
from benchfit.cycle.levels import States, state_levels
from benchfit.cycle.period import fit_period
from benchfit.cycle.observed import Observed
from benchfit.cycle.trace import Trace

Array = NDArray[np.float64]


def observe_output(trace: Trace) -> tuple[Observed | None, States, Edges]:
    """Constants of a square output; None where it has no full period."""
    states = state_levels(trace)
    edges = find_edges(trace, states)
    if edges.size < 3:
        return None, states, edges
    names, values, variances = ["period", "high_share"], [0.0, 0.0], [0.0, 0.0]
    dt = trace.interval
    number = (np.arange(edges.size) + int(edges.rising[0])) // 2
    fit = fit_period(edges.index * dt, number, edges.rising.astype(int), edges.variance * dt**2)
    share, share_variance = _share(edges, dt, fit.period)
    values[:], variances[:] = [fit.period, share], [fit.u**2, share_variance]
    for name, level in (("high", states.high), ("low", states.low)):
        names.append(name)
        values.append(level)
        variances.append(_level_variance(trace, states, level, edges))
    for name, rising in (("rise_time", True), ("fall_time", False)):
        found = durations(trace, states, edges, rising)
        if found is not None:
            names.append(name)
            values.append(found[0])
            variances.append(found[1] ** 2)
    turns = trace.time(edges.index[edges.rising])
    return Observed(tuple(names), np.array(values), np.diag(variances), turns, fit.jitter, trace.noise), states, edges


def _share(edges: Edges, dt: float, period: float) -> tuple[float, float]:
    """Mean high time over mean high plus mean low time, and its variance."""
    lengths = np.diff(edges.index) * dt
    rising = edges.rising[:-1]
    high, low = lengths[rising], lengths[~rising]
    total = high.mean() + low.mean()
    share = float(high.mean() / total)
    weight = np.zeros(edges.size)
    for these, factor in ((np.flatnonzero(rising), 1 - share), (np.flatnonzero(~rising), -share)):
        np.add.at(weight, these + 1, factor / these.size)
        np.add.at(weight, these, -factor / these.size)
    variance = float(np.sum((weight * dt) ** 2 * edges.variance))
    pairs = min(high.size, low.size)
    if pairs > 2:
        rest = (1 - share) * high[:pairs] - share * low[:pairs]
        variance = max(variance, float(rest.var(ddof=1)) / pairs)
    return share, variance / total**2


def _level_variance(trace: Trace, states: States, level: float, edges: Edges) -> float:
    """Of a level, from the noise of the samples near it and the scatter of the single states."""
    near = max(trace.size // 4, 1)
    return float(max(trace.noise**2 / near, trace.resolution**2 / 12.0 / max(edges.size, 1)))
