"""Sheet → build: the circuit's defaults filled in."""

from __future__ import annotations

from dataclasses import replace

from benchfit.circuits.model import Circuit, Part
from benchfit.errors import SheetError
from benchfit.quantity import Spread, Toleranced, parse, parse_spread
from benchfit.sheet.alternatives import left_out
from benchfit.sheet.model import Build, Sheet


def complete(sheet: Sheet) -> Build:
    """See :meth:`Sheet.build`."""
    circuit = sheet.circuit
    if circuit is None:
        says = f'{sheet.path or "build sheet"}: the circuit is missing; say which with circuit = "…"'
        raise SheetError(says, path=sheet.path, key="circuit")
    absent = sheet.absent | (left_out(circuit, sheet.parts) - set(sheet.parts))
    parts = dict(sheet.parts)
    following: list[Part] = []
    parasitics: list[str] = []
    for part in circuit.parts:
        if part.name in parts or part.name in absent:
            continue
        if part.nominal == "absent":
            parasitics.append(part.name)
        elif part.base is not None:
            following.append(part)
        elif part.nominal is not None:
            default = parse(part.nominal, part.unit, key=part.name, default_tolerance=part.tolerance)
            parts[part.name] = replace(default, stated=False)
        else:
            absent |= {part.name}
    spreads = _follow(circuit, parts, following)
    return Build(
        circuit=circuit,
        parts={p.name: parts[p.name] for p in circuit.parts if p.name in parts},
        given=frozenset(sheet.parts),
        absent=frozenset(absent),
        parasitics=tuple(parasitics),
        spreads=spreads,
    )


def _follow(circuit: Circuit, parts: dict[str, Toleranced], following: list[Part]) -> dict[str, Spread]:
    """Add the defaults that follow other parts; one that follows another waits until that is there."""
    import numpy as np

    spreads: dict[str, Spread] = {}
    waiting = list(following)
    while waiting:
        later = []
        for part in waiting:
            assert part.base is not None
            try:
                nominal = float(part.base({name: np.asarray(value.nominal) for name, value in parts.items()}))
            except KeyError:
                later.append(part)
                continue
            spread = parse_spread(part.nominal or part.tolerance, part.unit, key=part.name)
            spreads[part.name] = spread
            parts[part.name] = spread.about(nominal)
        if len(later) == len(waiting):
            names = ", ".join(part.name for part in later)
            says = f"the default of {names} follows parts that are not there; give {names} in [parts]"
            raise SheetError(f"circuit {circuit.name}: {says}", path="", key="parts")
        waiting = later
    return spreads
