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
    """Voltage (V) that a phase reaches ``time`` (s) after it was at ``start`` (local τ at the start where C
    bends)."""
    stiff: Array = 1 + phase.slope * start
    y = phase.curvature / stiff * time
    small = np.abs(y) < 1e-8
    shape: Array = np.where(small, 1 - y / 2, -np.expm1(-y) / np.where(small, 1.0, y))
    return start + (phase.drive - phase.curvature * start) / stiff * time * shape


@dataclass(frozen=True, eq=False)
class Settled:
    """The settled cycle, one array of shape (phases, …) each.

    ``durations`` (s) include the dead times; ``starts`` and ``ends`` (V) are where each phase begins and is
    left.
    A phase that the node is already beyond has duration 0. NaN: that set of parts does not oscillate.
    """

    durations: Array
    starts: Array
    ends: Array

    @property
    def period(self) -> Array:
        """Sum of all phases (s)."""
        return np.sum(self.durations, axis=0)


def settle(cycle: Cycle) -> Settled:
    """Follow the phases round until they repeat: twice suffices, since each ends at a threshold of its
    own."""
    nodes = {phase.node for phase in cycle.phases}
    last = {node: [p for p in cycle.phases if p.node == node][-1] for node in nodes}
    at = {node: after(p, np.asarray(p.threshold, float), p.delay) for node, p in last.items()}
    durations: list[Array] = []
    starts: list[Array] = []
    ends: list[Array] = []
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
    runs = np.ones(np.broadcast_shapes(*(np.shape(d) for d in durations)), bool)
    for condition in cycle.conditions:
        runs = runs & (condition.margin > 0)
    shape = runs.shape
    stack = [np.stack([np.broadcast_to(x, shape) for x in row]) for row in (durations, starts, ends)]
    return Settled(np.where(runs, stack[0], np.nan), stack[1], stack[2])


# --- what one exponential says of a stretch made of several phases
# --------------------------------------------

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(10)


def _bend(ratio: Array) -> Array:
    """y of e^(−y·u), u in [−1, 1], from the ratio of its Legendre coefficients c_2/c_1 =
    −(5/3)·i_2(y)/i_1(y).

    i_n are modified spherical Bessel functions of the first kind. Newton from the small-y limit.
    """
    y = np.clip(-3 * ratio, -20, 20)
    for _ in range(6):
        tiny = np.abs(y) < 1e-3
        s = np.where(tiny, 1.0, y)
        coth = 1 / np.tanh(s)
        q = np.where(tiny, y / 5, (1 + 3 / s**2 - 3 * coth / s) / np.where(tiny, 1.0, coth - 1 / s))
        slope = np.where(tiny, 0.2, 1 - 4 * q / s - q * q + 0 * s)
        # d/dy (i_2/i_1) = 1 − q² − 4q/y + …: from i_n' = i_{n+1} + n·i_n/y and the three-term recurrence.
        y = y - (-(5 / 3) * q - ratio) / (-(5 / 3) * np.maximum(slope, 0.02))
    return y


def _stretch(
    phases: Sequence[Phase], starts: Array, ends: Array, durations: Array
) -> tuple[Array, Array, Array, Array]:
    """Start, end (V), κ (1/s) and bow (V) of the exponential that least squares finds over several phases in
    a row.

    It shares the zeroth, first and second Legendre coefficient with the waveform: its tangent space is
    theirs.
    """
    total = np.sum(durations, axis=0)
    c = [np.zeros_like(total) for _ in range(4)]
    before = np.zeros_like(total)
    for phase, start, end, duration in zip(phases, starts, ends, durations, strict=True):
        # The variable is the time s that a constant capacitance would take: dt = (1 + β·v) ds, smooth in s.
        constant = replace(phase, slope=0.0)
        length = np.where(duration > 0, time_to(constant, start, end), 0.0)
        along = _NODES.reshape(-1, *[1] * total.ndim)
        v = after(constant, start, length * (1 + along) / 2)
        dt = _WEIGHTS.reshape(along.shape) * length / 2 * (1 + phase.slope * v) / total
        u = 2 * (before + np.where(duration > 0, time_to(phase, start, v), 0.0)) / total - 1
        for n, p in enumerate((1.0, u, (3 * u * u - 1) / 2, (5 * u**3 - 3 * u) / 2)):
            c[n] = c[n] + (2 * n + 1) * np.sum(v * p * dt, axis=0)
        before = before + duration
    y = _bend(c[2] / c[1])
    tiny = np.abs(y) < 1e-4
    s = np.where(tiny, 1.0, y)
    # e^(−y·u) = i_0 − 3·i_1·P_1 + 5·i_2·P_2 − 7·i_3·P_3 …
    i_1 = np.where(tiny, y / 3, (np.cosh(s) - np.sinh(s) / s) / s)
    # amplitude·i_1 stays finite as y → 0, so amplitude·(e^(∓y) − i_0) is taken in ratios to i_1
    up = np.where(tiny, -3.0 + 0 * y, (np.exp(-s) - np.sinh(s) / s) / np.where(tiny, 1.0, i_1))
    down = np.where(tiny, 3.0 + 0 * y, (np.exp(s) - np.sinh(s) / s) / np.where(tiny, 1.0, i_1))
    scaled = -c[1] / 3
    i_3 = np.where(np.abs(y) < 0.05, y**3 / 105, _i3(np.where(np.abs(y) < 0.05, 1.0, y)))
    bow = c[3] - np.where(tiny, 0.0, -7 * i_3 * scaled / np.where(tiny, 1.0, i_1))
    return c[0] + scaled * down, c[0] + scaled * up, 2 * y / total, bow


def _i3(y: Array) -> Array:
    """Modified spherical Bessel function of the first kind, order 3."""
    i_1 = (np.cosh(y) - np.sinh(y) / y) / y
    i_2 = np.sinh(y) / y - 3 * i_1 / y
    return i_1 - 5 * i_2 / y


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


def constants(cycle: Cycle, node: str) -> dict[str, Array]:
    """The cycle constants that a capture of ``node`` would give, by the cycle stage's names (see there).

    ``node`` times the phases that are called for; "" asks for the shares and the output's levels alone.
    """
    settled = settle(cycle)
    period = settled.period
    found: dict[str, Array] = {"period": period}
    if any(p.output for p in cycle.phases):
        high = sum(
            (d for p, d in zip(cycle.phases, settled.durations, strict=True) if p.output == "high"),
            0 * period,
        )
        found["high_share"] = high / period
    found.update({name: level + 0 * period for name, level in cycle.levels.items()})
    if not node:
        return found
    for rising, word in ((True, "charge"), (False, "discharge")):
        index = [i for i, p in enumerate(cycle.phases) if p.node == node and p.rising == rising]
        if not index:
            continue
        phases = [cycle.phases[i] for i in index]
        starts, ends, durations = settled.starts[index], settled.ends[index], settled.durations[index]
        total = np.sum(durations, axis=0)
        found[f"{word}_share"] = total / period
        shape = [starts[0], ends[0], phases[0].curvature + 0 * period, 0 * period]
        bent = np.broadcast_to(
            np.asarray(phases[0].slope) != 0 if len(index) == 1 else np.True_, period.shape
        )
        if np.any(bent):
            # Only where one exponential is not the whole truth: this is the costly way.
            fitted = _stretch(
                [_only(p, bent) for p in phases], starts[:, bent], ends[:, bent], durations[:, bent]
            )
            shape = [np.array(x, float) for x in shape]
            for x, f in zip(shape, fitted, strict=True):
                x[bent] = f
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
