"""As found and as left: what a change was said to do, what it did, and whether it was this change."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from benchfit.errors import UsageError
from benchfit.explain.result import AsFound, Changed, Explanation, Quantity
from benchfit.sheet.model import Sheet

# A standard value of the next finer series, or the same one with its nominal rounded, is the same part.
SAME = 0.01
NAMES = (("frequency", "Hz"), ("duty", "1"))
EFFECTS = ("as predicted", "partly", "not by this change")


def compare(found: Mapping[str, Any], left: Explanation, sheet: Sheet | None) -> AsFound:
    """Hold a build against the record that was made of it before the change.

    Parameters
    ----------
    found : mapping
        A result record (schema 1) of before.
    left : Explanation
        After the change; ``sheet`` says what is meant to be fitted now.

    Raises
    ------
    UsageError
        Where the record is of another circuit.
    """
    then = found.get("circuit")
    if then and left.circuit and then != left.circuit:
        raise UsageError(
            f"the record as found is of a circuit {then}, this build sheet of a circuit {left.circuit}; "
            "as found and as left are of one build: give the record that belongs to it"
        )
    lifted, bare = _quantities(found.get("without_probe")), dict(left.without_probe or {})
    measured = {n: q for n, _ in NAMES if (q := left.measured.get(n)) is not None}
    before, obtained = {**_quantities(found.get("measured")), **lifted}, {**measured, **bare}
    changed = _changed(found, sheet)
    way = _way(found, changed)
    if way is not None and not changed:
        changed = tuple(_taken(found, remedy) for remedy in way)
    predicted = {} if way is None else _predicted(way, changed, before)
    wanted = [n for n, _ in NAMES if n in predicted and (n == "frequency" or _mapping(found, "miss", n))]
    effects = [_effect(before.get(n), predicted[n], obtained.get(n)) for n in wanted]
    first = _first(found.get("capture"))
    return AsFound(
        path=str(first.get("path", "")),
        verdict=found["verdict"] if found.get("verdict") in ("pass", "conditional", "fail") else None,
        before=before,
        predicted=predicted,
        obtained=obtained,
        is_lifted=bool(lifted or bare),
        changed=changed,
        effect=max(effects, key=EFFECTS.index, default=None),
    )


def _changed(found: Mapping[str, Any], sheet: Sheet | None) -> tuple[Changed, ...]:
    """Parts whose nominals are not those of the record; one that merely follows another is not named."""
    if sheet is None or sheet.circuit is None or not _mapping(found, "parts"):
        return ()
    build = sheet.build()
    before = {name: _number(_mapping(found, "parts", name).get("nominal")) for name in found["parts"]}
    changes = []
    for part in sheet.circuit.parts:
        old = before.get(part.name)
        new = build.parts[part.name].nominal if part.name in build.parts else None
        # What the record does not speak of is a default of then, or a parasitic that did not stand out.
        is_told = part.name in before or part.name in build.given
        if is_told and part.name not in build.spreads and not _same(old, new, 1e-6):
            changes.append(Changed(part.name, old, new, part.unit))
    return tuple(changes)


def _way(found: Mapping[str, Any], changed: Sequence[Changed]) -> list[Mapping[str, Any]] | None:
    """The remedies, one or several that go together, that say just this change.

    Where no nominal changed, a part that was off may have been replaced by one that is as it should be: the
    remedy that puts the nominal back, that of the first suspect if there are several.
    """
    ways = _ways(found)
    if changed:
        new = {c.part: c.after for c in changed}
        for way in ways:
            fitted = {str(r.get("part")): _number(r.get("to")) for r in way}
            if fitted.keys() == new.keys() and all(_same(fitted[p], new[p], SAME) for p in new):
                return way
        return None
    parts = _mapping(found, "parts")
    back = [
        way for way in ways
        if all(_same(_number(r.get("to")), _nominal(parts, r.get("part")), SAME) for r in way)
    ]  # fmt: skip
    if len(back) > 1:
        blamed = set(_first(found.get("suspects")).get("causes") or ())
        back = [way for way in back if {r.get("part") for r in way} == blamed]
    return back[0] if len(back) == 1 else None


def _ways(found: Mapping[str, Any]) -> list[list[Mapping[str, Any]]]:
    """The record's remedies; those that stand together and predict the same are one change."""
    ways: list[list[Mapping[str, Any]]] = []
    remedies = found.get("remedies")
    for remedy in remedies if isinstance(remedies, list) else []:
        if not isinstance(remedy, Mapping):
            continue
        last = ways[-1][-1] if ways else None
        if last and last.get("part") != remedy.get("part") and last.get("predicts") == remedy.get("predicts"):
            ways[-1].append(remedy)
        else:
            ways.append([remedy])
    return ways


