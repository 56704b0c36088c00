"""Which parts a build must name: those without a default, and one set of each choice."""

from __future__ import annotations

from collections.abc import Callable, Collection, Sequence
from typing import NoReturn

from benchfit.circuits.model import Circuit

Choice = tuple[tuple[str, ...], ...]


def chosen(choice: Choice, given: Collection[str]) -> tuple[tuple[str, ...], ...]:
    """The sets of a choice that the given parts speak for: one that covers them all, else each they touch."""
    named = {name for names in choice for name in names} & set(given)
    if not named:
        return ()
    covering = tuple(names for names in choice if named <= set(names))
    return covering[:1] or tuple(names for names in choice if named & set(names))


def left_out(circuit: Circuit, given: Collection[str]) -> frozenset[str]:
    """Parts that belong only to those sets of a choice that were not taken."""
    out: set[str] = set()
    for choice in circuit.alternatives:
        every = {name for names in choice for name in names}
        out |= every - {name for names in chosen(choice, given) for name in names}
    return frozenset(out)


def check_complete(circuit: Circuit, given: Collection[str], fail: Callable[[str, str], NoReturn]) -> None:
    """Refuse a build that names two sets of one choice, or that leaves out a part that it needs."""
    choices = {name for choice in circuit.alternatives for names in choice for name in names}
    needed = [p.name for p in circuit.parts if p.nominal is None and p.base is None and not p.optional]
    missing = [name for name in needed if name not in choices and name not in given]
    for choice in circuit.alternatives:
        taken = chosen(choice, given)
        if len(taken) > 1:
            words = " or ".join(_listed(names) for names in choice)
            key = next(name for name in given if name in taken[-1])
            fail(f"parts.{key}", f"give {words}, not both")
        if not taken:
            first, *others = ([name for name in names if name in needed] for names in choice)
            missing.append(f"{_listed(first)} ({', '.join(f'or {_listed(names)}' for names in others)})")
        else:
            missing += [name for name in taken[0] if name in needed and name not in given]
    if missing:
        them = "it" if len(missing) == 1 else "them"
        fail("parts", f"circuit {circuit.name} also needs {_listed(missing)}; add {them} to [parts]")


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
