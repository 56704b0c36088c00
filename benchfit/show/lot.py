"""Many units of one build taken together: spread, causes, means that are off, values to select on test.

A lot keeps a few numbers of each unit, never its explanation: memory hardly grows with the captures.
"""

from __future__ import annotations

import math
import re
import sys
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from statistics import NormalDist, fmean, median, stdev
from typing import Any, Protocol

from benchfit.explain.result import Explanation

CONTENT = 0.95
CONFIDENCE = 0.95


@dataclass(frozen=True, slots=True)
class PartSeen:
    """One part in one unit: its value with u, ``deviation`` from the nominal, inside its limits or not."""

    value: float
    u: float | None
    unit: str
    deviation: float | None
    within: bool | None
    from_sheet: bool


@dataclass(frozen=True, slots=True)
class Exchange:
    """A standard value that would bring a unit onto its target, with the frequency it then has (Hz)."""

    part: str
    before: float | None
    after: float
    unit: str
    frequency: float | None


@dataclass(frozen=True, slots=True)
class Unit:
    """What the lot keeps of one capture.

    ``frequency`` (Hz) and ``duty`` are those that are judged: without the probe where that is known; ``miss``
    is that of the frequency. ``causes``: the first suspect's, () where nothing is off, None where no suspect
    is known. ``error``: why the capture could not be explained.
    """

    name: str
    frequency: float | None = None
    frequency_u: float | None = None
    duty: float | None = None
    duty_u: float | None = None
    miss: float | None = None
    verdict: str | None = None
    oscillates: bool = True
    causes: tuple[str, ...] | None = None
    probability: float | None = None
    settled: bool = False
    parts: Mapping[str, PartSeen] | None = None
    exchange: Exchange | None = None
    warnings: tuple[str, ...] = ()
    error: str = ""


@dataclass(frozen=True)
class Spread:
    """How one quantity spreads over the lot, in its own unit.

    ``interval`` is the two-sided statistical tolerance interval: 95 % of such units lie within it, with 95 %
    confidence, if they spread normally (None under three units). ``limits`` are the sheet's, ``outside`` the
    units beyond them. ``off`` is the mean's distance from the nominal or target as a fraction, with its u;
    ``is_off`` where it is beyond 3 u. ``together``: the parts that it is known only together with.
    """

    name: str
    unit: str
    count: int
    mean: float
    deviation: float
    lowest: float
    highest: float
    interval: tuple[float, float] | None = None
    nominal: float | None = None
    limits: tuple[float, float] | None = None
    outside: tuple[str, ...] = ()
    off: float | None = None
    off_u: float | None = None
    is_off: bool = False
    together: tuple[str, ...] = ()


@dataclass(frozen=True)
class Lot:
    """All units, and what they have in common.

    ``target`` of the frequency (Hz). ``apart``: units with a settled fault of their own, few among many, that
    the spreads leave out. ``together``: groups of parts that most captures know only together.
    ``suits``: the value that more than half of the units would take, and how many.
    """

    units: tuple[Unit, ...]
    title: str = ""
    circuit: str | None = None
    target: float | None = None
    apart: tuple[str, ...] = ()
    spreads: tuple[Spread, ...] = ()
    together: tuple[tuple[str, ...], ...] = ()
    verdicts: Mapping[str, int] | None = None
    causes: tuple[tuple[str, int], ...] = ()
    selections: tuple[tuple[Exchange, tuple[str, ...]], ...] = ()
    suits: tuple[Exchange, int] | None = None

    def text(self, width: int = 80, colour: bool = False) -> str:
        """The lot for people: one line for each unit, then what they have in common."""
        from benchfit.show.lot_text import render_lot

        return render_lot(self, width=width, colour=colour)

    def __str__(self) -> str:
        return self.text()

    @property
    def failures(self) -> tuple[Unit, ...]:
        """Captures that could not be explained."""
        return tuple(u for u in self.units if u.error)

    def spread(self, name: str) -> Spread | None:
        """The spread of that name, None where it is not known."""
        return next((s for s in self.spreads if s.name == name), None)


