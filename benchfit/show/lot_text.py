"""A lot as text: one line for each unit, then what the units have in common."""

from __future__ import annotations

from collections.abc import Sequence

from benchfit.quantity import percent, si
from benchfit.show import words
from benchfit.show.layout import Column, Page, Style
from benchfit.show.lot import Exchange, Lot, Spread, Unit


def render_lot(lot: Lot, *, width: int = 80, colour: bool = False) -> str:
    """The printed report of a lot, no line wider than ``width`` (60 at least); no newline at the end."""
    page = Page(max(width, 60), colour)
    page.prose(heading(lot), style="bold")
    if said := sentences(lot):
        page.lines.append("")
    for sentence in said:
        page.prose(sentence, style="bold")
    _units(page, lot)
    _spreads(page, lot)
    _counts(page, lot)
    _selections(page, lot)
    return "\n".join(page.lines)


def unit_line(unit: Unit) -> list[str]:
    """(unit, frequency, miss, verdict, cause, change) of one unit, or its error in the second cell."""
    if unit.error:
        return [unit.name, f"not explained: {unit.error}", "", "", "", ""]
    runs = "" if unit.frequency is None else si(unit.frequency, "Hz", unit.frequency_u)
    verdict = words.VERDICTS.get(unit.verdict or "", "")
    change = (
        ""
        if unit.exchange is None
        else f"{unit.exchange.part} → {si(unit.exchange.after, unit.exchange.unit)}"
    )
    return [
        unit.name,
        runs if unit.oscillates else "no oscillation",
        words.change(unit.miss),
        verdict,
        cause(unit),
        change,
    ]


def cause(unit: Unit) -> str:
    """What is off in one unit, with its probability where that is not settled."""
    if unit.causes is None:
        return ""
    name = " and ".join(unit.causes) if unit.causes else "nothing"
    return name if unit.settled or unit.probability is None else f"{name}? {words.chance(unit.probability)}"


def heading(lot: Lot) -> str:
    """Title, circuit and size of the lot."""
    size = f"lot of {len(lot.units)} unit{'' if len(lot.units) == 1 else 's'}"
    return ", ".join(x for x in (lot.title, lot.circuit or "", size) if x)


def sentences(lot: Lot) -> list[str]:
    """The verdicts counted, and whether the lot as a whole is off."""
    counted = [
        f"{n} {word}" for word in ("pass", "conditional", "fail") if (n := (lot.verdicts or {}).get(word, 0))
    ]
    if lot.failures:
        counted.append(f"{len(lot.failures)} not explained")
    found = [f"{words.listed(counted)}."] if counted else []
    f = lot.spread("frequency")
    if f is not None and f.off is not None:
        target = si(f.nominal or 0.0, "Hz")
        mean = f"The mean frequency is {si(f.mean, 'Hz')}, {words.change(abs(f.off)).lstrip('+')}"
        side = "above" if f.off > 0 else "below"
        found.append(
            f"{mean} {side} the target of {target}; the units spread by {percent(f.deviation / f.mean)} (s)."
        )
    if lot.suits is not None:
        exchange, n = lot.suits
        value = si(exchange.after, exchange.unit)
        suits = f"{exchange.part} of {value} suits {n} of {len(lot.units)} units"
        found.append(f"Move the nominal, not every trimmer: {suits}.")
    return found


def _units(page: Page, lot: Lot) -> None:
    page.section("Units")
    good = [u for u in lot.units if not u.error]
    rows = [["", "frequency ± U", "miss", "verdict", "off", "fit instead"], *(unit_line(u) for u in good)]
    look: dict[str | None, Style] = {"fail": "bad", "conditional": "doubt"}
    styles: list[Style] = ["dim", *(look.get(u.verdict, "plain") for u in good)]
    columns = [Column(), Column(True), Column(True), Column(), Column(rank=1), Column(rank=2)]
    if good:
        page.table(rows, columns, styles)
    for unit in lot.failures:
        page.prose(f"{unit.name}: not explained: {unit.error}", "  ", "bad", " " * 4)


def spread_rows(lot: Lot) -> list[list[str]]:
    """(quantity, mean, s, lowest, highest, tolerance interval, mean off by ± U, outside) of each spread."""
    rows = []
    for s in lot.spreads:
        name = words.LABELS.get(s.name, s.name)
        values = [_amount(s, x) for x in (s.mean, s.deviation, s.lowest, s.highest)]
        interval = "" if s.interval is None else f"{_amount(s, s.interval[0])} to {_amount(s, s.interval[1])}"
        off = "" if s.off is None else percent(s.off, s.off_u, signed=True)
        outside = "" if s.limits is None else f"{len(s.outside)} of {s.count}"
        rows.append([name, *values, interval, off, outside])
    return rows


def _amount(s: Spread, x: float) -> str:
    return percent(x) if s.name == "duty" else si(x, s.unit)


def _spreads(page: Page, lot: Lot) -> None:
    rows = spread_rows(lot)
    if not rows:
        return
    page.section("Spread", "95 % of units lie within the interval, with 95 % confidence")
    ranks = (0, 0, 1, 4, 5, 3, 0, 2)
    columns = [Column(i > 0, rank) for i, rank in enumerate(ranks)]
    head = ["", "mean", "s", "lowest", "highest", "interval", "mean off by", "outside"]
    page.table([head, *rows], columns, ["dim"])
    if lot.apart:
        page.prose(
            f"Without {_some(lot.apart)}, which {'has' if len(lot.apart) == 1 else 'have'} a fault.", "  "
        )
    for group in lot.together:
        page.prose(apart_sentence(group), "  ", rest=" " * 4)
    for s in off_parts(lot):
        page.prose(off_sentence(s), "  ", rest=" " * 4)
    for s in lot.spreads:
        if s.outside:
            page.prose(f"{s.name} outside its limits: {_some(s.outside)}.", "  ", rest=" " * 4)


def off_parts(lot: Lot) -> list[Spread]:
    """Parts whose mean is off their nominal, beyond what scatter and instrument excuse."""
    return [s for s in lot.spreads if s.is_off and s.name not in ("frequency", "duty")]


def off_sentence(s: Spread) -> str:
    """What a part's mean is off by, over how many units."""
    mean = percent(s.off or 0.0, s.off_u, signed=True)
    with_ = f" (known only together with {words.listed(s.together)})" if s.together else ""
    return f"{s.name} is off on average{with_}: {mean} of its nominal over {s.count} units."


def apart_sentence(group: Sequence[str]) -> str:
    """That some parts are known only together, and what would tell them apart."""
    return f"Known only together: {words.listed(group)}; meter one of them in a few units."


def _some(names: Sequence[str], most: int = 12) -> str:
    more = f" and {len(names) - most} more" if len(names) > most else ""
    return ", ".join(name.replace(" ", "\N{NO-BREAK SPACE}") for name in names[:most]) + more


def _counts(page: Page, lot: Lot) -> None:
    if lot.causes:
        page.section("Causes")
        rows = [[name, f"{n} unit{'' if n == 1 else 's'}"] for name, n in lot.causes]
        page.table(rows, [Column(), Column(True)], [])


def _selections(page: Page, lot: Lot) -> None:
    if not lot.selections:
        return
    page.section("Select on test")
    for exchange, names in lot.selections:
        page.entry(selection(exchange), _some(names, 40), 16)


def selection(exchange: Exchange) -> str:
    """ "R 8.2 kΩ"."""
    return f"{exchange.part} {si(exchange.after, exchange.unit)}"
