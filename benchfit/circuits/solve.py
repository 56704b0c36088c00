"""From phases to the settled cycle: durations, turning voltages, and what one exponential says of each phase.

Everything is closed form and works on arrays: the last axis of a result runs over the sets of parts.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchfit.circuits.model import Array, Cycle, Phase

_SMALL = 1e-4
_NO_WAY = 1e-9


def _log_ratio(z: Array) -> Array:
    """−ln(1 − z)/z, 1 at z = 0."""
    small = np.abs(z) < _SMALL
    safe = np.where(small, 0.5, z)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(small, 1 + z / 2 + z * z / 3, -np.log1p(-safe) / safe)


def _log_moment(z: Array) -> Array:
    """(−ln(1 − z) − z)/z², 1/2 at z = 0."""
    small = np.abs(z) < 1e-3
    safe = np.where(small, 0.5, z)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(small, 0.5 + z / 3 + z * z / 4 + z**3 / 5, (-np.log1p(-safe) - safe) / (safe * safe))


def time_to(phase: Phase, start: Array, end: Array) -> Array:
    """Time (s) for a phase to go from ``start`` to ``end`` (V); NaN where it never gets there.

    t = ∫ (1 + β·v)/(drive − κ·v) dv from start to end, which is τ·ln[(A − S)/(A − E)] for β = 0 and
    (E − S)/slope for κ = 0 (first-order lag; no special case at either limit).
    """
    rate = phase.drive - phase.curvature * start
    path = end - start
    with np.errstate(invalid="ignore", divide="ignore"):
        z = phase.curvature * path / rate
        plain = path / rate * _log_ratio(z)
        if np.any(np.asarray(phase.slope) != 0):
            plain = plain + phase.slope * (start * plain + path * path / rate * _log_moment(z))
        return np.where((z < 1) & (path / rate > 0), plain, np.where(path == 0, 0.0, np.nan))


def after(phase: Phase, start: Array, time: Array | float) -> Array:
    """Voltage (V) that a phase reaches ``time`` (s) after it was at ``start``.

    Where C bends, with the local τ half-way (midpoint rule: exact to second order in the way gone).
    """
    end = _advanced(phase, start, 1 + phase.slope * start, time)
    if np.any(np.asarray(phase.slope) != 0):
        end = _advanced(phase, start, 1 + phase.slope * 0.5 * (start + end), time)
    return end


def _advanced(phase: Phase, start: Array, stiff: Array, time: Array | float) -> Array:
    y = phase.curvature / stiff * time
    small = np.abs(y) < 1e-8
    shape: Array = np.where(small, 1 - y / 2, -np.expm1(-y) / np.where(small, 1.0, y))
    return start + (phase.drive - phase.curvature * start) / stiff * time * shape


@dataclass(frozen=True, eq=False)
class Settled:
    """The settled cycle, one array of shape (phases, …) each.

    ``durations`` (s) include the dead times; ``starts`` and ``ends`` (V) are where each phase begins and is left. A
    phase that the node is already beyond has duration 0. NaN: that set of parts does not oscillate.
    """

    durations: Array
    starts: Array
    ends: Array

    @property
    def period(self) -> Array:
        """Sum of all phases (s)."""
        period: Array = np.sum(self.durations, axis=0)
        return period


def settle(cycle: Cycle) -> Settled:
    """Follow the phases round until they repeat: twice suffices, since each ends at a threshold of its own."""
    nodes = {phase.node for phase in cycle.phases}
    last = {node: [p for p in cycle.phases if p.node == node][-1] for node in nodes}
    at = {node: after(p, np.asarray(p.threshold, float), p.delay) for node, p in last.items()}
    durations: list[Array] = []
    starts: list[Array] = []
    ends: list[Array] = []
    goes: dict[tuple[str, bool], NDArray[np.bool_]] = {}
    for phase in cycle.phases:
        start = phase.gain * at[phase.node] + phase.jump if phase.start is None else phase.start + phase.jump
        ahead = (phase.threshold - start) if phase.rising else (start - phase.threshold)
        waiting = np.where(ahead > 0, time_to(phase, start, np.where(ahead > 0, phase.threshold, start)), 0.0)
        corner = np.where(ahead > 0, phase.threshold, start)
        end = after(phase, corner, phase.delay)
        durations.append(waiting + phase.delay)
        starts.append(start + 0 * end)
        ends.append(end)
        at[phase.node] = end
        way = (phase.node, phase.rising)
        moves = ahead > _NO_WAY * np.abs(phase.threshold)
        goes[way] = goes[way] | moves if way in goes else moves
    runs = np.ones(np.broadcast_shapes(*(np.shape(d) for d in durations)), bool)
    for condition in cycle.conditions:
        runs = runs & (condition.margin > 0)
    for moves in goes.values():
        # A node that a switching throws beyond its next threshold (a large ESR) makes no cycle.
        runs = runs & moves
    shape = runs.shape
    stack = [np.stack([np.broadcast_to(x, shape) for x in row]) for row in (durations, starts, ends)]
    return Settled(np.where(runs, stack[0], np.nan), stack[1], stack[2])


# --- what one exponential says of a stretch made of several phases
# --------------------------------------------

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(10)
_FLAT = 1e-4


def _bend(ratio: Array) -> Array:
    """y of e^(−y·u), u in [−1, 1], from the ratio of its Legendre coefficients c_2/c_1 =
    −(5/3)·i_2(y)/i_1(y).

    i_n are modified spherical Bessel functions of the first kind. Newton from the small-y limit.
    """
    y = np.clip(-3 * ratio, -20, 20)
    for _ in range(4):
        tiny = np.abs(y) < 1e-3
        s = np.where(tiny, 1.0, y)
        coth = 1 / np.tanh(s)
        q = np.where(tiny, y / 5, (1 + 3 / s**2 - 3 * coth / s) / np.where(tiny, 1.0, coth - 1 / s))
        slope = np.where(tiny, 0.2, 1 - 4 * q / s - q * q + 0 * s)
        # d/dy (i_2/i_1) = 1 − q² − 4q/y + …: from i_n' = i_{n+1} + n·i_n/y and the three-term recurrence.
        y = y - (-(5 / 3) * q - ratio) / (-(5 / 3) * np.maximum(slope, 0.02))
    return y


def _sampled(
    phases: Sequence[Phase], starts: Array, ends: Array, durations: Array
) -> tuple[Array, Array, Array]:
    """Gauss's nodes over phases in a row: time u in [−1, 1], voltage (V), weight (they sum to 1).

    Of shape (nodes, rows) for phases of ``rows`` sets of parts.
    """
    total = np.sum(durations, axis=0)
    along = 0.5 * (1 + _NODES[:, None])
    before = np.zeros_like(total)
    u, v, w = [], [], []
    for phase, start, end, duration in zip(phases, starts, ends, durations, strict=True):
        bent = np.any(np.asarray(phase.slope) != 0)
        # The variable is the time s that a constant capacitance would take: dt = (1 + β·v) ds, smooth in s.
        constant = replace(phase, slope=0.0) if bent else phase
        length = np.where(duration > 0, time_to(constant, start, end), 0.0) if bent else duration
        volts = after(constant, start, length * along)
        weight = 0.5 * _WEIGHTS[:, None] * (length / total)
        here = np.where(duration > 0, time_to(phase, start, volts), 0.0) if bent else length * along
        v.append(volts)
        w.append(weight * (1 + phase.slope * volts) if bent else weight)
        u.append((before + here) * (2 / total) - 1)
        before = before + duration
    return np.concatenate(u), np.concatenate(v), np.concatenate(w)


def _rise(u: Array, y: Array) -> tuple[Array, Array]:
    """f = (1 − e^(−y·(1 + u)))/(1 − e^(−2y)), from 0 at u = −1 to 1 at u = 1, and df/dy."""
    y = np.where(np.abs(y) < _FLAT, _FLAT, y)
    whole = -np.expm1(-2 * y)
    gone = np.exp(-y * (1 + u))
    f = (1 - gone) / whole
    slope: Array = ((1 + u) * gone - f * (2 * (1 - whole))) / whole
    return f, slope


def _mean(w: Array, *factors: Array) -> Array:
    product = w
    for factor in factors[:-1]:
        product = product * factor
    mean: Array = np.einsum("nr,nr->r", product, factors[-1])
    return mean


def _stretch(
    phases: Sequence[Phase], starts: Array, ends: Array, durations: Array
) -> tuple[Array, Array, Array, Array]:
    """Start, end (V), κ (1/s) and bow (V) of the exponential that least squares finds over several phases in a row.

    Begun where the zeroth to second Legendre coefficients are the waveform's, then two steps of variable
    projection in the bend (Golub & Pereyra 1973, with Kaufman's Jacobian).
    """
    u, v, w = _sampled(phases, starts, ends, durations)
    square = u * u
    y = _bend(5 * _mean(w, v, 1.5 * square - 0.5) / (3 * _mean(w, v, u)))
    mean_v = _mean(w, v)

    def line(f: Array) -> tuple[Array, Array, Array, Array]:
        mean_f = _mean(w, f)
        variance = _mean(w, f, f) - mean_f**2
        b = (_mean(w, f, v) - mean_f * mean_v) / variance
        return mean_v - b * mean_f, b, mean_f, variance

    for _ in range(2):
        f, slope = _rise(u, y)
        a, b, mean_f, variance = line(f)
        mean_s, with_f = _mean(w, slope), _mean(w, slope, f)
        # Of the slope, what neither a nor b can take up.
        own = _mean(w, slope, slope) - mean_s**2 - (with_f - mean_s * mean_f) ** 2 / variance
        step = (_mean(w, slope, v) - a * mean_s - b * with_f) / (b * own)
        y = y + np.clip(step, -1.0, 1.0)
    f, _ = _rise(u, y)
    a, b, _, _ = line(f)
    bow = 7 * _mean(w, v - a - b * f, (2.5 * square - 1.5) * u)
    return a, a + b, 2 * y / np.sum(durations, axis=0), bow


def _only(phase: Phase, rows: NDArray[np.bool_]) -> Phase:
    """The phase of some rows of its sets of parts."""

    def pick(x: Array | float) -> Array:
        return np.broadcast_to(np.asarray(x, float), rows.shape)[rows]

    return replace(
        phase,
        drive=pick(phase.drive),
        curvature=pick(phase.curvature),
        slope=pick(phase.slope),
        threshold=pick(phase.threshold),
    )


def shares(cycle: Cycle, node: str, settled: Settled | None = None) -> dict[str, Array]:
    """The period (s) and the shares of it alone: what frequency and duty cycle take, at a fraction of the cost."""
    settled = settle(cycle) if settled is None else settled
    period = settled.period
    found: dict[str, Array] = {"period": period}
    if any(p.output for p in cycle.phases):
        high = sum(
            (d for p, d in zip(cycle.phases, settled.durations, strict=True) if p.output == "high"),
            0 * period,
        )
        found["high_share"] = (high - cycle.levels.get("rise_lag", 0.0)) / period
    for rising, word in ((True, "charge"), (False, "discharge")):
        index = [i for i, p in enumerate(cycle.phases) if p.node == node and p.rising == rising]
        if index:
            found[f"{word}_share"] = np.sum(settled.durations[index], axis=0) / period
    return found


def constants(cycle: Cycle, node: str) -> dict[str, Array]:
    """The cycle constants that a capture of ``node`` would give, by the cycle stage's names (see there).

    ``node`` times the phases that are called for; "" asks for the shares and the output's levels alone.
    """
    settled = settle(cycle)
    found = shares(cycle, node, settled)
    period = found["period"]
    found.update({n: level + 0 * period for n, level in cycle.levels.items() if n != "rise_lag"})
    if not node:
        return found
    for rising, word in ((True, "charge"), (False, "discharge")):
        index = [i for i, p in enumerate(cycle.phases) if p.node == node and p.rising == rising]
        if not index:
            continue
        phases = [cycle.phases[i] for i in index]
        starts, ends, durations = settled.starts[index], settled.ends[index], settled.durations[index]
        shape = [starts[0], ends[0], phases[0].curvature + 0 * period, 0 * period]
        bends = np.broadcast_to(np.asarray(phases[0].slope) != 0, period.shape)
        # Only where one exponential is not the whole truth; those that bend by themselves cost the most.
        for rows in (bends, ~bends) if len(index) > 1 else (bends,):
            if not np.any(rows):
                continue
            shape = [np.array(x, float) for x in shape]
            parts = [_only(p, rows) for p in phases]
            with np.errstate(all="ignore"):
                fitted = _stretch(parts, starts[:, rows], ends[:, rows], durations[:, rows])
            for x, f in zip(shape, fitted, strict=True):
                x[rows] = f
        start, end, curvature, bow = shape
        found[f"{word}_start"], found[f"{word}_end"] = start, end
        found[f"{word}_curvature"], found[f"{word}_bow"] = curvature, bow
    return found


def curve(cycle: Cycle, node: str, points: int = 200) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """One settled cycle of one build as (time s, voltage V), for drawing; holds are drawn at their level."""
    settled = settle(cycle)
    times: list[NDArray[np.float64]] = []
    volts: list[NDArray[np.float64]] = []
    now = 0.0
    for i, p in enumerate(cycle.phases):
        duration = float(np.ravel(settled.durations[i])[0])
        t = np.linspace(0.0, duration, max(2, points // len(cycle.phases)))
        if node == p.node:
            start = float(np.ravel(settled.starts[i])[0])
            v = np.ravel(after(p, np.asarray(start), t))
        elif node == "output" and p.output:
            v = np.full(t.size, float(np.ravel(cycle.levels.get(p.output, np.nan))[0]))
        else:
            v = np.full(t.size, float(np.ravel(cycle.rests.get(node, np.nan))[0]))
        times.append(now + t)
        volts.append(v)
        now += duration
    return np.concatenate(times), np.concatenate(volts)