def _taken(found: Mapping[str, Any], remedy: Mapping[str, Any]) -> Changed:
    name = str(remedy.get("part"))
    unit = str(_mapping(found, "parts", name).get("unit") or "")
    return Changed(name, _number(remedy.get("from")), _number(remedy.get("to")), unit, is_taken=True)


def _predicted(
    way: Sequence[Mapping[str, Any]], changed: Sequence[Changed], before: Mapping[str, Quantity]
) -> dict[str, Quantity]:
    """What the remedy predicts.

    A single part that was fitted is not quite the remedy's value: the frequency is carried from this to that
    along the straight line, in logarithms, on which it was found and predicted.
    """
    predicted = _quantities(way[0].get("predicts"))
    f = predicted.get("frequency")
    if f is None or len(way) > 1 or "frequency" not in before or before["frequency"].value <= 0:
        return predicted
    start, to = _number(way[0].get("from")), _number(way[0].get("to"))
    fitted = changed[0].after
    if not (start and to and fitted and min(start, to, fitted, f.value) > 0):
        return predicted
    if abs(math.log(to / start)) > 2 * SAME:
        slope = math.log(f.value / before["frequency"].value) / math.log(to / start)
        predicted["frequency"] = Quantity(f.value * (fitted / to) ** slope, f.u, f.unit)
    return predicted


def _effect(before: Quantity | None, predicted: Quantity, obtained: Quantity | None) -> str:
    """Whether it came out as predicted, went there in part, or did not do it.

    A move that the readings would show must have been seen, else a prediction that is known poorly would be borne out
    by a build that has not changed.
    """
    if obtained is None:
        return "not by this change"
    is_there = abs(obtained.value - predicted.value) <= 2 * math.hypot(obtained.u or 0.0, predicted.u or 0.0)
    if before is None:
        return "as predicted" if is_there else "partly"
    seen = 2 * math.hypot(obtained.u or 0.0, before.u or 0.0)
    wanted, moved = predicted.value - before.value, obtained.value - before.value
    is_moved = moved * wanted > 0 and abs(moved) > seen
    if is_there and (is_moved or abs(wanted) <= seen):
        return "as predicted"
    return "partly" if is_moved else "not by this change"


def _quantities(table: object) -> dict[str, Quantity]:
    """Frequency and duty of a record's section, those that are known."""
    found = {}
    for name, unit in NAMES:
        q = _mapping(table, name) if isinstance(table, Mapping) else {}
        value = _number(q.get("value"))
        if value is not None:
            found[name] = Quantity(value, _number(q.get("u")), unit)
    return found


def _nominal(parts: Mapping[str, Any], name: object) -> float | None:
    part = parts.get(str(name))
    return _number(part.get("nominal")) if isinstance(part, Mapping) else None


def _same(a: float | None, b: float | None, within: float) -> bool:
    if a is None or b is None:
        return a is b
    return math.isclose(a, b, rel_tol=within, abs_tol=0.0)


def _mapping(table: Mapping[str, Any], *names: str) -> Mapping[str, Any]:
    """The mapping at a path of names, empty where there is none: a record may come from anywhere."""
    for name in names:
        inner = table.get(name)
        table = inner if isinstance(inner, Mapping) else {}
    return table


def _first(x: object) -> Mapping[str, Any]:
    first = x[0] if isinstance(x, list) and x else x
    return first if isinstance(first, Mapping) else {}


def _number(x: object) -> float | None:
    is_number = isinstance(x, int | float) and not isinstance(x, bool)
    return float(x) if is_number and math.isfinite(x) else None  # type: ignore[arg-type]
