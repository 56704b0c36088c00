"""Relaxation oscillators as a bench has them: node equations, integrated by scipy, switched by events.

Nothing here knows the package. A half is what the circuit does between two switchings: which currents flow
into the timing node (Kirchhoff), where the other plate of its capacitor is, and at what voltage the next
switching comes.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.integrate import solve_ivp
from scipy.optimize import brentq

TIGHT = {"rtol": 1e-11, "atol": 1e-13}
FOREVER = 1e3


@dataclass(frozen=True)
class Leg:
    """A capacitor C·(1 + slope·q), q the voltage across it, behind ``esr``; ``aside`` from node to ground."""

    c: float
    aside: float = 0.0
    esr: float = 0.0
    slope: float = 0.0


@dataclass(frozen=True)
class Half:
    """``inflow(v, t)``: current into the node at v, t after the last switching; ``delay`` after ``level``."""

    inflow: Callable[[float, float], float]
    level: float
    rising: bool
    delay: float = 0.0
    foot: float = 0.0
    wall: float | None = None


@dataclass(frozen=True)
class Ran:
    """Durations, node voltages at begin and end of each half; NaN where a switching never came."""

    durations: np.ndarray
    starts: np.ndarray
    ends: np.ndarray

    @property
    def period(self) -> float:
        return float(self.durations.sum())


def through(*arms: tuple[float, float], current: float = 0.0) -> Callable[[float, float], float]:
    """Inflow from (resistance ohm, voltage V) arms and a constant current (A)."""
    return lambda v, t: sum((volts - v) / ohms for ohms, volts in arms) + current


def node_of(leg: Leg, half: Half, q: float, t: float) -> float:
    """Node voltage for q on the plates, where nothing but the leg takes the node's current."""
    base = half.foot + q
    if leg.esr == 0:
        return base

    def off(v: float) -> float:
        return v - base - leg.esr * half.inflow(v, t)

    reach = max(1.0, abs(leg.esr * half.inflow(base, t)))
    return float(brentq(off, base - reach, base + reach, xtol=1e-14, rtol=1e-15))


def _rates(leg: Leg, half: Half) -> Callable[[float, np.ndarray], list[float]]:
    def rates(t: float, y: np.ndarray) -> list[float]:
        q = float(y[0])
        c = leg.c * (1 + leg.slope * q)
        if leg.esr == 0:
            return [half.inflow(half.foot + q, t) / (c + leg.aside)]
        if leg.aside == 0:
            return [half.inflow(node_of(leg, half, q, t), t) / c]
        leg_current = (y[1] - half.foot - q) / leg.esr
        return [leg_current / c, (half.inflow(float(y[1]), t) - leg_current) / leg.aside]

    return rates


def _node(leg: Leg, half: Half, t: float, y: np.ndarray) -> float:
    return float(y[1]) if leg.esr and leg.aside else node_of(leg, half, float(y[0]), t)


def _go(
    leg: Leg, half: Half, y: np.ndarray, start: float, length: float, until: float | None
) -> tuple[float, np.ndarray, bool]:
    """Integrate on from time ``start`` of the half: (time, state, whether ``until`` was met)."""

    def event(t: float, y: np.ndarray) -> float:
        return _node(leg, half, t, y) - (0.0 if until is None else until)

    event.terminal, event.direction = True, (1.0 if half.rising else -1.0)  # type: ignore[attr-defined]
    stiff = bool(leg.esr and leg.aside)
    method = {"method": "Radau", "rtol": 1e-9, "atol": 1e-11} if stiff else {"method": "DOP853", **TIGHT}
    events = None if until is None else event
    done = solve_ivp(_rates(leg, half), (start, start + length), y, events=events, **method)
    met = until is not None and done.t_events[0].size > 0
    return (
        (float(done.t_events[0][0]), done.y_events[0][0], True) if met else (done.t[-1], done.y[:, -1], False)
    )


def _switched(leg: Leg, before: Half, after: Half, y: np.ndarray) -> np.ndarray:
    """The state just after a switching: charge stays but for what a step of the other plate moves about."""
    step = after.foot - before.foot
    q = float(y[0])
    if leg.esr and leg.aside:
        return np.array([q, y[1]])
    if leg.aside and step:
        # The node's charge is kept: ∫C dq over the leg and aside·dv beside it, dq = dv − step.
        def moved(dv: float) -> float:
            end = q + dv - step
            return leg.c * (end - q) * (1 + 0.5 * leg.slope * (end + q)) + leg.aside * dv

        dv = brentq(moved, min(0.0, step) - 1e-12, max(0.0, step) + 1e-12, xtol=1e-14, rtol=1e-15)
        q = q + float(dv) - step
    if after.wall is not None and not leg.esr:
        # A clamp on the node itself takes at once what lies beyond it.
        beyond = (min if not after.rising else max)(after.foot + q, after.wall)
        q = beyond - after.foot
    return np.array([q])


def run(leg: Leg, halves: Sequence[Half], first: float, cycles: int = 6, horizon: float = FOREVER) -> Ran:
    """Follow the halves round, from ``first`` on the node; what the last of ``cycles`` rounds was."""
    y = np.array([first - halves[0].foot, first] if leg.esr and leg.aside else [first - halves[0].foot])
    durations, starts, ends = [], [], []
    for number in range(cycles * len(halves)):
        half = halves[number % len(halves)]
        if number:
            y = _switched(leg, halves[(number - 1) % len(halves)], half, y)
        start = _node(leg, half, 0.0, y)
        ahead = half.level - start if half.rising else start - half.level
        now, met = 0.0, True
        if ahead > 0:
            now, y, met = _go(leg, half, y, 0.0, horizon, half.level)
        if not met:
            return Ran(*(np.full(len(halves), np.nan) for _ in range(3)))
        if half.delay:
            now, y, _ = _go(leg, half, y, now, half.delay, None)
        durations.append(now)
        starts.append(start)
        ends.append(_node(leg, half, now, y))
    last = slice(-len(halves), None)
    return Ran(np.array(durations[last]), np.array(starts[last]), np.array(ends[last]))
