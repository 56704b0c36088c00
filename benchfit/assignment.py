"""Which channel was clipped to which node: from the sheet, else from names and waveforms."""

from __future__ import annotations

from dataclasses import replace

from benchfit.capture.model import Capture, Channel
from benchfit.circuits.model import Circuit
from benchfit.cycle import guess
from benchfit.cycle.constants import Assignment
from benchfit.errors import CaptureError
from benchfit.sheet.model import ChannelChoice, Sheet


def assignments(capture: Capture, sheet: Sheet | None, number: int = 1) -> tuple[Assignment, ...]:
    """See :func:`benchfit.pipeline.assign`."""
    if sheet is None:
        return guess(capture)
    changes = sheet.captures.get(number)
    choices = dict(sheet.channels)
    if changes is not None:
        choices.update(changes.channels)
    if choices:
        return tuple(_chosen(capture, sheet, node, choice, number) for node, choice in choices.items())
    found = _named(capture, sheet.circuit) or tuple(_placed(a, sheet.circuit) for a in guess(capture))
    return tuple(replace(a, scale=_scale(sheet, a.node, number)) for a in found)


def _named(capture: Capture, circuit: Circuit | None) -> tuple[Assignment, ...]:
    """Channels whose names are the circuit's nodes."""
    if circuit is None:
        return ()
    known = {n.name: n for n in circuit.nodes} | {alias: circuit.node(alias) for alias in circuit.aliases}
    found = [
        Assignment(c.name, known[c.name.lower()].name, known[c.name.lower()].shape)
        for c in capture.channels
        if c.name.lower() in known
    ]
    return tuple(found)


def _placed(a: Assignment, circuit: Circuit | None) -> Assignment:
    """A guessed node as the circuit knows it: its own name and shape; a circuit without an output has none."""
    if circuit is None:
        return a
    try:
        node = circuit.node(a.node)
    except KeyError:
        node = circuit.nodes[0]
    return replace(a, node=node.name, shape=node.shape)


def _scale(sheet: Sheet, node: str, number: int) -> float:
    probes = dict(sheet.probes)
    changes = sheet.captures.get(number)
    if changes is not None:
        probes.update({k: v for k, v in changes.probes.items() if v is not None})
    for name, probe in probes.items():
        same = name == node
        if sheet.circuit is not None and not same:
            try:
                same = sheet.circuit.node(name).name == node
            except KeyError:
                same = False
        if same:
            return probe.scale
    return 1.0


def _chosen(capture: Capture, sheet: Sheet, node: str, choice: ChannelChoice, number: int) -> Assignment:
    channel = _find(capture, choice.name)
    shape = "square" if node == "output" else "timing"
    name = node
    if sheet.circuit is not None:
        known = sheet.circuit.node(node)
        name, shape = known.name, known.shape
    return Assignment(channel.name, name, shape, _scale(sheet, name, number), choice.coupling)  # type: ignore[arg-type]


def _find(capture: Capture, name: str) -> Channel:
    for c in capture.channels:
        if c.name == name:
            return c
    for c in capture.channels:
        if c.name.strip().lower() == name.strip().lower():
            return c
    names = ", ".join(c.name for c in capture.channels)
    raise CaptureError(
        f"{capture.path}: the sheet's [channels] name {name}, but the capture has {names}; "
        "correct the section or the name",
        path=capture.path,
        column=name,
    )
