"""Parts as the bench uses them: parasitics as conductances, probes as loads, and the capacitor with its
leg."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from tools.bench.engine import Array, Rig, Values

PARASITICS = ("R_leak", "R_leak_supply", "I_leak", "C_stray", "ESR", "C_slope", "delay", "slew")
Source = Callable[[Array], tuple[Array, Array]]

Number = float | Array
Probe = tuple[float, float]


def conductance(resistance: Number | None) -> Array:
    """1/R; an absent resistor (None or infinite) conducts nothing."""
    if resistance is None:
        return np.zeros(1)
    with np.errstate(divide="ignore"):
        return 1.0 / np.asarray(resistance, dtype=float)


def prepare(
    rig: Rig, parts: Mapping[str, Number | None], probes: Mapping[str, Probe] | None = None, **extra: Number
) -> Values:
    """All numbers that the rig's modes need, of one shape (n,).

    Parameters
    ----------
    parts : mapping
        Part names as in the build sheet, values in SI, scalars or arrays (n,); None or missing: absent.
    probes : mapping of node to (resistance in ohm, capacitance in F)
    extra : numbers
        The bench's own settings (``trip_up``, ``lag``, ...), which are no parts.
    """
    given = {k: v for k, v in parts.items() if v is not None}
    missing = [name for name in rig.required if name not in given]
    if missing:
        raise ValueError(f"{rig.name}: the bench needs {', '.join(missing)}")
    unknown = set(given) - set(rig.required) - set(rig.defaults) - set(PARASITICS)
    if unknown:
        raise ValueError(f"{rig.name}: the bench knows no {', '.join(sorted(unknown))}")
    values: dict[str, Number] = {**rig.defaults, **given}
    values = rig.fill(values)
    values["G_leak"] = conductance(given.get("R_leak"))
    values["G_leak_supply"] = conductance(given.get("R_leak_supply"))
    values["slew"] = given.get("slew", np.inf)
    for name in ("I_leak", "C_stray", "ESR", "C_slope", "delay"):
        values[name] = given.get(name, 0.0)
    for node in rig.nodes:
        resistance, capacitance = (probes or {}).get(node, (np.inf, 0.0))
        values[f"G_probe_{node}"] = conductance(resistance)
        values[f"C_probe_{node}"] = capacitance
    for name in ("trip_up", "trip_down", "late_up", "late_down"):
        values[name] = extra.pop(name, 0.0)
    values.update(extra)
    values.pop("R_leak", None)
    values.pop("R_leak_supply", None)
    arrays = np.broadcast_arrays(*(np.atleast_1d(np.asarray(v, dtype=float)) for v in values.values()))
    return Values({k: np.ascontiguousarray(a) for k, a in zip(values, arrays, strict=True)})


def loaded(p: Values, source: Source, node: str = "capacitor", rail: Array | None = None) -> Source:
    """A timing node's source (current at 0 V, conductance) with leaks and probe added."""
    if rail is None:
        rail = np.where(p.supply != 0, p.supply, p.V_high) if hasattr(p, "V_high") else p.supply
    more = p.G_leak_supply * rail - p.I_leak
    load = p.G_leak + p.G_leak_supply + getattr(p, f"G_probe_{node}")

    def both(v: Array) -> tuple[Array, Array]:
        a, g = source(v)
        return a + more, g + load

    return both


def grounded(
    p: Values, source: Source, node: str = "capacitor"
) -> tuple[Callable[[Array], Array], Callable[[Array], Array]]:
    """The capacitor from a node to ground: (dv/dt, voltage at the node), functions of the voltage on its
    plates.

    The capacitor's leg has a resistance ESR, and its capacitance follows its voltage, C·(1 + C_slope·v).
    Stray and probe capacitance sit at the node; the node's own fast settling (ESR with the stray capacitance)
    is taken as instantaneous: of the node's current i the leg takes k·i, k = C/(C + C_stray + C_probe).
    """
    aside = p.C_stray + getattr(p, f"C_probe_{node}")

    def at_node(v: Array) -> Array:
        c = p.C * (1.0 + p.C_slope * v)
        a, g = source(v)
        z = p.ESR * c / (c + aside)
        return (v + z * a) / (1.0 + z * g)

    def rate(v: Array) -> Array:
        c = p.C * (1.0 + p.C_slope * v)
        a, g = source(v)
        z = p.ESR * c / (c + aside)
        return (a - g * (v + z * a) / (1.0 + z * g)) / (c + aside)

    return rate, at_node
