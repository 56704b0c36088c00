"""The circuits: parts → phases. One file each; a file that defines ``CIRCUIT`` is a circuit."""

from __future__ import annotations

from functools import cache

from benchfit.circuits.model import Circuit

__all__ = ["get", "names"]


@cache
def _all() -> dict[str, Circuit]:
    import importlib
    import pkgutil

    found = {}
    for entry in pkgutil.iter_modules(__path__):
        circuit = getattr(importlib.import_module(f"{__name__}.{entry.name}"), "CIRCUIT", None)
        if isinstance(circuit, Circuit):
            found[circuit.name] = circuit
    return dict(sorted(found.items()))


def names() -> tuple[str, ...]:
    """The names of all circuits, in alphabetical order."""
    return tuple(_all())


def get(name: str) -> Circuit:
    """The circuit of that name; KeyError where there is none."""
    return _all()[name]
