"""The families of layouts: each says whether a file is its own, and why; a new family is one new entry.

A family's ``judge`` sees the evidence of a file's first lines and returns a Claim or None. The strongest claim
wins; entries that refuse (``refusals``) stand in the same list.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from benchfit.capture import header as headers
from benchfit.capture import settings
from benchfit.capture.cells import number
from benchfit.capture.header import Header, Title
from benchfit.capture.page import Page, is_comment
from benchfit.capture.settings import Settings


@dataclass(frozen=True)
class Evidence:
    """What the families judge by: the page, its header, the settings above and beside the table."""

    page: Page
    header: Header
    above: Settings
    beside: Settings


@dataclass(frozen=True)
class Layout:
    """How a table is to be understood.

    ``titles`` by column; ``interval`` and ``start`` (s) where the file states them outside the rows, with
    ``stated`` saying where; ``horizontal`` is the unit of the time column that a setting gives.
    """

    titles: tuple[Title, ...]
    settings: Settings
    interval: float | None = None
    start: float | None = None
    stated: str = ""
    time_is_first: bool = False
    horizontal: str = ""


@dataclass(frozen=True)
class Claim:
    """A family's claim on a file: how sure (0 to 1), why, and the layout or the sentence that refuses it."""

    strength: float
    reasons: tuple[str, ...]
    layout: Layout | None = None
    refusal: str = ""


@dataclass(frozen=True)
class Family:
    """One entry of the registry."""

    name: str
    judge: Callable[[Evidence], Claim | None]


def evidence(page: Page) -> Evidence:
    """Evidence from the first lines of a file."""
    found = headers.find(page)
    rows = [k for k in range(page.first) if k not in found.rows]
    above = settings.from_lines([page.lines[k] for k in rows], [_row(page, k) for k in rows])
    outside = tuple(k for k in range(max(page.width, page.first and 0)) if k not in page.numeric)
    beside = (
        settings.from_cells(page.rows[page.first : page.first + 60], outside, page.decimal)
        if outside
        else settings.NOTHING
    )
    return Evidence(page, found, above, beside)


def _row(page: Page, line: int) -> tuple[str, ...]:
    return page.rows[line] if line < len(page.rows) else ()


# -- families that are captures ------------------------------------------------------------------------------


def _beside(found: Evidence) -> Claim | None:
    """Settings in columns of their own on the first rows of the table."""
    known = [key for key, _ in found.beside.pairs]
    if len(known) < 3 or found.header.rows:
        return None
    settled = found.beside
    layout = _stated(found, settled)
    return Claim(
        0.95,
        (f"{len(known)} settings stand beside the first rows ({', '.join(known[:3])}, …)",),
        replace(layout, titles=_from_settings(found, settled), time_is_first=len(found.page.numeric) > 1),
    )


def _start_and_increment(found: Evidence) -> Claim | None:
    """The header carries the first stamp and the interval; the rows hold values only."""
    words = {"start": None, "increment": None}
    for column, column_title in enumerate(found.header.titles):
        name = column_title.name.casefold()
        if name in words and column not in found.page.numeric:
            words[name] = column
    start, step = words["start"], words["increment"]
    if step is None:
        return None
    rows = [cells for cells in found.header.plain[-1:]] + [
        row for row in found.page.rows[found.page.first :][:1]
    ]
    for cells in rows:
        increment = number(cells[step], found.page.decimal) if step < len(cells) else float("nan")
        first = number(cells[start], found.page.decimal) if start is not None and start < len(cells) else 0.0
        if increment > 0:
            layout = Layout(found.header.titles, found.above, increment, first, 'the cell under "Increment"')
            return Claim(0.97, ("start and increment stand in the header",), layout)
    return None


def _units_row(found: Evidence) -> Claim | None:
    """A row of names (or none) above a row of units."""
    if not found.header.has_units_row or found.header.in_comment:
        return None
    names = "a row of names and " if found.header.has_names else ""
    return Claim(0.9, (f"{names}a row of units above the table",), _stated(found, found.above))


