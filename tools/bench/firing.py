"""Circuits in which a device empties the capacitor in one go: gas lamp, unijunctions, trigger diode, reset
switch."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from tools.bench.engine import Array, End, Mode, Numbers, Rig, Values
from tools.bench.parts import Source, grounded, loaded


def _feed(p: Values) -> Source:
    return loaded(p, lambda v: (p.feed_current + 0.0 * v, p.feed_conductance + 0.0 * v), rail=p.rail)


def _slope_resistance(p: Values, v: Array) -> Array:
    """The device's resistance at v: it may grow towards the valley, and fall with the current.

    ``valley_bend`` b: r·(1 + b·x²), x = 0 at the firing voltage and 1 at the valley. ``current_bend`` c:
    r·(d/D)^−c with d the voltage above the floor and D its geometric mean over the discharge.
    """
    x = (p.fire - v) / (p.fire - p.quit)
    drop = np.maximum(v - p.floor, 1e-6 * np.abs(p.fire))
    middle = np.sqrt(np.maximum((p.fire - p.floor) * (p.quit - p.floor), 1e-12))
    return p.r * (1.0 + p.valley_bend * x**2) * (drop / middle) ** -p.current_bend


def _quiet(p: Values) -> tuple[Callable[[Array], Array], Callable[[Array], dict[str, Array]], Source]:
    source = _feed(p)
    rate, node = grounded(p, source)
    return (lambda y: rate(y[0])[None]), (lambda y: {"capacitor": node(y[0])}), source


def _charge(p: Values) -> Mode:
    rates, nodes, source = _quiet(p)
    level = p.fire + p.trip_up
    current, conductance = source(level)
    enough = current - conductance * level >= p.I_peak

    def over(y: Array) -> Array:
        return nodes(y)["capacitor"] - level

    return Mode(
        rates,
        nodes,
        ends=(
            End(lambda y: np.where(enough, over(y), -1.0), "late"),
            End(lambda y: np.where(enough, -1.0, over(y)), "starved"),
        ),
    )


def _late(p: Values) -> Mode:
    rates, nodes, _ = _quiet(p)
    return Mode(rates, nodes, lasts=np.maximum(p.delay + p.late_up, 0.0), then="fired")


def _fired(p: Values) -> Mode:
    feed = _feed(p)

    def source(v: Array) -> tuple[Array, Array]:
        current, conductance = feed(v)
        g = 1.0 / _slope_resistance(p, v)
        return current + g * p.floor, conductance + g

    rate, node = grounded(p, source)
    level = p.quit + p.trip_down
    current, conductance = feed(level)
    lets_go = current - conductance * level <= p.I_valley

    def under(y: Array) -> Array:
        return level - node(y[0])

    return Mode(
        lambda y: rate(y[0])[None],
        lambda y: {"capacitor": node(y[0])},
        ends=(
            End(lambda y: np.where(lets_go, under(y), -1.0), "charge"),
            End(lambda y: np.where(lets_go, -1.0, under(y)), "held"),
        ),
    )


def _stays(p: Values) -> Mode:
    return Mode(lambda y: 0.0 * y, lambda y: {"capacitor": y[0]})


def _horizon(p: Values) -> Array:
    whole = p.C + p.C_stray + p.C_probe_capacitor
    leak = p.G_leak + p.G_leak_supply + p.G_probe_capacitor
    free = np.where(p.feed_conductance + leak > 0, whole / np.maximum(p.feed_conductance + leak, 1e-300), 0.0)
    ramp = np.where(p.feed_conductance > 0, 0.0, whole * p.fire / np.maximum(p.feed_current, 1e-300))
    return 60.0 * np.where(ramp > 0, ramp, free) + 20.0 * (p.delay + p.late_up)


def _rig(name: str, required: tuple[str, ...], defaults: Numbers, device: Callable[[Numbers], Numbers]) -> Rig:
    """A rig whose ``device`` turns parts into fire, quit, floor (V), r (ohm) and the source that feeds the
    node."""

    def fill(parts: Numbers) -> Numbers:
        out = {**parts, **device(parts)}
        out.setdefault("rail", out.get("supply", 0.0))
        if "feed_current" not in out:
            out["feed_conductance"] = 1.0 / np.asarray(parts["R"])
            out["feed_current"] = np.asarray(parts["supply"]) / np.asarray(parts["R"])
        return {k: v for k, v in out.items() if v is not None}

    return Rig(
        name=name,
        nodes=("capacitor",),
        first="charge",
        high=frozenset({"charge", "late"}),
        modes={"charge": _charge, "late": _late, "fired": _fired, "starved": _stays, "held": _stays},
        running=lambda p: ("charge", p.quit[None].copy()),
        rest=lambda p: ("charge", 0.0 * p.C[None]),
        horizon=_horizon,
        required=required,
        defaults={"I_peak": 0.0, "I_valley": np.inf, "valley_bend": 0.0, "current_bend": 0.0, **defaults},
        fill=fill,
    )


def _lamp(parts: Numbers) -> Numbers:
    maintain = parts["V_maintain"]
    return {
        "fire": parts["V_strike"],
        "quit": parts["V_extinguish"],
        "r": parts["r_lamp"],
        "floor": np.asarray(parts["V_extinguish"]) - 5.0 if maintain is None else maintain,
    }


def _below(parts: Numbers, quit_at: Any, gap: float) -> Any:
    return np.asarray(quit_at) - gap if parts["V_floor"] is None else parts["V_floor"]


def _unijunction(parts: Numbers) -> Numbers:
    return {
        "fire": np.asarray(parts["eta"]) * np.asarray(parts["supply"]) + np.asarray(parts["V_D"]),
        "quit": parts["V_valley"],
        "r": parts["r_discharge"],
        "floor": _below(parts, parts["V_valley"], 1.0),
    }


def _programmable(parts: Numbers) -> Numbers:
    lower, upper = np.asarray(parts["RG1"]), np.asarray(parts["RG2"])
    gate = np.asarray(parts["supply"]) * lower / (lower + upper)
    return {
        "fire": gate + np.asarray(parts["V_offset"]),
        "quit": parts["V_valley"],
        "r": parts["r_discharge"],
        "floor": _below(parts, parts["V_valley"], 1.0),
    }


def _trigger(parts: Numbers) -> Numbers:
    low = np.asarray(parts["V_breakover"]) - np.asarray(parts["V_breakback"])
    return {
        "fire": parts["V_breakover"],
        "quit": low,
        "r": parts["r_discharge"],
        "floor": _below(parts, low, 4.0),
    }


def _ramp(parts: Numbers) -> Numbers:
    return {
        "fire": parts["V_upper"],
        "quit": parts["V_lower"],
        "r": parts["r_discharge"],
        "floor": 0.0,
        "feed_current": parts["I_charge"],
        "feed_conductance": 0.0,
        "rail": 0.0,
    }


_NONE: Numbers = {"V_floor": None}

GAS_LAMP = _rig(
    "gas-lamp", ("supply", "R", "C", "V_strike", "V_extinguish"), {"V_maintain": None, "r_lamp": 5e3}, _lamp
)
UNIJUNCTION = _rig(
    "unijunction",
    ("supply", "R", "C", "eta", "V_valley"),
    {"V_D": 0.6, "r_discharge": 50.0, **_NONE},
    _unijunction,
)
PROGRAMMABLE = _rig(
    "programmable-unijunction",
    ("supply", "R", "C", "RG1", "RG2", "V_valley"),
    {"V_offset": 0.6, "r_discharge": 50.0, **_NONE},
    _programmable,
)
TRIGGER_DIODE = _rig(
    "trigger-diode",
    ("supply", "R", "C", "V_breakover", "V_breakback"),
    {"r_discharge": 30.0, **_NONE},
    _trigger,
)
CURRENT_RAMP = _rig("current-ramp", ("I_charge", "C", "V_upper", "V_lower"), {"r_discharge": 50.0}, _ramp)
