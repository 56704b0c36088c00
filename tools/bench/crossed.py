"""Circuits whose capacitors hang between two nodes: two transistors crosswise, and two CMOS gates."""

from __future__ import annotations

import numpy as np

from tools.bench.engine import Array, End, Mode, Numbers, Rig, Values
from tools.bench.parts import loaded

# States of the two-transistor circuit: bases 1 and 2 without the drop in the capacitors' legs, and the
# voltages that collectors 1 and 2 have recovered to.
BASE, COLLECTOR = {1: 0, 2: 1}, {1: 2, 2: 3}


def _pair(p: Values, off: int) -> tuple[Array, Array, Array, Array]:
    """Base resistor and coupling capacitor of the transistor that is off, and what recovers its collector."""
    if off == 1:
        return p.R1, p.C1, p.RC1, p.C2
    return p.R2, p.C2, p.RC2, p.C1


def _half(p: Values, off: int, late: bool) -> Mode:
    """One transistor off: its base climbs out of the kick, its collector recovers, the other is saturated."""
    resistor, nominal, load, other = _pair(p, off)
    on = 3 - off
    aside = p.C_stray + getattr(p, f"C_probe_base{off}")
    source = loaded(p, lambda v: (p.supply / resistor + 0.0 * v, 1.0 / resistor + 0.0 * v), f"base{off}", p.supply)

    def base(w: Array) -> tuple[Array, Array]:
        c = nominal * (1.0 + p.C_slope * (w - p.V_CE))
        current, g = source(w)
        z = p.ESR * c / (c + aside)
        v = (w + z * current) / (1.0 + z * g)
        return v, (current - g * v) / (c + aside)

    def recovery(s: Array) -> tuple[Array, Array]:
        gap = p.supply - s
        # Recovered is recovered: what is left of a fast exponential must not hold up an explicit integrator.
        current = np.where(np.abs(gap) < p.flat * p.supply, 0.0, gap) / (load + p.ESR)
        return s + p.ESR * current, current / (other * (1.0 + p.C_slope * (p.V_BE - s)))

    def rates(y: Array) -> Array:
        out = np.zeros_like(y)
        out[BASE[off]] = base(y[BASE[off]])[1]
        out[COLLECTOR[off]] = recovery(y[COLLECTOR[off]])[1]
        return out

    def nodes(y: Array) -> dict[str, Array]:
        held = 0.0 * y[0]
        return {
            f"base{off}": base(y[BASE[off]])[0],
            f"base{on}": p.V_BE + held,
            f"collector{off}": recovery(y[COLLECTOR[off]])[0],
            f"collector{on}": p.V_CE + held,
        }

    def swap(y: Array) -> Array:
        out = np.empty_like(y)
        capacitance = other * (1.0 + p.C_slope * (p.V_BE - y[COLLECTOR[off]]))
        ground = p.C_stray + getattr(p, f"C_probe_base{on}")
        kick = (y[COLLECTOR[off]] - p.V_CE) * capacitance / (capacitance + ground)
        out[BASE[on]] = np.maximum(p.V_BE - kick, -p.V_breakdown)
        out[BASE[off]] = p.V_BE
        out[COLLECTOR[off]] = p.V_CE
        out[COLLECTOR[on]] = p.V_CE + p.V_BE - np.minimum(y[BASE[off]], p.V_BE)
        return out

    after = f"off {on}"
    trip, lag = (p.trip_up, p.late_up) if off == 1 else (p.trip_down, p.late_down)
    if late:
        return Mode(rates, nodes, lasts=np.maximum(p.delay + lag, 0.0), then=after, jump=swap)
    return Mode(rates, nodes, ends=(End(lambda y: base(y[BASE[off]])[0] - p.V_on - trip, f"late {off}"),))


def _transistors_start(p: Values) -> Array:
    return np.stack([np.maximum(p.V_BE - p.supply + p.V_CE, -p.V_breakdown), p.V_BE, p.V_CE, p.V_CE])


def _fill(parts: Numbers) -> Numbers:
    out = dict(parts)
    if out["V_on"] is None:
        out["V_on"] = np.asarray(out["V_BE"]) - 0.12
    return out


