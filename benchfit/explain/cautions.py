"""Cautions and checks of the set-up: hazard, wrong attenuation, undeclared a.c. coupling."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from benchfit.cycle.constants import CycleConstants
from benchfit.errors import Remark
from benchfit.explain.model import VOLTAGES, Model, View
from benchfit.sheet.model import Sheet

# IEC 61010-1, normal condition: 30 V r.m.s., 42.4 V peak, 60 V d.c.; 45 µC stored above 60 V.
RMS, PEAK, DC, CHARGE = 30.0, 42.4, 60.0, 45e-6

HAZARD = (
    "discharge the capacitor through a resistor before touching and check that it stays discharged, "
    "work with one hand, use an insulated probe rated for the voltage, and never clip an earthed probe to a "
    "mains-derived circuit without isolation; "
    "follow local codes and leave mains-derived supplies to qualified persons"
)


def cautions(model: Model | None, sheet: Sheet, captures: Sequence[CycleConstants]) -> list[Remark]:
    """The ``hazard`` warning where the sheet or a capture shows a voltage that may hurt, or a charge that may."""
    why = _voltage(sheet, captures) or (_stored(model) if model is not None else "")
    return [Remark("hazard", f"{why}: {HAZARD}")] if why else []


def _voltage(sheet: Sheet, captures: Sequence[CycleConstants]) -> str:
    """The first voltage that the sheet or a capture shows above the limits; "" where there is none."""
    for name, value in sheet.parts.items():
        if value.unit == "V" and abs(value.nominal) > DC:
            return f"{name} is {value.nominal:g} V, above {DC:g} V d.c."
    circuit = sheet.circuit
    levels = [v.nominal for n, v in sheet.parts.items() if circuit and circuit.part(n).kind == "level"]
    spans = [("output", (min(levels), max(levels)))] if len(levels) > 1 else []
    spans += [span for constants in captures for span in constants.spans.items()]
    for node, (low, high) in spans:
        if max(abs(low), abs(high)) > DC:
            return f"the {node} node reaches {max(abs(low), abs(high)):.0f} V, above {DC:g} V"
        swing = high - low
        peak = max(abs(low), abs(high))
        if peak > PEAK and swing > 0.1 * peak:
            return f"the {node} node alternates up to {peak:.0f} V, more than {PEAK:g} V peak"
        # A square of peak a has an r.m.s. of a; anything else less.
        if node == "output" and swing / 2 > RMS:
            return f"the output swings by {swing:.0f} V, more than {RMS:g} V r.m.s."
    return ""


def _stored(model: Model) -> str:
    values = model.values(model.nominal)
    supply = float(values.get("supply", values.get("V_high", 0.0)))
    for p in model.parameters:
        if p.part is not None and p.part.kind == "capacitor" and supply > DC:
            charge = float(values[p.name]) * supply
            if charge > CHARGE:
                return f"{p.name} stores up to {charge * 1e6:.0f} µC"
    return ""


def scope_checks(
    sheet: Sheet, captures: Sequence[CycleConstants], attenuation: bool = True
) -> tuple[list[CycleConstants], list[Remark]]:
    """The captures with their volts set right, and what is to be said of it.

    Volts that are ten times wrong (``attenuation``), and a timing node whose mean lies where the circuit cannot put
    it, which is taken for a.c. coupled.
    """
    from benchfit.explain.assemble import parameters_of, timing_node

    build = sheet.build()
    model = Model(build.circuit, parameters_of(build), (), (), np.empty((0, 0)), 1.0, 1.0)
    checked, notes = [], []
    for constants in captures:
        node = timing_node(build.circuit, constants)
        view = View(node.name if node else "", node.shape if node else "timing")
        values = model.constants_of(view, model.values(model.nominal))
        offered = {k: float(np.ravel(v)[0]) for k, v in values.items()}
        if attenuation:
            for where in ("output", "timing"):
                factor = _attenuation(constants, offered, where)
                if factor != 1.0:
                    constants = _scaled(constants, factor, where)
                    notes.append(
                        Remark("wrong-attenuation", _WRONG.format(where=_WHERE[where], how=_HOW[factor]))
                    )
        if node is not None and _is_centred(constants, offered, node.name):
            constants = replace(constants, coupling={**constants.coupling, node.name: "ac"})
            notes.append(Remark("ac-coupled", _COUPLED.format(node=node.name)))
        checked.append(constants)
    return checked, notes


_HOW = {10.0: "ten times too small", 0.1: "ten times too large"}
_WHERE = {"output": "output's", "timing": "timing node's"}
_WRONG = (
    "the {where} voltages are {how} for this circuit while their ratios are right: the probe's "
    "attenuation setting is taken to be wrong and set right here; check it on the scope"
)
_COUPLED = (
    "the {node} node's mean lies at 0 V, where this circuit cannot put it: the scope was a.c. coupled; "
    "voltages are used as differences only; capture it again d.c. coupled"
)


def _attenuation(constants: CycleConstants, offered: dict[str, float], where: str) -> float:
    """10, 0.1 or 1: the factor that brings a node's swing onto what the sheet expects."""
    top, bottom = ("high", "low") if where == "output" else ("upper", "lower")
    if not (top in constants and bottom in constants and math.isfinite(offered.get(top, math.nan))):
        return 1.0
    seen = constants.value(top) - constants.value(bottom)
    meant = offered[top] - offered[bottom]
    if seen <= 0 or meant <= 0 or abs(math.log(seen / meant)) < 1.8:
        return 1.0
    return next((f for f in (10.0, 0.1) if abs(math.log(seen * f / meant)) < 0.35), 1.0)


def _scaled(constants: CycleConstants, factor: float, where: str) -> CycleConstants:
    levels = ("high", "low")
    names = levels if where == "output" else tuple(n for n in VOLTAGES if n not in levels)
    scale = np.array([factor if n in names else 1.0 for n in constants.names])
    node = {n: (n == "output") == (where == "output") for n in constants.spans}

    def times(pair: tuple[float, float] | None) -> tuple[float, float] | None:
        return pair if pair is None or where == "output" else (pair[0] * factor, pair[1] * factor)

    return replace(
        constants,
        values=constants.values * scale,
        covariance=constants.covariance * np.outer(scale, scale),
        spans={n: (a * factor, b * factor) if node[n] else (a, b) for n, (a, b) in constants.spans.items()},
        noise={n: x * factor if node.get(n) else x for n, x in constants.noise.items()},
        highest=times(constants.highest),
        lowest=times(constants.lowest),
    )


def _is_centred(constants: CycleConstants, offered: dict[str, float], node: str) -> bool:
    """Whether the node's middle lies at 0 V although the circuit's own is far from it."""
    if not constants.oscillates or constants.coupling.get(node, "dc") != "dc":
        return False
    upper, lower = offered.get("upper", math.nan), offered.get("lower", math.nan)
    if "upper" not in constants or "lower" not in constants or not math.isfinite(upper - lower):
        return False
    swing = constants.value("upper") - constants.value("lower")
    middle = 0.5 * (constants.value("upper") + constants.value("lower"))
    meant = 0.5 * (upper + lower)
    far = abs(meant) > 0.45 * (upper - lower) and abs(meant - middle) > 0.35 * swing
    return abs(middle) < 0.2 * swing and far
