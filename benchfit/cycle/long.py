"""Records of very many cycles: looked at in a few windows, the period taken over all of it.

A thousand cycles tell a phase's constants to within what no scope's gain is good for; ten thousand more only take
time. The period alone goes on gaining from length, and it does so through the windows' distance.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.observed import Observed
from benchfit.cycle.period import fit_period
from benchfit.cycle.scatter import mean_scatter
from benchfit.cycle.sequence import closed, put_in_order
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Crossings

MANY = 12_000
_WINDOWS = 8
_PASSAGES = 2_000

Route = Callable[[Trace, Crossings, int], "Observed | None"]


def observe_long(trace: Trace, passages: Crossings, route: Route) -> Observed | None:
    """Constants of a record of very many cycles.

    Parameters
    ----------
    passages : Crossings
        All of the record's, in order.
    route : callable
        (part of the record, its passages, sample at which it begins) → its constants.
    """
    at = (passages.before + passages.after) / 2.0
    order = put_in_order(at, passages.rising)
    shift = closed(at, passages.rising, order.odd)[0] - at
    rises = np.flatnonzero(passages.rising)
    found: list[Observed] = []
    instants, numbers, variances = [], [], []
    for begin in np.linspace(0, passages.size - _PASSAGES - 1, _WINDOWS).astype(int):
        part = np.arange(begin, begin + _PASSAGES)
        first, stop = int(passages.before[begin]), int(passages.after[part[-1]]) + 1
        inner = passages.take(part)
        moved = Crossings(inner.before - first, inner.after - first, inner.rising)
        seen = route(_slice(trace, first, stop), moved, first)
        if seen is None or seen.turns.size < 8:
            continue
        number = np.searchsorted(at[rises], first + seen.turns / trace.interval).astype(float)
        line = np.polynomial.polynomial.Polynomial.fit(number, seen.turns, 1)
        found.append(seen)
        middle = float(number.mean())
        # Closing irregular intervals moves all that comes after them.
        lag = float(np.interp(first + float(seen.turns.mean()) / trace.interval, at, shift))
        instants.append(float(line(middle)) + (first + lag) * trace.interval)
        numbers.append(middle)
        variances.append(float(np.var(seen.turns - line(number))) / number.size)
    if len(found) < 3:
        return None
    return _together(found, np.array(instants), np.array(numbers), np.array(variances))


def _slice(trace: Trace, first: int, stop: int) -> Trace:
    valid = None if trace.valid is None else trace.valid[first:stop]
    if valid is not None and valid.all():
        valid = None
    return replace(trace, values=trace.values[first:stop], valid=valid)


def _together(found: list[Observed], instants: Array, numbers: Array, variances: Array) -> Observed:
    """Means over the windows, the period over the whole record."""
    names = tuple(n for n in found[0].names if all(n in f.names for f in found))
    rows = [[f.names.index(n) for n in names] for f in found]
    values = np.array([f.values[r] for f, r in zip(found, rows, strict=True)])
    covariance = np.mean([f.covariance[np.ix_(r, r)] for f, r in zip(found, rows, strict=True)], axis=0) / len(found)
    mean = values.mean(axis=0)
    for i in range(len(names)):
        covariance[i, i] += mean_scatter(values[:, i], float(covariance[i, i]) * len(found))
    period = fit_period(instants, numbers, np.zeros(numbers.size, dtype=np.int64), variances)
    i = names.index("period")
    mean[i] = period.period
    ratio = min(period.u / np.sqrt(covariance[i, i]), 1.0)
    covariance[i, :] *= ratio
    covariance[:, i] *= ratio
    covariance[i, i] = period.u**2
    jitters = np.array([f.jitter for f in found if f.jitter is not None])
    series = {k: np.concatenate([f.series[k] for f in found if k in f.series]) for k in found[0].series}
    remarks = {r.code: r for f in found for r in f.remarks if r.code != "startup"}
    remarks |= {r.code: r for r in found[0].remarks}
    return replace(
        found[0],
        names=names,
        values=mean,
        covariance=covariance,
        turns=found[0].turns,
        jitter=(float(jitters[:, 0].mean()), float(jitters[:, 1].mean() / np.sqrt(len(jitters)))),
        noise=float(np.mean([f.noise for f in found])),
        remarks=tuple(remarks.values()),
        series=series,
        share_jitter=float(np.mean([f.share_jitter for f in found])) / len(found),
    )