class _HasRecord(Protocol):
    """What came of a capture: it has the record of that."""

    def record(self) -> Mapping[str, Any]: ...


def lot_of(records: Iterable[Explanation | Mapping[str, Any] | _HasRecord], *, title: str = "") -> Lot:
    """The lot that explanations or result records make, read one after the other.

    Parameters
    ----------
    records : iterable of Explanation, of what explain_lot yields, or of result records (failed ones included)
    title : str
        What the lot is called; an explanation's own title where it is not given.
    """
    from benchfit.show.record import record

    units: list[Unit] = []
    common = _Common()
    for item in records:
        if isinstance(item, Explanation):
            title = title or item.title
            item = record(item)
        elif not isinstance(item, Mapping):
            title = title or getattr(getattr(item, "explanation", None), "title", "")
            item = item.record()
        common.see(item)
        units.append(_unit(item))
    units = _named_apart(units)
    good = [u for u in units if not u.error]
    faulty = tuple(u.name for u in good if u.settled and u.causes)
    apart = faulty if 4 * len(faulty) < len(good) else ()
    selections = _selections(good)
    return Lot(
        units=tuple(units),
        title=title,
        circuit=common.circuit,
        target=common.targets.get("frequency"),
        apart=apart,
        spreads=_spreads([u for u in good if u.name not in apart], common),
        together=common.together(len(good)),
        verdicts=dict(Counter(u.verdict for u in good if u.verdict)),
        causes=_causes(good),
        selections=selections,
        suits=_one_for_all(good, selections),
    )


class _Common:
    """What all records of a lot share, gathered on the way: circuit, targets, nominals, limits, groups."""

    def __init__(self) -> None:
        self.circuit: str | None = None
        self.targets: dict[str, float] = {}
        self.nominals: dict[str, tuple[float | None, Any, str]] = {}
        self.groups: Counter[tuple[str, ...]] = Counter()

    def see(self, record: Mapping[str, Any]) -> None:
        self.circuit = self.circuit or record.get("circuit")
        for name, miss in (record.get("miss") or {}).items():
            if miss and miss.get("target"):
                self.targets.setdefault(name, float(miss["target"]))
        for name, part in (record.get("parts") or {}).items():
            self.nominals.setdefault(name, (part.get("nominal"), part.get("limits"), part.get("unit") or ""))
        self.groups.update(tuple(group) for group in record.get("unseparated") or ())

    def together(self, units: int) -> tuple[tuple[str, ...], ...]:
        """The groups of parts that more than half of the units know only together."""
        return tuple(group for group, n in self.groups.items() if 2 * n > units)


def _unit(record: Mapping[str, Any]) -> Unit:
    capture = record.get("capture") or {}
    first = capture if isinstance(capture, Mapping) else (capture[0] if capture else {})
    path = str(first.get("path", ""))
    if "error" in record:
        return Unit(path, error=str((record["error"] or {}).get("says", "unknown error")))
    measured, lifted = record.get("measured") or {}, record.get("without_probe") or {}
    f, d = (lifted.get(n) or measured.get(n) or {} for n in ("frequency", "duty"))
    miss = (record.get("miss") or {}).get("frequency") or {}
    target = miss.get("target")
    first_suspect = next(iter(record.get("suspects") or ()), None)
    return Unit(
        name=path,
        frequency=f.get("value"),
        frequency_u=f.get("u"),
        duty=d.get("value"),
        duty_u=d.get("u"),
        miss=f["value"] / target - 1 if target and f.get("value") is not None else None,
        verdict=record.get("verdict"),
        oscillates=bool(measured.get("oscillates", True)),
        causes=None if first_suspect is None else tuple(first_suspect["causes"]),
        probability=None if first_suspect is None else first_suspect.get("probability"),
        settled=bool(record.get("settled")),
        # Names and units are the same in every record, and yet come as other texts from every worker.
        parts={sys.intern(str(n)): seen for n, p in (record.get("parts") or {}).items()
               if (seen := _seen(p)) is not None},
        exchange=_exchange(record),
        warnings=tuple(sys.intern(str(w["code"])) for w in record.get("warnings") or ()),
    )  # fmt: skip


