"""Names and units from the rows above a table."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

from benchfit.capture.cells import is_number
from benchfit.capture.dialect import Dialect
from benchfit.capture.page import Page, is_comment, uncommented
from benchfit.capture.units import Unit, unit

_TIME = re.compile(
    r"(rel(ative)?[ ._-]*|elapsed[ ._-]*|abs(olute)?[ ._-]*)?"
    r"(time|t|times|timestamps?|time[ ._-]?stamps?|elapsed|"
    r"zeit|zeitstempel|temps|tempo|tiempo|tijd|tid|aika|czas|"
    r"čas|cas|idő|ido|zaman|vrijeme|timp|время|час|时间|時間|x[ ._-]?axis|x)"
    r"([ ._-]*(axis|base|stamp|values?|data|ch\w*))?",
    re.IGNORECASE,
)
_INDEX = re.compile(
    r"samples?|sample[ ._-]?(no|nr|num|number|index|id|#)?\.?|index|idx|no\.?|nr\.?|n|#|points?|sequence|seq|"
    r"row|rows|num|number|i|counter|count|record|id",
    re.IGNORECASE,
)
_FREQUENCY = re.compile(
    r"(frequency|frequenz|fréquence|frequence|frecuencia|frequenza|freq|частота)\b.*|f", re.IGNORECASE
)
_INCREMENT = re.compile(
    r"[dδ∆][ _.-]?t|delta[ _.-]?(t|time|us|ms)?|increments?|interval|time[ _.-]?(delta|diff\w*|step)|diff",
    re.IGNORECASE,
)
_WITH_BRACKETS = re.compile(r"(?P<name>[^\[(]*)[\[(](?P<unit>.*)[\])]?\s*")
_WITH_IN = re.compile(r"(?:(?P<name>.*?)\s+)?in\s+(?P<unit>\S+)", re.IGNORECASE)
_WITH_SLASH = re.compile(r"(?P<name>[^/]*\S)\s*[/,]\s*(?P<unit>\S+)")
_WITH_UNDERSCORE = re.compile(r"(?P<name>.*\S)[_ ](?P<unit>\S+)")
# A simulator's node and branch: V(out), I(R1).
_NODE = re.compile(r"(?P<base>[VvIi])\((?P<node>[^()]+)\)")
_CHANNEL_AND_UNIT = re.compile(r"(?P<name>CH\d+)(?P<unit>[mu]?[VA])")


@dataclass(frozen=True)
class Title:
    """What a header says of one column: ``name`` ("" for none), ``unit`` (None for none), ``text``."""

    name: str = ""
    unit: Unit | None = None
    text: str = ""

    @property
    def is_time(self) -> bool:
        """Whether it names a time axis, by its unit or by its name."""
        return (self.unit is not None and self.unit.is_time) or _TIME.fullmatch(self.name) is not None

    @property
    def is_axis_letter(self) -> bool:
        """Whether it is a bare "X", which names the time in some exports, the number of the row in others."""
        return self.unit is None and self.name.casefold() == "x"

    @property
    def is_index(self) -> bool:
        """Whether it names a number of the row."""
        return self.unit is None and _INDEX.fullmatch(self.name) is not None

    @property
    def is_increment(self) -> bool:
        """Whether it names the time since the row before."""
        return _INCREMENT.fullmatch(self.name) is not None and (self.unit is None or self.unit.is_time)

    @property
    def is_frequency(self) -> bool:
        """Whether it names a frequency axis."""
        by_unit = self.unit is not None and self.unit.base == "Hz"
        return by_unit or (
            self.unit is None and _FREQUENCY.fullmatch(self.name) is not None and len(self.name) > 1
        )


def title(text: str) -> Title:
    """Name and unit from a header cell: "CH1 in V", "Time (ms)", "[s]", "U/V", "Volt"."""
    text = "".join(c for c in text if c.isprintable() and c != "\ufeff").strip().strip('"').strip()
    if alone := unit(text):
        return Title("" if alone.base else text, alone, text)
    if found := _NODE.fullmatch(text):
        base, within = ("V" if found["base"] in "vV" else "A"), unit(f"({found['node']})")
        if within is None or within.base != base:
            return Title(text, unit(base), text)
    if found := _CHANNEL_AND_UNIT.fullmatch(text):
        return Title(found["name"], unit(found["unit"]), text)
    if found := _WITH_BRACKETS.fullmatch(text):
        inside = re.split(r"[\])]", found["unit"])[0].strip()
        name = found["name"].strip(" _:-")
        return Title(name, unit(f"({inside})") or _odd(inside), text)
    if (found := _WITH_IN.fullmatch(text)) and (measure := unit(f"({found['unit'].strip('[]()')})")):
        return Title((found["name"] or "").strip(), measure, text)
    if (found := _WITH_SLASH.fullmatch(text)) and (measure := unit(f"({found['unit'].strip('[]()')})")):
        return Title(found["name"].strip(), measure, text)
    if (found := _WITH_UNDERSCORE.fullmatch(text)) and _TIME.fullmatch(found["name"]):
        measure = unit(found["unit"])
        if measure is not None and measure.is_time:
            return Title(found["name"].strip(), measure, text)
    return Title(text, None, text)


def _named(cell: str) -> Title:
    """Title of a cell in a row of names; a lone letter is a name there: column A, not ampere."""
    return Title(cell, None, cell) if cell in ("A", "C", "F", "W") else title(cell)


def _odd(text: str) -> Unit | None:
    """A unit that is not known but stands in brackets as a unit does; longer texts there are remarks."""
    if not text or len(text) > 8 or " " in text or is_number(text, "."):
        return None
    return Unit(text, 1.0, text)


@dataclass(frozen=True)
class Header:
    """Titles of the columns of a table and the lines they came from.

    ``rows`` are line numbers (from 0) of the header; ``names_row``, ``units_row`` and ``in_comment`` say of
    what kind; ``plain`` are the header's cells as they stood, names row first.
    """

    titles: tuple[Title, ...]
    rows: tuple[int, ...] = ()
    has_names: bool = False
    has_units_row: bool = False
    has_units_inside: bool = False
    in_comment: bool = False
    plain: tuple[tuple[str, ...], ...] = ()


def find(page: Page) -> Header:
    """The header above the table of ``page``; a Header without rows where there is none."""
    count = max((*page.numeric, *page.textual, -1)) + 1
    above = [k for k in range(page.first) if page.lines[k].strip(" \t,;")]
    if not above or page.dialect is None:
        return Header((Title(),) * count)
    last = above[-1]
    lowest = _cells(page.lines[last], page.dialect, len(page.numeric))
    if _is_units_row(lowest, page.decimal):
        return _with_units_row(page, above, lowest, count)
    if not _is_names_row(page, above, lowest):
        return Header((Title(),) * count)
    titles = _aligned([_named(cell) for cell in lowest], page, count)
    return Header(
        titles, (last,), has_names=any(t.name for t in titles), has_units_inside=any(t.unit for t in titles),
        in_comment=is_comment(page.lines[last]), plain=(lowest,),
    )  # fmt: skip


def _with_units_row(page: Page, above: Sequence[int], units: Sequence[str], count: int) -> Header:
    assert page.dialect is not None
    measures = [unit(cell) if not is_number(cell, page.decimal) else None for cell in units]
    names: tuple[str, ...] = ()
    if len(above) > 1:
        names = _cells(page.lines[above[-2]], page.dialect, len(page.numeric))
        if not _could_name(names, above, units, page):
            names = ()
    width = max(len(names), len(measures))
    titles = []
    for k in range(width):
        name = names[k] if k < len(names) else ""
        measure = measures[k] if k < len(measures) else None
        if measure is None and name:
            titles.append(title(name))
        else:
            titles.append(Title(title(name).name or name, measure, name))
    rows = tuple(above[-2:]) if names else (above[-1],)
    return Header(
        _aligned(titles, page, count), rows, has_names=any(t.name for t in titles), has_units_row=True,
        in_comment=is_comment(page.lines[above[-1]]),
        plain=(names, tuple(units)) if names else (tuple(units),),
    )  # fmt: skip


def _cells(line: str, dialect: Dialect, wanted: int) -> tuple[str, ...]:
    """Cells of a header line, which need not use the table's own delimiter."""
    comment = is_comment(line)
    text = uncommented(line) if comment else line
    cells = dialect.cells(text)
    if len([cell for cell in cells if cell]) >= wanted or (not comment and len(cells) > 1):
        return cells
    for delimiter in ("\t", ";", ",", " "):
        others = Dialect(delimiter, dialect.decimal).cells(text)
        if len([cell for cell in others if cell]) == wanted and wanted > 1:
            return others
    return cells


