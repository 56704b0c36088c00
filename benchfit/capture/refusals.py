"""Files that look like captures and are none: spectra, responses, settings pages, hand-made tables, logs."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.cells import TEXT, kind, number
from benchfit.capture.evidence import Claim, Evidence, Family
from benchfit.capture.header import Title
from benchfit.capture.page import is_comment
from benchfit.capture.units import unit

Floats = NDArray[np.float64]
_MARKUP = (
    ("<!doctype html", "a web page"), ("<html", "a web page"), ("<?xml", "an XML file"),
    ("<svg", "a drawing"), ("{", "a JSON file"), ("[{", "a JSON file"), ("%!ps", "a PostScript file"),
    ("{\\rtf", "a text document"),
)  # fmt: skip
_SPECTRUM = re.compile(
    r"\b(spectrum|spectra|spektrum|bins|fft|bode|frequency response|network analy[sz]er)\b", re.IGNORECASE
)
_LABELLED = re.compile(r"(?<!\w)[^\W\d]\w*(\s?\([^)]*\))?\s*[:=]\s*[+-]?[\d.]")
_SETTING = re.compile(r"\s*[#%]?\s*[^\W\d][\w .()/%°-]*\s*[:=,;\t]")
_WITH_UNIT = re.compile(r"[+-]?\d+([.,]\d+)?([eE][+-]?\d+)?\s*[pnuµμmkM]?(s|sec|V|A|Hz)\b")
# More rows than anyone types in by hand.
_MOST_BY_HAND = 60

_SETTINGS_PAGE = (
    "holds settings (names and values) but no samples; the samples are in another file of the same export"
)
_LABELS = (
    "has a label in every cell, as a text log from a serial port has; write bare numbers, one row a sample"
)


def _no_text(found: Evidence) -> Claim | None:
    """Markup and structured text: nothing of it is a table."""
    start = "\n".join(found.page.lines[:5]).lstrip("\ufeff \n\r\t").casefold()
    for mark, what in _MARKUP:
        if start.startswith(mark):
            return _refused(f"is {what}, not a table of samples; export the capture as CSV")
    return None


def _labels(found: Evidence) -> Claim | None:
    """The same words with numbers behind them in line after line."""
    filled = [line for line in found.page.lines if line.strip()]
    labelled = [line for line in filled if _LABELLED.search(line) and not is_comment(line)]
    if len(labelled) > 0.6 * len(filled) and _repeats(labelled):
        return _refused(_LABELS)
    return None


def _no_table(found: Evidence) -> Claim | None:
    """No rows of numbers."""
    page = found.page
    filled = [line for line in page.lines if line.strip()]
    if not filled:
        return _refused("holds nothing but blank lines; save the capture again")
    if _all_units(filled[-1]):
        return _refused("has a header but no table of numbers below it; save the capture again")
    if page.numeric and page.first < len(page.lines):
        return None
    if sum(_SETTING.match(line) is not None for line in filled) > len(filled) // 2:
        return _refused(_SETTINGS_PAGE)
    if sum(_WITH_UNIT.search(line) is not None for line in filled) > len(filled) // 2:
        return _refused("has units in every cell instead of in a header; write bare numbers")
    return _refused(
        f"has no table of numbers in its first {len(page.lines)} lines; what is wanted is a row of numbers "
        "for each sample"
    )


def _settings_page(found: Evidence) -> Claim | None:
    """A word in front of every number, another one in every row."""
    page = found.page
    if 0 not in page.textual:
        return None
    rows = [row for row in page.rows[page.first :] if any(row)]
    words = [row[0] for row in rows if kind(row[0], page.decimal) == TEXT]
    named = [word for word in words if re.search(r"[^\W\d_]{2}", word) and not re.search(r"\d[:.]\d\d", word)]
    if len(named) > 0.6 * len(rows) and len(set(named)) > 0.6 * len(named):
        return _refused(_SETTINGS_PAGE)
    return None


def _spectrum(found: Evidence) -> Claim | None:
    """The first column is a frequency, or the values are levels."""
    titles = _titles(found)
    if any(named.unit is not None and named.unit.is_time for named in titles):
        return None
    if any(named.unit is not None and named.unit.base.startswith("dB") for named in titles):
        return _refused(
            "holds levels in dB: it is a spectrum or a frequency response, not a waveform over time"
        )
    horizontal = found.above.first("horizontal units", "x units") or found.beside.first(
        "horizontal units", "x units"
    )
    if any(named.is_frequency for named in titles[:2]) or horizontal.casefold() in ("hz", "hertz"):
        what = _kind_of_spectrum(_numbers(found, found.page.numeric[0]), found)
        return _refused(f"is {what}: its first column is a frequency, not a time; export the waveform itself")
    said = [line for line in found.page.above if is_comment(line) and _SPECTRUM.search(line)]
    if said and not _has_time(titles):
        return _refused(
            f'is a spectrum by its own preamble ("{said[0].strip()[:60]}"); export the waveform over time'
        )
    return None


def _kind_of_spectrum(column: Floats, found: Evidence) -> str:
    if (
        found.page.whole
        and column.size < _MOST_BY_HAND
        and _looks_chosen(column)
        and not _is_logarithmic(column)
    ):
        return "a hand-made table"
    return "a frequency response" if _is_logarithmic(column) else "a spectrum"


def _log_grid(found: Evidence) -> Claim | None:
    """The first column grows by a constant ratio."""
    if len(found.page.numeric) < 2 or not _is_logarithmic(_numbers(found, found.page.numeric[0])):
        return None
    return _refused(
        "has a first column that grows by a constant ratio: a frequency response, not a waveform over time"
    )


def _hand_made(found: Evidence) -> Claim | None:
    """Few rows under names of which none is a time, the first column in steps of somebody's choice."""
    page = found.page
    count = len(page.body)
    if not page.whole or len(page.numeric) < 2 or count > _MOST_BY_HAND or not found.header.rows:
        return None
    stated = found.above.interval or found.beside.interval or found.header.has_units_row
    if stated or _has_time(_titles(found)) or not _looks_chosen(_numbers(found, page.numeric[0])):
        return None
    return _refused(f"looks like a table made by hand ({count} rows, no time axis), not like a capture")


