"""What is drawn over a capture: fitted phases placed on its time axis, envelopes, slopes. Numbers only."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from benchfit.capture.model import Capture
    from benchfit.cycle.constants import CycleConstants, PhaseFit
    from benchfit.explain.result import Explanation

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Trace:
    """One channel as the node's voltage: ``time`` (s) and ``volts`` (V) of shape (n,), the node's name."""

    name: str
    node: str
    time: Array
    volts: Array


@dataclass(frozen=True, eq=False)
class Placed:
    """One phase of one cycle on the capture's time axis: it begins at ``begin`` and ends at ``end`` (s)."""

    fit: PhaseFit
    begin: float
    end: float


def traces(capture: Capture, explanation: Explanation, constants: CycleConstants | None) -> list[Trace]:
    """The channels that were clipped to a node, scaled to the tip; all of them where none is known."""
    nodes = {str(c.get("name")): str(c.get("node") or "") for c in explanation.captures[0].channels}
    time = capture.time
    known = [c for c in capture.channels if nodes.get(c.name)]
    out = []
    for channel in known or capture.channels:
        node = nodes.get(channel.name, "")
        volts = channel.values
        span = constants.spans.get(node) if constants is not None else None
        if span is not None:
            volts = volts * _factor(volts, span)
        out.append(Trace(channel.name, node, time, volts))
    return out


def _factor(volts: Array, span: tuple[float, float]) -> float:
    finite = volts[np.isfinite(volts)]
    raw = float(np.ptp(finite)) if finite.size else 0.0
    factor = (span[1] - span[0]) / raw if raw > 0 else 1.0
    return 1.0 if not np.isfinite(factor) or factor <= 0 or abs(factor - 1) < 0.02 else factor


def asymptote(fit: PhaseFit) -> float | None:
    """Where a phase heads for (V); None where it is straight."""
    x = fit.curvature * fit.duration
    return None if abs(x) < 1e-6 else fit.start + (fit.end - fit.start) / -np.expm1(-x)


def phase_value(fit: PhaseFit, t: Array) -> Array:
    """Voltage at time t from the phase's start (s): v = S + s·(1 − e^(−κt))/κ."""
    x = fit.curvature * fit.duration
    if abs(x) < 1e-6:
        return np.asarray(fit.start + (fit.end - fit.start) * t / fit.duration, dtype=float)
    return np.asarray(fit.start + (fit.end - fit.start) * np.expm1(-fit.curvature * t) / np.expm1(-x))


def rate(fit: PhaseFit, v: Array) -> Array:
    """dv/dt (V/s) of a phase at the voltages v: κ·(A − v), or its constant slope where it is straight."""
    if (end := asymptote(fit)) is None:
        return np.full(v.shape, (fit.end - fit.start) / fit.duration)
    return np.asarray(fit.curvature * (end - v))


def phases_of(constants: CycleConstants, node: str) -> list[PhaseFit]:
    """The fitted phases of a node; where only their constants are kept, a charge and a discharge of those."""
    if constants.phases:
        return [f for f in constants.phases if f.node == node]
    timing = next((n for n in constants.noise if n != "output"), "")
    needed = ("period", "charge_share", "upper", "lower")
    if node != timing or not constants.oscillates or not all(n in constants for n in needed):
        return []
    from benchfit.cycle.constants import PhaseFit

    period, share, upper, lower = (constants.value(n) for n in needed)

    def known(name: str, other: float) -> float:
        return constants.value(name) if name in constants else other

    return [
        PhaseFit(
            node, True, known("charge_start", lower), upper, known("charge_curvature", 0.0), share * period
        ),
        PhaseFit(
            node,
            False,
            known("discharge_start", upper),
            lower,
            known("discharge_curvature", 0.0),
            (1 - share) * period,
        ),
    ]


def place(constants: CycleConstants, trace: Trace) -> list[Placed]:
    """The fitted phases of a node in every cycle of the record, the cut ones at its ends included.

    A cycle that lasts longer or shorter than the mean has its longest phase stretched: a late firing goes on
    along the same exponential. Which phase stands first is what fits the samples better.
    """
    fits = [f for f in phases_of(constants, trace.node) if f.duration > 0]
    turns = np.asarray(constants.turns, dtype=float)
    if not fits or turns.size == 0:
        return []
    if not constants.oscillates or "period" not in constants:
        return [
            Placed(f, float(turns[0]), float(min(turns[0] + f.duration, trace.time[-1]))) for f in fits[:1]
        ]
    period = constants.value("period")
    ends = np.concatenate([[turns[0] - period], turns, [turns[-1] + period]])
    orders = [_one_after_another(fits[i:] + fits[:i], ends) for i in range(len(fits))]
    return min(orders, key=lambda placed: _misfit(placed, trace)) if len(orders) > 1 else orders[0]


def _one_after_another(fits: list[PhaseFit], ends: Array) -> list[Placed]:
    lengths = np.array([f.duration for f in fits])
    longest = int(np.argmax(lengths))
    out = []
    for begin, end in pairwise(ends):
        own = lengths.copy()
        own[longest] = max(end - begin - (lengths.sum() - lengths[longest]), 0.0)
        starts = begin + np.concatenate([[0.0], np.cumsum(own)])
        out += [Placed(f, float(starts[i]), float(starts[i + 1])) for i, f in enumerate(fits)]
    return out


