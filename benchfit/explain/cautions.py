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
    """The ``hazard`` warning where the sheet or a capture shows a voltage that may hurt, or a charge that
    may."""
    why = _voltage(sheet, captures) or (_stored(model) if model is not None else "")
    return [Remark("hazard", f"{why}: {HAZARD}")] if why else []


def _voltage(sheet: Sheet, captures: Sequence[CycleConstants]) -> str:
    for name, value in sheet.parts.items():
        if value.unit == "V" and abs(value.nominal) > DC:
            return f"{name} is {value.nominal:g} V, above {DC:g} V d.c."
    for constants in captures:
        for node, (low, high) in constants.spans.items():
            if max(abs(low), abs(high)) > DC:
                return f"the {node} node reaches {max(abs(low), abs(high)):.0f} V, above {DC:g} V"
            swing = high - low
            if swing / 2 > PEAK:
                return f"the {node} node swings by {swing:.0f} V, more than {PEAK:g} V peak"
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
    sheet: Sheet, captures: Sequence[CycleConstants]
) -> tuple[list[CycleConstants], list[Remark]]:
    """Volts that are ten times wrong are set right with a ``wrong-attenuation`` warning; a timing node whose
    mean lies
    where the circuit cannot put it is taken for a.c. coupled, with a warning."""
    from benchfit.explain.assemble import parameters_of, timing_node

    build = sheet.build()
    model = Model(build.circuit, parameters_of(build), (), (), np.empty((0, 0)), 1.0, 1.0)
    checked, notes = [], []
    for constants in captures:
        node = timing_node(build.circuit, constants)
        view = View(node.name if node else "", node.shape if node else "timing", capacitor="C")
        offered = {
            k: float(np.ravel(v)[0]) for k, v in model.constants_of(view, model.values(model.nominal)).items()
        }
        factor, where = _attenuation(constants, offered)
        if factor != 1.0:
            constants = _scaled(constants, factor, where)
            word = "ten times too small" if factor > 1 else "ten times too large"
            notes.append(
                Remark(
                    "wrong-attenuation",
                    f"the {where} voltages are {word} for this circuit while their ratios are right: "
                    "the probe's attenuation setting is taken to be wrong and set right here; check it on "
                    "the scope",
                )
            )
        if (
            node is not None
            and constants.oscillates
            and constants.coupling.get(node.name, "dc") == "dc"
            and _centred(constants, offered)
        ):
            constants = replace(constants, coupling={**constants.coupling, node.name: "ac"})
            notes.append(
                Remark(
                    "ac-coupled",
                    f"the {node.name} node's mean lies at 0 V, where this circuit cannot put it: the scope "
                    "was a.c. coupled; voltages are used as differences only; capture it again d.c. coupled",
                )
            )
        checked.append(constants)
    return checked, notes


def _attenuation(constants: CycleConstants, offered: dict[str, float]) -> tuple[float, str]:
    """10, 0.1 or 1: the factor that brings the swings onto what the sheet expects, and the node it holds
    for."""
    pairs = {"output": ("high", "low"), "timing": ("upper", "lower")}
    for where, (top, bottom) in pairs.items():
        if top in constants and bottom in constants and math.isfinite(offered.get(top, math.nan)):
            seen = constants.value(top) - constants.value(bottom)
            meant = offered[top] - offered[bottom]
            if seen <= 0 or meant <= 0:
                continue
            for factor in (10.0, 0.1):
                if abs(math.log(seen * factor / meant)) < 0.35 and abs(math.log(seen / meant)) > 1.8:
                    return factor, "output's" if where == "output" else "timing node's"
    return 1.0, ""


def _scaled(constants: CycleConstants, factor: float, where: str) -> CycleConstants:
    names = (
        ("high", "low")
        if where.startswith("output")
        else tuple(n for n in VOLTAGES if n not in ("high", "low"))
    )
    scale = np.array([factor if n in names else 1.0 for n in constants.names])
    spans = {
        n: ((a * factor, b * factor) if (n == "output") == where.startswith("output") else (a, b))
        for n, (a, b) in constants.spans.items()
    }
    pick = None if where.startswith("output") else factor
    highest = (
        constants.highest
        if pick is None or constants.highest is None
        else (constants.highest[0] * pick, constants.highest[1] * pick)
    )
    lowest = (
        constants.lowest
        if pick is None or constants.lowest is None
        else (constants.lowest[0] * pick, constants.lowest[1] * pick)
    )
    return replace(
        constants,
        values=constants.values * scale,
        covariance=constants.covariance * np.outer(scale, scale),
        spans=spans,
        highest=highest,
        lowest=lowest,
    )


def _centred(constants: CycleConstants, offered: dict[str, float]) -> bool:
    """Whether the node's middle lies at 0 V although the circuit's own is far from it (more than half a
    swing)."""
    if "upper" not in constants or "lower" not in constants:
        return False
    upper, lower = offered.get("upper", math.nan), offered.get("lower", math.nan)
    if not (math.isfinite(upper) and math.isfinite(lower)):
        return False
    swing = constants.value("upper") - constants.value("lower")
    middle = 0.5 * (constants.value("upper") + constants.value("lower"))
    meant = 0.5 * (upper + lower)
    return (
        abs(middle) < 0.2 * swing
        and abs(meant) > 0.45 * (upper - lower)
        and abs(meant - middle) > 0.35 * swing
    )