# ------------------------------------------------------------------------------------------------------------


def _refused(says: str) -> Claim:
    return Claim(1.0, refusal=says)


def _titles(found: Evidence) -> list[Title]:
    titles = found.header.titles
    return [titles[k] for k in found.page.numeric if k < len(titles)]


def _has_time(titles: Sequence[Title]) -> bool:
    """Whether a column is named as time; a lone letter is only in the first place."""
    return any(
        (named.is_time or named.is_increment) and (k == 0 or len(named.name) != 1)
        for k, named in enumerate(titles)
    )


def _looks_chosen(column: Floats) -> bool:
    """Whether someone chose the values of a column: they only grow or only fall, by steps of their own."""
    steps = np.diff(column)
    one_way = steps.size > 0 and (bool(np.all(steps > 0)) or bool(np.all(steps < 0)))
    return one_way and float(np.ptp(steps)) > 0.2 * float(np.max(np.abs(steps)))


def _numbers(found: Evidence, column: int) -> Floats:
    values = np.array(
        [number(cell, found.page.decimal) for cell in found.page.column(column)], dtype=np.float64
    )
    return np.asarray(values[np.isfinite(values)])


def _is_logarithmic(column: Floats) -> bool:
    if column.size < 6 or not np.all(column > 0):
        return False
    ratios = np.diff(np.log(column))
    return bool(
        np.mean(ratios) > 0.01 and np.ptp(ratios) < 0.2 * np.mean(ratios) and column[-1] > 5 * column[0]
    )


def _all_units(line: str) -> bool:
    cells = [cell for cell in re.split(r"[,;\t]", line.strip()) if cell.strip()]
    return bool(cells) and all(unit(cell) is not None for cell in cells)


def _repeats(lines: Sequence[str]) -> bool:
    """Whether the words of the lines are the same ones again and again."""
    shapes = [re.sub(r"[+-]?\d[\d.,eE+-]*", "0", line).strip() for line in lines]
    return len(lines) > 3 and max(shapes.count(shape) for shape in set(shapes)) > len(lines) // 3


REFUSALS = [
    Family("no text", _no_text),
    Family("labels in every cell", _labels),
    Family("no table", _no_table),
    Family("settings page", _settings_page),
    Family("spectrum", _spectrum),
    Family("frequency response", _log_grid),
    Family("hand-made table", _hand_made),
]