def _seen(part: Mapping[str, Any]) -> PartSeen | None:
    if part.get("value") is None:
        return None
    sheet = part.get("known_from") == "build sheet"
    unit = sys.intern(str(part.get("unit") or ""))
    return PartSeen(part["value"], part.get("u"), unit, part.get("deviation"), part.get("within"), sheet)


def _exchange(record: Mapping[str, Any]) -> Exchange | None:
    """The first remedy of a unit that is not passed."""
    remedies = record.get("remedies") or ()
    if not remedies or record.get("verdict") == "pass" or remedies[0].get("to") is None:
        return None
    first = remedies[0]
    unit = ((record.get("parts") or {}).get(first["part"]) or {}).get("unit") or ""
    then = ((first.get("predicts") or {}).get("frequency") or {}).get("value")
    return Exchange(first["part"], first.get("from"), first["to"], unit, then)


def _named_apart(units: Sequence[Unit]) -> list[Unit]:
    """Units called by their file's name alone, where that tells them apart."""
    from dataclasses import replace

    short = [re.split(r"[\\/]", u.name)[-1] for u in units]
    return (
        [replace(u, name=s) for u, s in zip(units, short, strict=True)]
        if len(set(short)) == len(short)
        else list(units)
    )


def _spreads(units: Sequence[Unit], common: _Common) -> tuple[Spread, ...]:
    found = []
    for name, unit in (("frequency", "Hz"), ("duty", "")):
        values = [(u.name, getattr(u, name), getattr(u, f"{name}_u")) for u in units]
        spread = spread_of(name, unit, [v for v in values if v[1] is not None], common.targets.get(name))
        found += [spread] if spread else []
    grouped = common.together(len(units))
    for name, (nominal, limits, unit) in common.nominals.items():
        seen = [(u.name, u.parts[name]) for u in units if u.parts and name in u.parts]
        told = [s for _, s in seen if not s.from_sheet]
        together = tuple(dict.fromkeys(p for g in grouped if name in g for p in g if p != name))
        if not nominal or (2 * len(told) <= len(seen) and not together):
            continue
        both = tuple(limits) if limits and None not in limits else None
        spread = spread_of(name, unit, [(n, s.value, s.u) for n, s in seen], nominal, both, together)
        found += [spread] if spread else []
    return tuple(found)


def spread_of(
    name: str,
    unit: str,
    values: Sequence[tuple[str, float, float | None]],
    nominal: float | None = None,
    limits: tuple[float, float] | None = None,
    together: tuple[str, ...] = (),
) -> Spread | None:
    """The spread of one quantity over units given as (unit's name, value, u); None of no value at all.

    The mean's distance from ``nominal`` counts as real where it is beyond 3 u, u² = s²/n + ũ² with the median
    ũ of the values' own u: what the instrument is off by is the same for all units and never averages out.
    """
    x = [v for _, v, _ in values if math.isfinite(v)]
    if not x:
        return None
    mean, s = fmean(x), stdev(x) if len(x) > 1 else 0.0
    k = tolerance_factor(len(x)) if len(x) > 2 else None
    off = off_u = None
    if nominal:
        own = median([abs(u) for _, _, u in values if u is not None] or [0.0])
        off, off_u = mean / nominal - 1, math.hypot(s / math.sqrt(len(x)), own) / abs(nominal)
    outside = () if limits is None else tuple(n for n, v, _ in values if not limits[0] <= v <= limits[1])
    is_off = off is not None and off_u is not None and len(x) > 2 and abs(off) > max(3 * off_u, 1e-4)
    return Spread(
        name, unit, len(x), mean, s, min(x), max(x), None if k is None else (mean - k * s, mean + k * s),
        nominal, limits, outside, off, off_u, is_off, together,
    )  # fmt: skip


