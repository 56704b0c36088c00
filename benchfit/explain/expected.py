"""What would be measured of a build with given parts: the forward model as other rooms may ask it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from benchfit.explain import odds
from benchfit.explain.assemble import assemble_bare
from benchfit.explain.model import Array, Model, Parameter, View
from benchfit.sheet.model import Sheet


@dataclass(frozen=True, eq=False)
class Expected:
    """A build's parts → the quantities of a record's ``measured`` section, probe and all.

    A state is a vector of coordinates, one a part: its ln, the part itself where zero or a sign is possible, 1/x of a
    resistance that is absent at infinity, a part that follows another by its ratio to or distance from it.

    Attributes
    ----------
    names, units, coordinates, kinds : tuple of str
        Of every part that the build has, parasitics included.
    weights : tuple of float
        How often each is the one that is off, relative to each other (judgement).
    sizes : tuple of float
        The size, in its coordinate, at which a part that is absent matters; 0 where it cannot, inf for the others.
    """

    names: tuple[str, ...]
    units: tuple[str, ...]
    coordinates: tuple[str, ...]
    kinds: tuple[str, ...]
    weights: tuple[float, ...]
    sizes: tuple[float, ...]
    _model: Model
    _view: View

    def state(self, values: Mapping[str, float]) -> Array:
        """The state at which parts have these values (SI); parts that are not given are nominal."""
        state = self._model.nominal
        known: dict[str, Array] = {}
        for last in (False, True):  # those that follow others need these first
            for i, p in enumerate(self._model.parameters):
                if (p.follows is not None) is not last:
                    continue
                value = values.get(p.name)
                if value is not None and math.isfinite(value):
                    base = float(p.follows(known)) if p.follows is not None else None
                    state[i] = _coordinate(p.coordinate, value, base, state[i])
                known = {**known, p.name: self._model.values(state)[p.name]}
        return state

    def values(self, states: Array) -> dict[str, Array]:
        """Parts (SI) of states of shape (k, n)."""
        return self._model.values(states)

    def measured(self, states: Array) -> dict[str, Array]:
        """Quantities as a capture would give them, shape (k,) each; NaN where the build does not run."""
        found = self._model.constants_of(self._view, self._model.values(states))
        period = found["period"]
        out = {"period": period, "frequency": 1 / period}
        for share in ("charge_share", "high_share"):
            if share in found and "charge_time" not in out:
                out["charge_time"], out["discharge_time"] = found[share] * period, (1 - found[share]) * period
        duty = found.get("high_share", found.get("charge_share"))
        if duty is not None:
            out["duty"] = duty
        for name in ("high", "low", "rise_time", "fall_time"):
            if name in found:
                out[name] = found[name]
        ends = [found[f"{word}_{end}"] for word in ("charge", "discharge") for end in ("start", "end")
                if f"{word}_{end}" in found]  # fmt: skip
        if ends and self._view.shape != "holding":  # a held node rests elsewhere between its phases
            out["upper"], out["lower"] = np.max(ends, axis=0), np.min(ends, axis=0)
        with np.errstate(all="ignore"):
            for word in ("charge", "discharge"):
                if f"{word}_curvature" in found:
                    out |= _exponential(found, word, out[f"{word}_time"])
        return out


def expected(sheet: Sheet, nodes: Sequence[str]) -> Expected:
    """The forward model of a sheet's build where ``nodes`` are probed.

    Raises
    ------
    SheetError
        Where the sheet names no circuit or misses a part.
    """
    model = assemble_bare(sheet)
    timing = next((n for n in model.circuit.nodes if n.name in nodes and n.shape != "square"), None)
    bare = model.views[0]
    loads = {node: load for node, load in bare.loads.items() if node in nodes}
    view = View(timing.name if timing else "", timing.shape if timing else "timing", loads, capacitor=bare.capacitor)
    parts = [p for p in model.parameters if p.part is not None]
    kinds = tuple(p.part.kind for p in parts if p.part is not None)
    return Expected(
        tuple(p.name for p in parts),
        tuple(p.part.unit for p in parts if p.part is not None),
        tuple(p.coordinate for p in parts),
        kinds,
        tuple(odds.weight(p.name, kind) for p, kind in zip(parts, kinds, strict=True)),
        tuple(_size(p, model) for p in parts),
        model,
        view,
    )


def _size(parameter: Parameter, model: Model) -> float:
    """The geometric middle of the range in which a parasitic matters."""
    part = parameter.part
    if part is None or part.reach is None:
        return math.inf
    scales = {**model.values(model.nominal), "period": np.asarray(model.period)}
    try:
        low, high = part.reach(scales)
    except (KeyError, StopIteration, ValueError):  # a scale that this build does not have
        return 0.0
    middle = math.sqrt(low * high)
    return 1 / middle if part.coordinate == "inverse" else middle


def _coordinate(coordinate: str, value: float, base: float | None, fallback: float) -> float:
    if coordinate == "log":
        ratio = value if base is None else value / base if base else math.nan
        return math.log(ratio) if ratio > 0 else fallback
    if coordinate == "inverse":
        return 1 / value if value else fallback
    return value if base is None else value - base


def _exponential(found: Mapping[str, Array], word: str, time: Array) -> dict[str, Array]:
    """Time constant and asymptote of the exponential that a phase looks like."""
    kappa, start, end = (found[f"{word}_{name}"] for name in ("curvature", "start", "end"))
    asymptote = start + (end - start) / -np.expm1(-kappa * time)
    return {f"{word}_time_constant": 1 / kappa, f"{word}_asymptote": asymptote}
