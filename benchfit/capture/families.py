"""The families of layouts that are captures: each judges whether a file is its own, and why."""

from __future__ import annotations

import math
import re
from dataclasses import replace

from benchfit.capture import header
from benchfit.capture.cells import number
from benchfit.capture.evidence import Claim, Evidence, Family, Layout
from benchfit.capture.header import Title
from benchfit.capture.page import is_comment
from benchfit.capture.settings import Settings
from benchfit.capture.units import interval_of, unit

_HORIZONTAL = ("horizontal units", "horizontal unit", "x units", "x unit", "xunit", "xunits", "hunit")
_VERTICAL = ("vertical units", "vertical unit", "y units", "y unit", "yunit", "yunits", "vunit", "vunits")
_SOURCE = ("source", "channel", "trace", "trace name", "tracename", "channel name", "waveform source")
# "t0 = -1.2e-03s" and "tInc = 2e-08" in cells of the header.
_INSIDE = re.compile(
    r"(?:(?P<start>t_?0|t_?start|start)|(?P<step>t_?inc\w*|d_?t|inc\w*))\s*[=:]\s*(?P<value>\S+(?:\s*\S*s)?)",
    re.IGNORECASE,
)


def _beside(found: Evidence) -> Claim | None:
    """Settings in columns of their own on the first rows of the table."""
    keys = [key for key, _ in found.beside.pairs]
    if len(keys) < 3 or found.header.rows:
        return None
    layout = replace(
        _stated(found, found.beside),
        titles=_from_settings(found, found.beside),
        time_is_first=len(found.page.numeric) > 1,
    )
    return Claim(0.95, (f"{len(keys)} settings beside the first rows ({', '.join(keys[:3])}, …)",), layout)


def _start_and_increment(found: Evidence) -> Claim | None:
    """The header carries the first stamp and the interval; the rows hold values only."""
    decimal, titles = found.page.decimal, found.header.titles
    columns = {named.name.casefold(): k for k, named in enumerate(titles) if k not in found.page.numeric}
    step, start = columns.get("increment"), columns.get("start")
    increment, first = math.nan, 0.0
    for cells in (*found.header.plain[-1:], *found.page.rows[found.page.first :][:1]):
        if step is not None and step < len(cells) and not increment > 0:
            increment = number(cells[step], decimal)
            first = number(cells[start], decimal) if start is not None and start < len(cells) else 0.0
    for text in found.header.plain[0] if found.header.plain else ():
        if match := _INSIDE.fullmatch(text):
            value = interval_of(match["value"]) or 0.0
            increment, first = (value, first) if match["step"] else (increment, value)
    if not increment > 0:
        return None
    names = tuple(Title() if _INSIDE.fullmatch(named.text) else named for named in titles)
    stated = 'the "Increment" of the header'
    layout = Layout(names, found.above, increment, first, stated, has_no_stamps=not _has_time(found))
    return Claim(0.97, ("start and increment in the header",), layout)


def _units_row(found: Evidence) -> Claim | None:
    """A row of names (or none) above a row of units."""
    if not found.header.has_units_row or found.header.in_comment:
        return None
    layout = _stated(found, found.above)
    if not found.header.has_names:
        layout = replace(layout, titles=_named_by_settings(layout.titles, found))
    names = "a row of names and " if found.header.has_names else ""
    return Claim(0.9, (f"{names}a row of units above the table",), layout)


def _units_inside(found: Evidence) -> Claim | None:
    """One header row with the units inside its cells."""
    if not found.header.has_units_inside or found.header.in_comment or found.header.has_units_row:
        return None
    return Claim(0.85, ("one header row with units in its cells",), _stated(found, found.above))


def _comments(found: Evidence) -> Claim | None:
    """Comment lines above; the last of them may be the header."""
    count = sum(is_comment(line) for line in found.page.above)
    if not count:
        return None
    reason = "the last comment is the header" if found.header.in_comment else f"{count} comment lines above"
    return Claim(0.8, (reason,), _stated(found, found.above))


def _keys_above(found: Evidence) -> Claim | None:
    """Lines of keys and values above the table, with or without a header row."""
    if len(found.above.pairs) < 2:
        return None
    layout = _stated(found, found.above)
    reasons = [f"{len(found.above.pairs)} lines of settings above"]
    if not found.header.rows:
        titles = _from_settings(found, found.above)
        layout = replace(layout, titles=titles, time_is_first=bool(layout.horizontal))
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


def _has_time(found: Evidence) -> bool:
    titles = found.header.titles
    return any(
        titles[k].is_time and not titles[k].is_axis_letter for k in found.page.numeric if k < len(titles)
    )


def _stated(found: Evidence, settled: Settings) -> Layout:
    """The layout of a table with stamps or not, with what the settings state of it."""
    stated = f'the setting "{settled.interval_key}"' if settled.interval else ""
    # The unit may stand beside the interval: "Sample Interval", 1e-06, "s".
    beside = settled.cells(settled.interval_key.casefold())[1:2] if settled.interval_key else ()
    horizontal = settled.first(*_HORIZONTAL) or next((cell for cell in beside if unit(cell)), "")
    titles = list(found.header.titles)
    vertical = settled.cells(*_VERTICAL)
    for column in found.page.numeric:
        # A setting with several cells is aligned with the columns, its key over the time column.
        cell = vertical[column - 1] if 0 < column <= len(vertical) and sum(map(bool, vertical)) > 1 else ""
        if cell and column < len(titles) and titles[column].unit is None and not titles[column].is_time:
            titles[column] = replace(titles[column], unit=header.title(cell.rpartition(":")[2]).unit)
    return Layout(tuple(titles), settled, settled.interval, settled.start, stated, horizontal)


def _named_by_settings(titles: tuple[Title, ...], found: Evidence) -> tuple[Title, ...]:
    """Titles of which those of the values have the names that the setting "Source" gives, if it gives all."""
    names = [cell for cell in found.above.cells(*_SOURCE) if cell]
    columns = [k for k in found.page.numeric if not titles[k].is_time]
    if len(names) != len(columns):
        return titles
    named = dict(zip(columns, names, strict=True))
    return tuple(replace(title, name=named.get(k, title.name)) for k, title in enumerate(titles))


def _from_settings(found: Evidence, settled: Settings) -> tuple[Title, ...]:
    """Titles of a table without header from the settings "Source" and "Vertical Units"."""
    names = [cell for cell in settled.cells(*_SOURCE) if cell]
    units = [cell.rpartition(":")[2] for cell in settled.cells(*_VERTICAL) if cell]
    titles = list(found.header.titles)
    numeric = found.page.numeric
    # One name less than columns: the first column is the time.
    columns = numeric if len(names) == len(numeric) or len(numeric) == 1 else numeric[1:]
    for k, column in enumerate(columns):
        name = names[k] if k < len(names) else ""
        # Whole numbers are the converter's codes, whatever unit the settings give for what they stand for.
        codes = all(cell.lstrip("+-").isdigit() for cell in found.page.column(column) if cell)
        measure = header.title(units[min(k, len(units) - 1)]).unit if units and not codes else None
        titles += [Title()] * (column + 1 - len(titles))
        titles[column] = Title(name, measure, name)
    return tuple(titles)


FAMILIES = [
    Family("settings beside the data", _beside),
    Family("start and increment in the header", _start_and_increment),
    Family("names and units in rows of their own", _units_row),
    Family("units inside the names", _units_inside),
    Family("comments above", _comments),
    Family("settings above", _keys_above),
    Family("names without units", _names_only),
    Family("numbers only", _bare),
]