def tolerance_factor(n: int, content: float = CONTENT, confidence: float = CONFIDENCE) -> float:
    """k of the two-sided tolerance interval mean ± k·s of a normal population from a sample of n > 1.

    Howe's approximation, k² = ν·(1 + 1/n)·z² / χ² with ν = n − 1 (W. G. Howe, J. Amer. Statist. Assoc. 64
    (1969) 610; NIST/SEMATECH e-Handbook of Statistical Methods, 7.2.6.3).
    """
    from scipy.special import chdtri

    z = NormalDist().inv_cdf(0.5 * (1 + content))
    return math.sqrt((n - 1) * (1 + 1 / n) / float(chdtri(n - 1, confidence))) * z


def _causes(units: Sequence[Unit]) -> tuple[tuple[str, int], ...]:
    """How many units have which cause, the commonest first; those that are not settled count as such."""
    count: Counter[str] = Counter()
    for u in units:
        if u.causes is None:
            continue
        count["not settled" if not u.settled else " and ".join(u.causes) or "nothing off"] += 1
    return tuple(count.most_common())


def _selections(units: Sequence[Unit]) -> tuple[tuple[Exchange, tuple[str, ...]], ...]:
    """Which value to fit in which units, the commonest first."""
    found: dict[tuple[str, float], list[Unit]] = {}
    for u in units:
        if u.exchange is not None:
            found.setdefault((u.exchange.part, u.exchange.after), []).append(u)
    ordered = sorted(
        found.values(), key=lambda group: (-len(group), group[0].exchange.after if group[0].exchange else 0.0)
    )
    return tuple((group[0].exchange, tuple(u.name for u in group)) for group in ordered if group[0].exchange)


def _one_for_all(
    units: Sequence[Unit], selections: Sequence[tuple[Exchange, tuple[str, ...]]]
) -> tuple[Exchange, int] | None:
    """The value that suits most units, where that is more than half of them: move the nominal to it."""
    if not selections or 2 * len(selections[0][1]) <= len(units) or len(units) < 3:
        return None
    return selections[0][0], len(selections[0][1])


def lot_record(lot: Lot) -> dict[str, Any]:
    """The lot as plain types in base SI units, for JSON: what is not known is None."""
    from benchfit.show.record import SCHEMA

    return {
        "schema": SCHEMA,
        "lot": {
            "title": lot.title,
            "circuit": lot.circuit,
            "units": len(lot.units),
            "failed": len(lot.failures),
        },
        "verdicts": dict(lot.verdicts or {}),
        "spreads": {s.name: _spread_record(s) for s in lot.spreads},
        "causes": [{"cause": cause, "units": n} for cause, n in lot.causes],
        "select": [
            {"part": e.part, "to": e.after, "unit": e.unit, "units": list(names)}
            for e, names in lot.selections
        ],
        "move_nominal": None
        if lot.suits is None
        else {"part": lot.suits[0].part, "to": lot.suits[0].after, "suits": lot.suits[1]},
        "errors": [{"path": u.name, "says": u.error} for u in lot.failures],
    }


def _spread_record(s: Spread) -> dict[str, Any]:
    return {
        "unit": s.unit, "count": s.count, "mean": s.mean, "deviation": s.deviation, "lowest": s.lowest,
        "highest": s.highest, "tolerance_interval": list(s.interval) if s.interval else None,
        "nominal": s.nominal, "limits": list(s.limits) if s.limits else None, "outside": list(s.outside),
        "off": s.off, "off_u": s.off_u, "is_off": s.is_off, "together_with": list(s.together),
    }  # fmt: skip