def _is_units_row(cells: Sequence[str], decimal: str) -> bool:
    filled = [cell for cell in cells if cell and not is_number(cell, decimal)]
    units = [cell for cell in filled if (found := unit(cell)) is not None and found.base]
    # The cell over a sequence number names it, in place of a unit.
    others = [
        cell
        for cell in filled
        if unit(cell) is None and not Title(cell).is_index and not cell.startswith("(")
    ]
    return bool(units) and not others


def _could_name(names: Sequence[str], above: Sequence[int], units: Sequence[str], page: Page) -> bool:
    """Whether the row above a row of units names columns rather than being a last setting."""
    filled = [name for name in names if name]
    if not filled or any(re.search(r"\d[:\-/]\d\d", name) for name in filled):
        return False
    if len(names) <= 2 < len(page.numeric):
        return False
    first = title(names[0])
    if not (
        first.is_time
        or first.is_index
        or not names[0]
        or first.name.casefold() in ("source", "name", "channel")
    ):
        settings = sum(_is_setting(page.rows[k], page.decimal) for k in above[:-2] if page.rows[k])
        if _is_setting(names, page.decimal) or settings:
            return False
    return len(filled) >= min(len([u for u in units if u]) - 1, len(page.numeric) - 1)


def _is_names_row(page: Page, above: Sequence[int], cells: Sequence[str]) -> bool:
    """Whether the line above the table names its columns rather than being a last setting.

    Under a preamble of keys and values a line is a header only where its first cell names a time axis,
    where units stand in its cells, or where it has the table's width and the lines above have not.
    """
    line = page.lines[above[-1]]
    filled = [cell for cell in cells if cell]
    if not filled or all(is_number(cell, page.decimal) for cell in filled):
        return False
    if any(re.search(r"\d{1,4}[:/.-]\d{1,2}[:/.-]\d{1,4}", cell) for cell in filled):
        return False
    titles = [title(cell) for cell in cells]
    columns = len(page.numeric)
    marks = sum(t.is_time or t.unit is not None or t.is_increment or t.is_frequency for t in titles)
    if is_comment(line):
        return len(filled) == max(columns, 2) and (marks > 0 or columns > 1) and ":" not in line
    if len(filled) < columns - 1 or len(cells) > 4 * max(page.width, 1) + 4:
        return False
    if len(above) == 1:
        return True
    if marks and (titles[0].is_time or titles[0].is_index or not cells[0] or marks >= columns):
        return not _is_setting(cells, page.decimal) or titles[0].is_time
    if len(filled) < columns or (columns == 1 and not marks):
        return False
    before = _cells(page.lines[above[-2]], page.dialect, columns) if page.dialect else ()
    return not _is_setting(cells, page.decimal) and len(before) != len(cells)


def _is_setting(cells: Sequence[str], decimal: str) -> bool:
    """Whether a row is a key and its values: a word, then numbers, or a channel's name behind "Source"."""
    rest = [cell for cell in cells[1:] if cell]
    word = cells[0].strip().casefold()
    return word in ("source", "label", "channel", "title", "trace") or (
        bool(rest) and all(is_number(c, decimal) for c in rest)
    )


def _aligned(titles: Sequence[Title], page: Page, count: int) -> tuple[Title, ...]:
    """Titles by column; a header that names one cell less than the table has is that of the values."""
    titles = list(titles)
    short = len(titles) == len(page.numeric) - 1
    while titles and not titles[-1].text and titles[-1].unit is None:
        titles.pop()
    named = [t for t in titles if t.text or t.unit is not None]
    if (
        short
        and len(named) == len(titles)
        and not any(t.is_time or t.is_index for t in titles)
        and page.numeric == tuple(range(len(page.numeric)))
    ):
        titles.insert(0, Title())
    return tuple((titles + [Title()] * count)[: max(count, len(titles))])
