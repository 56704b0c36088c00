"""The circuits: their parts, nodes, equations and defaults."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from benchfit.commands import options, streams
from benchfit.errors import UsageError

if TYPE_CHECKING:
    from benchfit.circuits.model import Circuit


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """``benchfit circuits [NAME]``."""
    parser.add_argument("name", metavar="NAME", nargs="?", help="describe this one; without it, list all")
    options.add_talk(parser)


def run(args: argparse.Namespace) -> int:
    """List the circuits, or describe one."""
    from benchfit import circuits

    if args.name is None:
        from benchfit.show.layout import wrapped

        names = max(len(name) for name in circuits.names())
        for name in circuits.names():
            lines = wrapped(circuits.get(name).title, streams.width(), f"{name:<{names}}  ")
            streams.emit("\n".join(lines))
        return 0
    from benchfit.show.design import render_circuit

    streams.emit(render_circuit(named(args.name), width=streams.width(), colour=streams.colour()))
    return 0


def named(name: str) -> Circuit:
    """The circuit of that name.

    Raises
    ------
    UsageError
        Where there is none; the sentence names the nearest one.
    """
    from benchfit import circuits
    from benchfit.sheet.toml import nearest

    try:
        return circuits.get(name)
    except KeyError:
        known = circuits.names()
        hint = f'the nearest known one is "{nearest(name, known)}" (known: {", ".join(known)})'
        raise UsageError(f'unknown circuit "{name}"; {hint}') from None