def _misfit(placed: list[Placed], trace: Trace) -> float:
    few = slice(0, None, max(1, trace.time.size // 4000))
    rest = trace.volts[few] - fitted(placed, trace.time[few])
    return float(np.nanmedian(np.abs(rest))) if np.isfinite(rest).any() else np.inf


def fitted(placed: list[Placed], time: Array) -> Array:
    """The placed phases' voltage at every time (ascending); NaN where there is none."""
    out = np.full(time.size, np.nan)
    for p in placed:
        first, stop = np.searchsorted(time, [p.begin, p.end])
        out[first:stop] = phase_value(p.fit, time[first:stop] - p.begin)
    return out


def polylines(
    placed: list[Placed], rising: bool, begin: float, end: float, points: int = 48
) -> tuple[Array, Array]:
    """One broken line through all phases of one direction between ``begin`` and ``end``; NaN parts them."""
    times: list[Array] = []
    volts: list[Array] = []
    gap = np.array([np.nan])
    for p in placed:
        low, high = max(p.begin, begin), min(p.end, end)
        if p.fit.rising == rising and high > low:
            t = np.linspace(low, high, points)
            times += [t, gap]
            volts += [phase_value(p.fit, t - p.begin), gap]
    if not times:
        return np.empty(0), np.empty(0)
    return np.concatenate(times), np.concatenate(volts)


def envelope(time: Array, volts: Array, columns: int = 1200) -> tuple[Array, Array, Array] | None:
    """(middle, lowest, highest) of ``columns`` equal stretches, NaN passed over; None where samples are few.

    Neighbouring stretches are made to touch, so that a steep flank leaves no gap.
    """
    if time.size < 5 * columns:
        return None
    edges = np.linspace(0, time.size, columns + 1).astype(np.int64)
    low = np.fmin.reduceat(volts, edges[:-1])
    high = np.fmax.reduceat(volts, edges[:-1])
    middle = 0.5 * (time[edges[:-1]] + time[edges[1:] - 1])
    bottom, top = low.copy(), high.copy()
    bottom[1:] = np.fmin(low[1:], np.where(low[1:] > high[:-1], high[:-1], low[1:]))
    top[1:] = np.fmax(high[1:], np.where(high[1:] < low[:-1], low[:-1], high[1:]))
    return middle, bottom, top


def means(x: Array, y: Array, columns: int = 300) -> tuple[Array, Array] | None:
    """Means of x and y over ``columns`` equal stretches; None where samples are too few to need them."""
    size = x.size // columns
    if size < 20:
        return None
    whole = size * columns
    return x[:whole].reshape(columns, size).mean(axis=1), y[:whole].reshape(columns, size).mean(axis=1)


def folded(trace: Trace, starts: Array, period: float, most: int = 1600) -> tuple[Array, Array]:
    """(time since the cycle's start, volts) of samples from whole cycles, thinned to about ``most``."""
    if starts.size < 2:
        return np.empty(0), np.empty(0)
    first, stop = np.searchsorted(trace.time, [starts[0], starts[-1]])
    step = max(1, (stop - first) // most)
    t, v = trace.time[first:stop:step], trace.volts[first:stop:step]
    since = t - starts[np.clip(np.searchsorted(starts, t, side="right") - 1, 0, starts.size - 2)]
    keep = np.isfinite(v) & (since <= 1.2 * period)
    return since[keep], v[keep]


def aligned(t: Array, v: Array, period: float, x: Array, y: Array, steps: int = 240) -> Array:
    """Times within the cycle (s) of folded samples, shifted to where they lie best on a circuit's curve.

    A record's cycles may be counted from another turn than the circuit's first phase begins at.
    """
    few = slice(0, None, max(1, t.size // 800))
    shifts = np.linspace(0.0, period, steps, endpoint=False)
    at = (t[few] + shifts[:, None]) % period * (x[-1] / period)
    away = np.minimum(np.abs(np.interp(at, x, y) - v[few]), 0.25 * np.ptp(y)).mean(axis=1)
    return np.asarray((t + shifts[int(np.argmin(away))]) % period)


def slopes(placed: list[Placed], trace: Trace, rising: bool, bins: int = 16) -> tuple[Array, Array, Array]:
    """(v, dv/dt, its standard error) in equal stretches of a phase, all cycles together.

    In each stretch a line is fitted to the samples, each cycle about its own means, so that a cycle whose
    level differs does not tilt it.
    """
    sums = np.zeros((bins, 6))
    same = [p for p in placed if p.fit.rising == rising]
    for p in same[:: max(1, len(same) // 100)]:
        guard = 0.04 * (p.end - p.begin)
        first, stop = np.searchsorted(trace.time, [p.begin + guard, p.end - guard])
        edges = np.linspace(first, stop, bins + 1).astype(int)
        for i, (a, b) in enumerate(pairwise(edges)):
            t, v = trace.time[a:b], trace.volts[a:b]
            if b - a < 3 or not np.isfinite(v).all():
                continue
            dt, dv = t - t.mean(), v - v.mean()
            sums[i] += [dt @ dt, dt @ dv, dv @ dv, v.sum(), v.size, 1]
    used = sums[:, 4] > sums[:, 5] + 2
    tt, tv, vv, total, n, cycles = sums[used].T
    slope = tv / tt
    rest = np.maximum(vv - slope * tv, 0.0) / (n - cycles - 1)
    return total / n, slope, np.sqrt(rest / tt)
