"""Which parts a build must name: those without a default, and one set of each choice."""

from __future__ import annotations

from collections.abc import Callable, Collection
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
    missing = [
        part.name
        for part in circuit.parts
        if part.nominal is None and part.base is None and not part.optional
        and part.name not in choices and part.name not in given
    ]  # fmt: skip
    for choice in circuit.alternatives:
        taken = chosen(choice, given)
        if len(taken) > 1:
            words = " or ".join(" and ".join(names) for names in choice)
            key = next(name for name in given if name in taken[-1])
            fail(f"parts.{key}", f"give {words}, not both")
        if not taken:
            missing.append(f"{' and '.join(choice[0])} (or {' and '.join(choice[-1])})")
        else:
            missing += [name for name in taken[0] if name not in given]
    if missing:
        listed = missing[0] if len(missing) == 1 else f"{', '.join(missing[:-1])} and {missing[-1]}"
        fail("parts", f"circuit {circuit.name} also needs {listed}; add "
                      f"{'it' if len(missing) == 1 else 'them'} to the section [parts]")  # fmt: skip