def _units_inside(found: Evidence) -> Claim | None:
    """One header row with the units inside its cells."""
    if not found.header.has_units_inside or found.header.in_comment or found.header.has_units_row:
        return None
    return Claim(0.85, ("one header row with the units in its cells",), _stated(found, found.above))


def _comments(found: Evidence) -> Claim | None:
    """Comment lines above; the last of them may be the header."""
    marked = [line for line in found.page.above if is_comment(line)]
    if not marked:
        return None
    reason = (
        "the last comment is the header"
        if found.header.in_comment
        else f"{len(marked)} comment lines above the table"
    )
    return Claim(0.8, (reason,), _stated(found, found.above))


def _keys_above(found: Evidence) -> Claim | None:
    """Lines of keys and values above the table, with or without a header row."""
    if len(found.above.pairs) < 2:
        return None
    layout = _stated(found, found.above)
    reasons = [f"{len(found.above.pairs)} lines of settings above the table"]
    if not found.header.rows:
        layout = replace(
            layout, titles=_from_settings(found, found.above), time_is_first=bool(layout.horizontal)
        )
        reasons.append("no header row")
    return Claim(0.75, tuple(reasons), layout)


def _names_only(found: Evidence) -> Claim | None:
    """One header row of names without units."""
    if not found.header.rows:
        return None
    return Claim(0.6, ("one header row of names without units",), _stated(found, found.above))


def _bare(found: Evidence) -> Claim | None:
    """Numbers from the first line on."""
    if not found.page.numeric or found.header.rows:
        return None
    return Claim(0.3, ("no header row",), _stated(found, found.above))


def _stated(found: Evidence, settled: Settings) -> Layout:
    stated = f'the setting "{settled.interval_key}"' if settled.interval else ""
    horizontal = settled.first(*_HORIZONTAL)
    titles = list(found.header.titles)
    vertical = settled.cells(*_VERTICAL)
    for column in found.page.numeric:
        # A setting with several cells is aligned with the columns, its key over the time column.
        cell = vertical[column - 1] if 0 < column <= len(vertical) and sum(map(bool, vertical)) > 1 else ""
        if cell and column < len(titles) and titles[column].unit is None and not titles[column].is_time:
            titles[column] = replace(titles[column], unit=headers.title(cell).unit)
    return Layout(tuple(titles), settled, settled.interval, settled.start, stated, horizontal=horizontal)


_HORIZONTAL = ("horizontal units", "horizontal unit", "x units", "x unit", "xunit", "xunits", "hunit")
_VERTICAL = ("vertical units", "vertical unit", "y units", "y unit", "yunit", "yunits", "vunit")


def _from_settings(found: Evidence, settled: Settings) -> tuple[Title, ...]:
    """Titles of a table without header from the settings "Source" and "Vertical Units"."""
    names = [
        cell for cell in settled.cells("source", "channel", "trace", "trace name", "channel name") if cell
    ]
    units = [cell for cell in settled.cells(*_VERTICAL) if cell]
    titles = list(found.header.titles)
    columns = found.page.numeric[1:] if len(found.page.numeric) > 1 else found.page.numeric
    for k, column in enumerate(columns):
        name = names[k] if k < len(names) else ""
        measure = headers.title(units[min(k, len(units) - 1)]).unit if units else None
        while len(titles) <= column:
            titles.append(Title())
        titles[column] = Title(name, measure, name)
    return tuple(titles)


FAMILIES: list[Family] = [
    Family("settings beside the data", _beside),
    Family("start and increment in the header", _start_and_increment),
    Family("names and units in rows of their own", _units_row),
    Family("units inside the names", _units_inside),
    Family("comments above", _comments),
    Family("settings above", _keys_above),
    Family("names without units", _names_only),
    Family("numbers only", _bare),
]


def tell(page: Page) -> tuple[Family, Claim, Evidence]:
    """The family with the strongest claim on a file. Every file is somebody's: the last entry refuses the rest."""
    from benchfit.capture.refusals import REFUSALS

    found = evidence(page)
    best: tuple[Family, Claim] | None = None
    for family in (*REFUSALS, *FAMILIES):
        claim = family.judge(found)
        if claim is not None and (best is None or claim.strength > best[1].strength):
            best = (family, claim)
    assert best is not None
    return (*best, found)
