"""From the build sheet and the captures' constants to the model that inference works on."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from benchfit.circuits.model import Circuit, Node, Part
from benchfit.circuits.solve import constants as circuit_constants
from benchfit.cycle.constants import CycleConstants
from benchfit.explain.model import Array, Model, Observation, Parameter, View, observe
from benchfit.quantity import Toleranced
from benchfit.sheet.model import Build, CaptureChanges, Probe, Sheet

ABSENT = {"log": 0.0, "linear": 0.0, "inverse": 0.0}


def parameters_of(build: Build) -> tuple[Parameter, ...]:
    """One parameter for each part that the build has, absent parasitics included (with no room to move)."""
    found = []
    for part in build.circuit.parts:
        if part.name in build.parts:
            found.append(_parameter(part, build))
        elif part.kind == "parasitic":
            found.append(Parameter(part.name, part.coordinate, 0.0, 0.0, 0.0, (0.0, 0.0), part))
    return tuple(found)


def _parameter(part: Part, build: Build) -> Parameter:
    value = build.parts[part.name]
    if part.base is not None and part.name not in build.given:
        return _follower(part, value)
    if part.coordinate == "log":
        mean, sd = value.prior_log()
        return Parameter(
            part.name,
            "log",
            mean,
            sd,
            math.log(value.nominal),
            (math.log(value.low), math.log(value.high)),
            part,
        )
    if part.coordinate == "inverse":
        if math.isinf(value.nominal):
            return Parameter(part.name, "inverse", 0.0, 0.0, 0.0, (0.0, 0.0), part)
        inverse = value.reciprocal("")
        mean, sd = inverse.prior_linear()
        return Parameter(part.name, "inverse", mean, sd, inverse.nominal, (inverse.low, inverse.high), part)
    mean, sd = value.prior_linear()
    return Parameter(part.name, "linear", mean, sd, value.nominal, (value.low, value.high), part)


def _follower(part: Part, value: Toleranced) -> Parameter:
    """A default that follows other parts: its coordinate is the ratio to, or the difference from, its base."""
    if part.coordinate == "log":
        low, high = math.log(value.low / value.nominal), math.log(value.high / value.nominal)
    else:
        low, high = value.low - value.nominal, value.high - value.nominal
    return Parameter(
        part.name,
        part.coordinate,
        0.5 * (low + high),
        (high - low) / math.sqrt(12),
        0.0,
        (low, high),
        part,
        part.base,
    )


def nominal_period(circuit: Circuit, parameters: Sequence[Parameter]) -> float:
    """Period (s) of the nominal build; NaN where it does not oscillate."""
    model = Model(circuit, (*parameters, _exact("timebase", 0.0)), (), (), np.empty((0, 0)), 1.0, 1.0)
    with np.errstate(all="ignore"):
        found = circuit_constants(circuit.cycle(model.values(model.nominal)), "")
    return float(found["period"])


def _exact(name: str, value: float) -> Parameter:
    return Parameter(name, "linear", value, 0.0, value, (value, value))


def _known(name: str, value: Toleranced, coordinate: str = "linear") -> Parameter:
    if coordinate == "log":
        mean, sd = value.prior_log()
        return Parameter(
            name, "log", mean, sd, math.log(value.nominal), (math.log(value.low), math.log(value.high))
        )
    mean, sd = value.prior_linear()
    return Parameter(name, "linear", mean, sd, value.nominal, (value.low, value.high))


def load_of(probe: Probe | None) -> tuple[float, float] | None:
    """(conductance S, capacitance F) of a probe; None where there is none."""
    if probe is None:
        return None
    conductance = 0.0 if probe.resistance is None else 1 / probe.resistance.nominal
    capacitance = 0.0 if probe.capacitance is None else probe.capacitance.nominal
    return (conductance, capacitance) if conductance or capacitance else None


def view_of(
    circuit: Circuit,
    timing: Node | None,
    probes: dict[str, Probe | None],
    change: CaptureChanges | None,
    number: int,
    parameters: list[Parameter],
    build: Build,
) -> View:
    """The conditions of one capture; what was different is added to ``parameters``."""
    loads = {}
    merged = dict(probes)
    if change is not None:
        merged.update(change.probes)
    for name, probe in merged.items():
        node = circuit.node(name)
        load = load_of(probe)
        if load is not None and node.loads:
            loads[node.name] = load
    swaps: dict[str, str] = {}
    added = {"C": "", "R": ""}
    if change is not None:
        for name, value in change.parts.items():
            label = f"{name}:{number}"
            parameters.append(_known(label, value, circuit.part(name).coordinate))
            swaps[name] = label
        for letter, extra in (("C", change.added_C), ("R", change.added_R)):
            if extra is not None:
                added[letter] = f"added_{letter}:{number}"
                parameters.append(_known(added[letter], extra))
    capacitor = next(p.name for p in circuit.parts if p.kind == "capacitor")
    if timing is None:
        return View("", "timing", loads, swaps, added["C"], added["R"], capacitor)
    return View(timing.name, timing.shape, loads, swaps, added["C"], added["R"], capacitor)


def timing_node(circuit: Circuit, constants: CycleConstants) -> Node | None:
    """The timing node that a capture shows, if any."""
    for name in constants.spans:
        try:
            node = circuit.node(name)
        except KeyError:
            continue
        if node.shape != "square":
            return node
    return None


def assemble(sheet: Sheet, captures: Sequence[CycleConstants]) -> Model:
    """The model of one build seen in one or several captures.

    Raises
    ------
    SheetError
        Where the sheet names no circuit.
    """
    build = sheet.build()
    circuit = build.circuit
    parts = parameters_of(build)
    parameters = list(parts)
    views, observations, blocks = [], [], []
    for number, constants in enumerate(captures, 1):
        view = view_of(
            circuit,
            timing_node(circuit, constants),
            dict(sheet.probes),
            sheet.captures.get(number),
            number,
            parameters,
            build,
        )
        views.append(view)
    parameters.extend(_scope(sheet, captures))
    period = nominal_period(circuit, parts)
    first = captures[0]
    swing = float(
        np.ptp([constants_span for span in first.spans.values() for constants_span in span] or [1.0])
    )
    model = Model(circuit, tuple(parameters), tuple(views), (), np.empty((0, 0)), swing, period)
    for number, constants in enumerate(captures):
        if not constants.oscillates:
            continue
        offered = model.constants_of(views[number], model.values(model.center))
        wanted = [n for n in offered if n not in ("charge_end", "discharge_end")]
        if "high_share" in constants and "charge_share" in constants:
            wanted = _one_share(wanted, constants)
        found, block = observe(constants, number, wanted)
        observations.extend(found)
        blocks.append(block)
    extra, variances = _readings(sheet, build, model)
    observations.extend(extra)
    blocks.extend(np.array([[v]]) for v in variances)
    return Model(
        circuit,
        tuple(parameters),
        tuple(views),
        tuple(observations),
        _diagonal(blocks),
        swing,
        period if math.isfinite(period) else (1.0 if not first.oscillates else first.value("period")),
    )


def assemble_bare(sheet: Sheet) -> Model:
    """The model of a build that nobody has captured: parts and the sheet's probes, no observations."""
    build = sheet.build()
    parts = parameters_of(build)
    parameters = [*parts, _exact("timebase", 0.0)]
    view = view_of(build.circuit, None, dict(sheet.probes), None, 1, parameters, build)
    return Model(
        build.circuit,
        tuple(parameters),
        (view,),
        (),
        np.empty((0, 0)),
        1.0,
        nominal_period(build.circuit, parts),
    )


