"""Op-amp (or comparator) astable, with a real output: it waits, it slews, it may be an open collector."""

from __future__ import annotations

import numpy as np

from tools.bench.engine import Array, End, Mode, Numbers, Rig, Values
from tools.bench.parts import Source, conductance, grounded, loaded

# An output said to switch at once crosses its swing in this fraction of the timing constant.
INSTANT = 1e-11


def fill(parts: Numbers) -> Numbers:
    """Steering resistors where R serves both ways, and conductances of the network."""
    out = dict(parts)
    both, up, down = (out.pop(name, None) for name in ("R", "R_charge", "R_discharge"))
    out["G_up"], out["G_down"] = (
        conductance(both if up is None else up),
        conductance(both if down is None else down),
    )
    if both is not None:
        out["V_diode"] = 0.0
    out["G_top"], out["G_bottom"] = conductance(out.pop("R_top")), conductance(out.pop("R_bottom"))
    out["G_bias"] = conductance(out.pop("R_bias", None))
    out["G_pull"] = conductance(out.pop("R_pull", None))
    return out


def _plus(p: Values, output: Array) -> Array:
    total = p.G_top + p.G_bottom + p.G_bias
    return (output * p.G_top + p.V_reference * p.G_bottom + p.supply * p.G_bias) / total


def _from_output(p: Values, output: Array) -> Source:
    """Current into the timing node from the output's node, through one resistor or two with diodes."""

    def source(v: Array) -> tuple[Array, Array]:
        up = output - p.V_diode > v
        down = output + p.V_diode < v
        g = np.where(up, p.G_up, np.where(down, p.G_down, 0.0))
        return g * (output - np.where(up, p.V_diode, -p.V_diode)), g

    return source


def _pulled(p: Values, v: Array) -> tuple[Array, Array]:
    """The output's node under its pull-up, as alpha + gamma·v, with v the timing node's voltage.

    Kirchhoff at the output: the pull-up feeds the timing resistor and the divider at once.
    """
    total = p.G_top + p.G_bottom + p.G_bias
    fixed = (p.V_reference * p.G_bottom + p.supply * p.G_bias) / total
    divider = p.G_top * (1.0 - p.G_top / total)
    g = p.G_up
    whole = p.G_pull + g + divider
    with np.errstate(invalid="ignore", divide="ignore"):
        alpha = (p.V_high * p.G_pull + g * p.V_diode + p.G_top * fixed) / whole
        gamma = g / whole
    stiff = p.G_pull == 0
    return np.where(stiff, p.V_high, alpha), np.where(stiff, 0.0, gamma)


def _high_source(p: Values) -> Source:
    def source(v: Array) -> tuple[Array, Array]:
        alpha, gamma = _pulled(p, v)
        return p.G_up * (alpha - p.V_diode), p.G_up * (1.0 - gamma)

    return source


def _slew(p: Values) -> Array:
    quick = (p.V_high - p.V_low) * p.G_up / (p.C * INSTANT)
    return np.minimum(p.slew, quick)


def _level(p: Values, late: bool, high: bool) -> Mode:
    """Output at a level: until the timing node trips the comparator, or (late) until the delay is over."""
    source = loaded(p, _high_source(p) if high else _from_output(p, p.V_low))
    rate, node = grounded(p, source)

    def output(y: Array) -> Array:
        if not high:
            return p.V_low + 0.0 * y[0]
        alpha, gamma = _pulled(p, y[0])
        return alpha + gamma * node(y[0])

    def rates(y: Array) -> Array:
        return np.stack([rate(y[0]), 0.0 * y[0]])

    def nodes(y: Array) -> dict[str, Array]:
        return {"capacitor": node(y[0]), "output": output(y)}

    def leave(y: Array) -> Array:
        return np.stack([y[0], output(y)])

    if late:
        wait = p.delay + (p.late_up if high else p.late_down)
        return Mode(rates, nodes, lasts=np.maximum(wait, 0.0), then="falling" if high else "rising", jump=leave)
    sign, trip = (1.0, p.trip_up) if high else (-1.0, p.trip_down)
    past = End(lambda y: sign * (node(y[0]) - _plus(p, output(y)) - trip), "late high" if high else "late low")
    return Mode(rates, nodes, ends=(past,))


def _moving(p: Values, rising: bool) -> Mode:
    """Output on its way at the slew rate; it turns back if the timing node overtakes the divider
    meanwhile."""
    sign = 1.0 if rising else -1.0
    rate_of = _slew(p)

    def at(y: Array) -> tuple[Array, Array]:
        rate, node = grounded(p, loaded(p, _from_output(p, y[1])))
        return rate(y[0]), node(y[0])

    def rates(y: Array) -> Array:
        return np.stack([at(y)[0], sign * rate_of + 0.0 * y[1]])

    def nodes(y: Array) -> dict[str, Array]:
        return {"capacitor": at(y)[1], "output": y[1]}

    def goal(y: Array) -> Array:
        if not rising:
            return p.V_low - y[1]
        alpha, gamma = _pulled(p, y[0])
        return y[1] - (alpha + gamma * at(y)[1])

    there = End(goal, "high" if rising else "low")
    # Once it moves it turns back only when overtaken clearly, more than by the noise of a trip level.
    least = 5e-3 * (p.V_high - p.V_low)
    back = End(lambda y: sign * (at(y)[1] - _plus(p, y[1])) - least, "falling" if rising else "rising")
    return Mode(rates, nodes, ends=(there, back))


def _running(p: Values) -> tuple[str, Array]:
    return "high", np.stack([_plus(p, p.V_low), p.V_high])


def _rest(p: Values) -> tuple[str, Array]:
    return "high", np.stack([0.0 * p.C, p.V_high])


def _horizon(p: Values) -> Array:
    g = np.minimum(p.G_up, p.G_down)
    return 60.0 * (p.C + p.C_stray + p.C_probe_capacitor) / g + 20.0 * p.delay


OP_AMP = Rig(
    name="op-amp",
    nodes=("capacitor", "output"),
    first="rising",
    high=frozenset({"high", "late high", "rising"}),
    modes={
        "high": lambda p: _level(p, late=False, high=True),
        "late high": lambda p: _level(p, late=True, high=True),
        "falling": lambda p: _moving(p, rising=False),
        "low": lambda p: _level(p, late=False, high=False),
        "late low": lambda p: _level(p, late=True, high=False),
        "rising": lambda p: _moving(p, rising=True),
    },
    running=_running,
    rest=_rest,
    horizon=_horizon,
    required=("C", "R_top", "R_bottom", "V_high", "V_low"),
    defaults={
        "V_reference": 0.0,
        "supply": 0.0,
        "V_diode": 0.6,
        "R": None,
        "R_charge": None,
        "R_discharge": None,
        "R_bias": None,
        "R_pull": None,
    },
    fill=fill,
)
