"""Nodes that do not come and go: where they rest, and the one rise or fall that got them there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.constants import PhaseFit
from benchfit.cycle.fold import gather
from benchfit.cycle.observed import Observed
from benchfit.cycle.phase import ExponentialFit, fit_exponentials
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import block_means

_POINTS = 2000
_BINS = 300


@dataclass(frozen=True)
class _Ramp:
    """Samples first … stop − 1 of the only rise or fall; whether the node was flat before and is held after."""

    first: int
    stop: int
    flat_before: bool
    held_after: bool


def observe_rest(trace: Trace) -> Observed:
    """Resting level of a timing node, and its only ramp where the record shows one."""
    block = max(1, trace.size // _POINTS)
    w = block_means(trace.values, block)
    noise = max(trace.noise / np.sqrt(block), trace.resolution / np.sqrt(12.0) / np.sqrt(block), 1e-300)
    if np.ptp(w) < 8.0 * noise or w.size < 20:
        return _resting(trace, "rest")
    ramp = _find_ramp(w, noise, block, trace.size)
    if ramp is None:
        return _resting(trace, "rest")
    ramp, fit = _settle(trace, ramp)
    return _ramp_constants(trace, ramp, fit)


def observe_output_rest(trace: Trace) -> Observed:
    """Level at which an output that does not switch is at the end of the record."""
    return _resting(trace, "output_rest")


def _resting(trace: Trace, name: str, first: int | None = None) -> Observed:
    """Mean over the last fifth of the record (or from ``first`` on), with the u that its own wandering gives."""
    tail = trace.values[(trace.size * 4 // 5 if first is None else first) :]
    tail = tail if tail.size else trace.values
    parts = np.array([p.mean() for p in np.array_split(tail, min(10, tail.size))])
    wander = float(parts.std(ddof=1) / np.sqrt(parts.size)) if parts.size > 1 else 0.0
    u = max(trace.noise / np.sqrt(tail.size), wander, trace.resolution / np.sqrt(12.0) / np.sqrt(parts.size))
    return Observed((name,), np.array([tail.mean()]), np.array([[u**2]]), noise=trace.noise, node=trace.node)


def _find_ramp(w: Array, noise: float, block: int, size: int) -> _Ramp | None:
    rising = int(w.argmax()) > int(w.argmin())
    y = w if rising else -w
    low, high = int(y.argmin()), int(y.argmax())
    # The level at the extreme itself is off by the luck of the noise: take the median of what is near it.
    bottom = float(np.median(y[y <= y[low] + 8.0 * noise]))
    top = float(np.median(y[y >= y[high] - 8.0 * noise]))
    if top - bottom < 8.0 * noise:
        return None
    low_at = np.flatnonzero(y[: high + 1] <= bottom + 4.0 * noise)
    first = int(low_at[-1]) if low_at.size else low
    reach = np.flatnonzero(y[first:] >= top - 4.0 * noise)
    stop = first + int(reach[0]) + 1 if reach.size else high + 1
    if stop - first < 5:
        return None
    flat = first > 5 and float(np.ptp(y[:first])) < 0.3 * (top - bottom)
    return _Ramp(first * block, min(size, stop * block), flat, stop < y.size - 5)


def _settle(trace: Trace, ramp: _Ramp) -> tuple[_Ramp, ExponentialFit]:
    """Take in what follows the ramp where its exponential goes on through it; else it is held there."""
    guard = max(1, (ramp.stop - ramp.first) // 20)
    inner = _fit(trace, ramp.first, ramp.first + guard, ramp.stop - guard)
    if not ramp.held_after:
        return ramp, _fit(trace, ramp.first, ramp.first + (guard if ramp.flat_before else 0), ramp.stop)
    whole = _fit(trace, ramp.first, ramp.first + guard, trace.size)
    if whole.variance < 1.5 * inner.variance + 1e-30:
        return _Ramp(ramp.first, trace.size, ramp.flat_before, False), whole
    return ramp, inner


def _fit(trace: Trace, zero: int, first: int, stop: int) -> ExponentialFit:
    """Time counted from sample ``zero``."""
    begin, end = np.array([first]), np.array([max(stop, first + 4)])
    bins = gather(trace, begin, np.minimum(end, trace.size), np.array([float(zero)]), _BINS)
    return fit_exponentials(bins.t, bins.v, None, bins.n, bins.spread)


def _ramp_constants(trace: Trace, ramp: _Ramp, fit: ExponentialFit) -> Observed:
    model = fit.model
    variance = max(fit.variance, trace.resolution**2 / 12.0 / 10.0)
    slope, curvature = model.slope, model.curvature
    level = float(fit.levels[0])
    # (level at the middle, slope, κ): the level's own error beside what it shares with the two.
    jac = np.column_stack([fit.coupling[0], np.eye(2)]).T
    base = jac @ fit.shared @ jac.T
    base[0, 0] += 1.0 / fit.information[0]
    base = variance * base
    names, values, rows = ["ramp_curvature"], [curvature], [np.array([0.0, 0.0, 1.0])]
    if curvature > 2.0 * np.sqrt(base[2, 2]):
        names.append("ramp_asymptote")
        values.append(model.asymptote)
        rows.append(np.array([0.0, 1.0 / curvature, -slope / curvature**2]))
    rows_array = np.array(rows)
    cov = rows_array @ base @ rows_array.T
    found = Observed(tuple(names), np.array(values), cov, noise=float(np.sqrt(variance)))
    found = _joined(found, _start(trace, ramp, fit, base))
    settled = ramp.held_after or abs(model.rate(_last(trace, ramp, fit))) < 0.01 * abs(
        model.rate(np.array(level))
    )
    if ramp.held_after:
        found = _joined(
            found, _resting(trace, "rest", min(ramp.stop + (trace.size - ramp.stop) // 10, trace.size - 1))
        )
    elif settled:
        found = _joined(found, _resting(trace, "rest", trace.size - max(trace.size // 50, 1)))
    phase = PhaseFit(
        trace.node,
        slope > 0,
        found.value("ramp_start"),
        float(_last(trace, ramp, fit)),
        curvature,
        (ramp.stop - ramp.first) * trace.interval,
    )
    return Observed(
        found.names,
        found.values,
        found.covariance,
        np.array([ramp.first * trace.interval]),
        None,
        found.noise,
        phases=(phase,),
        node=trace.node,
    )


def _last(trace: Trace, ramp: _Ramp, fit: ExponentialFit) -> Array:
    return fit.model.value(np.array((ramp.stop - 1 - ramp.first) * trace.interval), fit.levels[0])


def _start(trace: Trace, ramp: _Ramp, fit: ExponentialFit, base: Array) -> Observed:
    """Where the ramp starts: the flat before it, or the curve at its first sample."""
    if ramp.flat_before:
        flat = trace.values[: max(1, ramp.first - ramp.first // 20)]
        u = max(trace.noise / np.sqrt(flat.size), trace.resolution / np.sqrt(12.0 * 10.0))
        return Observed(("ramp_start",), np.array([flat.mean()]), np.array([[u**2]]))
    decay, ramp_, bend = fit.model.columns(np.zeros(1), fit.levels)
    row = np.array([decay[0], ramp_[0], bend[0]])
    return Observed(("ramp_start",), fit.levels.copy(), np.array([[row @ base @ row]]))


def _joined(a: Observed, b: Observed) -> Observed:
    n, m = len(a.names), len(b.names)
    cov = np.zeros((n + m, n + m))
    cov[:n, :n], cov[n:, n:] = a.covariance, b.covariance
    return Observed(a.names + b.names, np.concatenate([a.values, b.values]), cov, a.turns, None, a.noise)
