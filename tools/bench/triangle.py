"""Triangle generator: an integrator and a comparator with hysteresis round it, whose output waits and
slews."""

from __future__ import annotations

import numpy as np

from tools.bench.engine import Array, End, Mode, Rig, Values

INSTANT = 1e-11


def _input(p: Values, y: Array) -> Array:
    """Voltage at the comparator's input above its reference."""
    return (y[0] * p.R_feedback + y[1] * p.R_in) / (p.R_in + p.R_feedback) - p.V_reference


def _slope(p: Values, y: Array) -> Array:
    return -(y[1] - p.V_reference) / (p.R * p.C)


def _nodes(y: Array) -> dict[str, Array]:
    return {"capacitor": y[0], "output": y[1]}


def _level(p: Values, high: bool, late: bool) -> Mode:
    def rates(y: Array) -> Array:
        return np.stack([_slope(p, y), 0.0 * y[1]])

    if late:
        wait = p.delay + (p.late_up if high else p.late_down)
        return Mode(rates, _nodes, lasts=np.maximum(wait, 0.0), then="falling" if high else "rising")
    sign, trip = (-1.0, p.trip_up) if high else (1.0, p.trip_down)
    return Mode(
        rates,
        _nodes,
        ends=(End(lambda y: sign * (_input(p, y) - trip), "late high" if high else "late low"),),
    )


def _moving(p: Values, rising: bool) -> Mode:
    sign = 1.0 if rising else -1.0
    swing = p.V_high - p.V_low
    speed = np.minimum(p.slew, swing / (p.R * p.C * INSTANT))

    def rates(y: Array) -> Array:
        return np.stack([_slope(p, y), sign * speed + 0.0 * y[1]])

    there = End(lambda y: y[1] - p.V_high if rising else p.V_low - y[1], "high" if rising else "low")
    back = End(lambda y: -sign * _input(p, y) - 5e-3 * swing, "falling" if rising else "rising")
    return Mode(rates, _nodes, ends=(there, back))


def _upper(p: Values) -> Array:
    ratio = p.R_in / p.R_feedback
    return p.V_reference * (1.0 + ratio) - p.V_low * ratio


TRIANGLE = Rig(
    name="triangle",
    nodes=("capacitor", "output"),
    first="rising",
    high=frozenset({"rising", "high", "late high"}),
    modes={
        "high": lambda p: _level(p, high=True, late=False),
        "late high": lambda p: _level(p, high=True, late=True),
        "falling": lambda p: _moving(p, rising=False),
        "low": lambda p: _level(p, high=False, late=False),
        "late low": lambda p: _level(p, high=False, late=True),
        "rising": lambda p: _moving(p, rising=True),
    },
    running=lambda p: ("high", np.stack([_upper(p), p.V_high])),
    rest=lambda p: ("high", np.stack([0.0 * p.C, p.V_high])),
    horizon=lambda p: 60.0 * p.R * p.C * (1.0 + p.R_in / p.R_feedback) + 20.0 * p.delay,
    required=("R", "C", "R_in", "R_feedback", "V_high", "V_low"),
    defaults={"V_reference": 0.0},
)