def _one_share(wanted: list[str], constants: CycleConstants) -> list[str]:
    """Where the output's edges and the timing node's turns give one and the same share, the sharper one is taken."""
    if abs(constants.value("high_share") - constants.value("charge_share")) > 0.02:
        return wanted
    worse = "charge_share" if constants.u("high_share") <= constants.u("charge_share") else "high_share"
    return [n for n in wanted if n != worse]


def _scope(sheet: Sheet, captures: Sequence[CycleConstants]) -> list[Parameter]:
    """Gain and offset of each channel, and the timebase: type B, rectangles (JCGM 100, 4.3.7)."""
    root = math.sqrt(3.0)
    found = [
        Parameter(
            "timebase",
            "linear",
            0.0,
            sheet.scope.timebase / root,
            0.0,
            (-sheet.scope.timebase, sheet.scope.timebase),
        )
    ]
    for kind in ("timing", "output"):
        spans = [
            (span, c.coupling.get(node, "dc"))
            for c in captures
            for node, span in c.spans.items()
            if _kind(sheet, node) == kind
        ]
        if not spans:
            continue
        width = max(high - low for (low, high), _ in spans)
        offset = sheet.scope.offset if sheet.scope.offset is not None else 0.02 * width
        if any(coupling == "ac" for _, coupling in spans):
            offset = 20 * width
        gain = sheet.scope.gain
        found.append(Parameter(f"gain:{kind}", "linear", 0.0, gain / root, 0.0, (-gain, gain)))
        found.append(Parameter(f"offset:{kind}", "linear", 0.0, offset / root, 0.0, (-offset, offset)))
    return found


def _kind(sheet: Sheet, node: str) -> str:
    try:
        assert sheet.circuit is not None
        return "output" if sheet.circuit.node(node).shape == "square" else "timing"
    except KeyError:
        return "output" if node == "output" else "timing"


def _readings(sheet: Sheet, build: Build, model: Model) -> tuple[list[Observation], list[float]]:
    """Readings as observations: of a part in its own coordinate, of frequency (ln) or duty as a counter has them."""
    found, variances = [], []
    names = {p.name: p for p in model.parameters}
    for name, value in sheet.readings.items():
        if name in ("frequency", "period", "duty"):
            if name == "duty":
                mean, sd = value.prior_linear()
                offered = model.constants_of(model.views[0], model.values(model.center))
                constant = "high_share" if "high_share" in offered else "charge_share"
                found.append(Observation(0, constant, "counter", mean))
                variances.append(sd**2 + (1e-4) ** 2)
            else:
                mean, sd = value.prior_log()
                found.append(Observation(0, "frequency", "counter", mean if name == "frequency" else -mean))
                variances.append(sd**2 + (1e-6) ** 2)
            continue
        p = names.get(name)
        if p is None:
            continue
        if p.coordinate == "log":
            mean, sd = value.prior_log()
            direct = p.follows is None
            if not direct:
                mean, sd = value.prior_linear()
        elif p.coordinate == "inverse":
            mean, sd = value.reciprocal("").prior_linear()
            direct = True
        else:
            mean, sd = value.prior_linear()
            direct = p.follows is None
        found.append(Observation(0, name, "reading", mean, 1.0 if direct else 0.0))
        variances.append(max(sd, 1e-6 * max(abs(mean), 1e-3)) ** 2)
    return found, variances


def _diagonal(blocks: Sequence[Array]) -> Array:
    size = sum(b.shape[0] for b in blocks)
    out = np.zeros((size, size))
    at = 0
    for block in blocks:
        out[at : at + block.shape[0], at : at + block.shape[0]] = block
        at += block.shape[0]
    return out