TWO_TRANSISTOR = Rig(
    name="two-transistor",
    nodes=("base1", "base2", "collector1", "collector2"),
    first="off 1",
    high=frozenset({"off 1", "late 1"}),
    modes={
        "off 1": lambda p: _half(p, 1, late=False),
        "late 1": lambda p: _half(p, 1, late=True),
        "off 2": lambda p: _half(p, 2, late=False),
        "late 2": lambda p: _half(p, 2, late=True),
    },
    running=lambda p: ("off 1", _transistors_start(p)),
    rest=lambda p: ("off 1", np.stack([0.0 * p.C1, p.V_BE, p.V_CE, p.V_CE])),
    horizon=lambda p: (
        60.0 * (p.R1 * (p.C1 + p.C_stray + p.C_probe_base1) + p.R2 * (p.C2 + p.C_stray + p.C_probe_base2))
        + 20.0 * p.delay
    ),
    required=("supply", "R1", "C1", "R2", "C2", "RC1", "RC2"),
    defaults={"V_BE": 0.68, "V_on": None, "V_CE": 0.1, "V_breakdown": 7.0, "flat": 1e-9},
    fill=_fill,
)


def _gate(p: Values, falling: bool, late: bool) -> Mode:
    """The junction of a gate pair: the second gate's output is high while it falls."""
    first, second = (0.0 * p.supply, p.supply) if falling else (p.supply, 0.0 * p.supply)
    aside = p.C_stray + p.C_probe_capacitor
    sign, wall = (1.0, p.supply + p.V_clamp) if falling else (-1.0, -p.V_clamp)
    feed = 1.0 / (p.R + p.R_gate)

    def through_gates(v: Array) -> tuple[Array, Array]:
        beyond = sign * (v - wall)
        soft = np.maximum(p.soft, 1e-30)
        pushed = np.where(p.soft > 0, soft * np.logaddexp(0.0, beyond / soft), np.maximum(beyond, 0.0))
        return feed * first - sign * p.G_series * pushed, feed + 0.0 * v

    source = loaded(p, through_gates)

    def at(w: Array) -> tuple[Array, Array]:
        c = p.C * (1.0 + p.C_slope * (w - second))
        current, g = source(w)
        z = p.ESR * c / (c + aside)
        v = (w + z * current) / (1.0 + z * g)
        return v, (current - g * v) / (c + aside)

    def nodes(y: Array) -> dict[str, Array]:
        return {"capacitor": at(y[0])[0], "output": second + 0.0 * y[0]}

    def kick(y: Array) -> Array:
        c = p.C * (1.0 + p.C_slope * (y[0] - second))
        w = y[0] + (-sign) * p.supply * c / (c + aside)
        hard = np.clip(w, -p.V_clamp, p.supply + p.V_clamp)
        return np.where(p.G_series > 0, w, hard)[None]

    if late:
        lag = p.late_down if falling else p.late_up
        return Mode(
            lambda y: at(y[0])[1][None],
            nodes,
            lasts=np.maximum(p.delay + lag, 0.0),
            then="rise" if falling else "fall",
            jump=kick,
        )
    trip = p.trip_down if falling else p.trip_up
    end = End(lambda y: sign * (p.V_threshold + trip - at(y[0])[0]), "late fall" if falling else "late rise")
    return Mode(lambda y: at(y[0])[1][None], nodes, ends=(end,))


def _gate_fill(parts: Numbers) -> Numbers:
    out = dict(parts)
    series = out.pop("R_series")
    out["G_series"] = 0.0 if series is None else 1.0 / np.asarray(series)
    if out["V_threshold"] is None:
        out["V_threshold"] = 0.5 * np.asarray(out["supply"])
    return out


GATE_PAIR = Rig(
    name="gate-pair",
    nodes=("capacitor", "output"),
    first="fall",
    high=frozenset({"fall", "late fall"}),
    modes={
        "fall": lambda p: _gate(p, falling=True, late=False),
        "late fall": lambda p: _gate(p, falling=True, late=True),
        "rise": lambda p: _gate(p, falling=False, late=False),
        "late rise": lambda p: _gate(p, falling=False, late=True),
    },
    running=lambda p: ("fall", (p.V_threshold + p.supply)[None].copy()),
    rest=lambda p: ("rise", 0.0 * p.C[None]),
    horizon=lambda p: 60.0 * (p.R + p.R_gate) * (p.C + p.C_stray + p.C_probe_capacitor) + 20.0 * p.delay,
    required=("supply", "R", "C"),
    defaults={"R_series": None, "V_threshold": None, "V_clamp": 0.6, "R_gate": 250.0, "soft": 0.0},
    fill=_gate_fill,
)
