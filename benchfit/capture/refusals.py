"""Files that look like captures and are none: spectra, responses, settings pages, hand-made tables, logs of text."""

from __future__ import annotations

import re

import numpy as np

from benchfit.capture.cells import TEXT, kind, number
from benchfit.capture.evidence import Claim, Evidence, Family
from benchfit.capture.page import is_comment

_SPECTRUM_WORDS = re.compile(
    r"\b(spectrum|spectra|spektrum|bins|fft|bode|frequency response|network analy[sz]er)\b", re.IGNORECASE
)
_LABELLED = re.compile(r"[^\W\d][\w .°%]*\s*[:=]\s*[+-]?[\d.]+\s*[^\W\d]*")
_WITH_UNIT = re.compile(r"[+-]?\d+([.,]\d+)?([eE][+-]?\d+)?\s*[pnuµμmkM]?(s|sec|V|A|Hz)")
_ALL_LINES = "what was wanted is a table with a time and a voltage in every row"


def _no_text(found: Evidence) -> Claim | None:
    """Markup, programs, pictures in words: nothing of it is a table."""
    start = "\n".join(found.page.lines[:5]).lstrip("\ufeff \n\r\t").casefold()
    for mark, what in (("<!doctype html", "a web page"), ("<html", "a web page"), ("<?xml", "an XML file"), ("<svg", "a drawing"),
                       ("{", "a JSON file"), ("[{", "a JSON file"), ("%!ps", "a PostScript file")):  # fmt: skip
        if start.startswith(mark):
            return Claim(1.0, (), refusal=f"is {what}, not a table of samples; export the capture as CSV")
    return None


def _no_table(found: Evidence) -> Claim | None:
    """No rows of numbers."""
    page = found.page
    filled = [line for line in page.lines if line.strip()]
    if page.numeric and page.first < len(page.lines):
        return None
    if not filled:
        return Claim(1.0, (), refusal="holds nothing but blank lines; save the capture again")
    labelled = sum(_LABELLED.search(line) is not None and not _is_setting(line) for line in filled)
    if labelled > len(filled) // 2 and _repeats(filled):
        return Claim(1.0, (), refusal="has a label in every cell, as a log of text from a serial port has; write bare numbers, one "
                     "row a sample")  # fmt: skip
    if sum(_is_setting(line) for line in filled) > len(filled) // 2:
        return Claim(1.0, (), refusal="holds settings (names and values) but no samples; the samples are in another file of the "
                     "same export")  # fmt: skip
    if sum(_WITH_UNIT.search(line) is not None for line in filled) > len(filled) // 2:
        return Claim(1.0, (), refusal="has units in every cell instead of in a header; write bare numbers")
    return Claim(
        1.0, (), refusal=f"has no table of numbers in its first {len(page.lines)} lines; {_ALL_LINES}"
    )


def _settings_page(found: Evidence) -> Claim | None:
    """A word in front of every number, another one in every row."""
    page = found.page
    if 0 not in page.textual or page.dialect is None:
        return None
    words = [
        row[0] for row in page.rows[page.first :] if row and row[0] and kind(row[0], page.decimal) == TEXT
    ]
    rows = sum(bool(row) and any(row) for row in page.rows[page.first :])
    named = [word for word in words if re.search(r"[^\W\d_]{2}", word) and not re.search(r"\d[:.]\d\d", word)]
    if len(named) > 0.6 * max(rows, 1) and len(set(named)) > 0.6 * len(named):
        return Claim(1.0, (), refusal="holds settings (names and values) but no samples; the samples are in another file of the "
                     "same export")  # fmt: skip
    if len(named) > 0.6 * max(rows, 1) and any(_LABELLED.search(word) for word in named):
        return Claim(1.0, (), refusal="has a label in every cell, as a log of text from a serial port has; write bare numbers, one "
                     "row a sample")  # fmt: skip
    return None


def _spectrum(found: Evidence) -> Claim | None:
    """The first column is a frequency."""
    titles = [found.header.titles[k] for k in found.page.numeric if k < len(found.header.titles)]
    if any(t.is_time for t in titles[:2]):
        return None
    horizontal = found.above.first("horizontal units", "x units") or found.beside.first(
        "horizontal units", "x units"
    )
    if any(t.is_frequency for t in titles[:2]) or horizontal.casefold() in ("hz", "hertz"):
        return Claim(1.0, (), refusal=f"is {_kind_of_spectrum(found)}: its first column is a frequency, not a time; export the "
                     "waveform itself")  # fmt: skip
    if any(t.unit is not None and t.unit.base.startswith("dB") for t in titles):
        return Claim(
            1.0,
            (),
            refusal="holds levels in dB, so it is a spectrum or a frequency response, not a waveform over time",
        )
    said = [line for line in found.page.above if is_comment(line) and _SPECTRUM_WORDS.search(line)]
    if said and not any(t.is_time for t in titles):
        return Claim(
            1.0,
            (),
            refusal=f'is a spectrum by its own preamble ("{said[0].strip()[:60]}"); export the waveform over time',
        )
    return None


def _kind_of_spectrum(found: Evidence) -> str:
    column = _numbers(found, found.page.numeric[0])
    if _is_logarithmic(column):
        return "a frequency response"
    return (
        "a hand-made table"
        if found.page.whole and column.size < 40 and not _is_even(column)
        else "a spectrum"
    )


def _log_grid(found: Evidence) -> Claim | None:
    """The first column grows by a constant ratio."""
    if len(found.page.numeric) < 2:
        return None
    if _is_logarithmic(_numbers(found, found.page.numeric[0])):
        return Claim(0.99, (), refusal="has a first column that grows by a constant ratio, so it is a frequency response, not a "
                     "waveform over time")  # fmt: skip
    return None


def _hand_made(found: Evidence) -> Claim | None:
    """Few rows, no time axis."""
    page = found.page
    if not page.whole or len(page.numeric) < 2 or len(page.body) > 60:
        return None
    titles = [found.header.titles[k] for k in page.numeric if k < len(found.header.titles)]
    timed = any(t.is_time or t.is_increment for t in titles) or found.above.interval or found.beside.interval
    steps = np.diff(_numbers(found, page.numeric[0]))
    if (
        timed
        or found.header.has_units_row
        or (steps.size and np.all(steps >= 0) and np.any(steps > 0) and not _looks_chosen(steps))
    ):
        return None
    if any(t.name.casefold() == "increment" for t in found.header.titles):
        return None
    if found.header.rows and steps.size and _looks_chosen(steps) and len(page.body) < 40:
        return Claim(
            0.98,
            (),
            refusal=f"looks like a table made by hand ({len(page.body)} rows, no time axis), not like a capture",
        )
    return None


def _looks_chosen(steps: np.ndarray) -> bool:
    """Whether someone chose the values of a column: they grow or fall, but by steps of their own."""
    moving = steps[steps != 0]
    one_way = bool(moving.size) and (bool(np.all(moving > 0)) or bool(np.all(moving < 0)))
    return (
        one_way and moving.size == steps.size and float(np.ptp(moving)) > 0.2 * float(np.max(np.abs(moving)))
    )


def _numbers(found: Evidence, column: int) -> np.ndarray:
    values = np.array([number(cell, found.page.decimal) for cell in found.page.column(column)])
    return values[np.isfinite(values)]


def _is_logarithmic(column: np.ndarray) -> bool:
    if column.size < 6 or not np.all(column > 0):
        return False
    ratios = np.diff(np.log(column))
    return bool(
        np.mean(ratios) > 0.01 and np.ptp(ratios) < 0.2 * np.mean(ratios) and column[-1] > 5 * column[0]
    )


def _is_even(column: np.ndarray) -> bool:
    steps = np.diff(column)
    return bool(steps.size and np.ptp(steps) <= 0.05 * np.max(np.abs(steps)))


def _is_setting(line: str) -> bool:
    return re.match(r"\s*[#%]?\s*[^\W\d][\w .()/%°-]*\s*[:=,;\t]", line) is not None


def _repeats(lines: list[str]) -> bool:
    """Whether the words of the lines are the same ones again and again."""
    shapes = [re.sub(r"[+-]?\d[\d.,eE+-]*", "0", line).strip() for line in lines]
    return len(lines) > 3 and max(shapes.count(shape) for shape in set(shapes)) > len(lines) // 3


REFUSALS: list[Family] = [
    Family("no text", _no_text),
    Family("no table", _no_table),
    Family("settings page", _settings_page),
    Family("spectrum", _spectrum),
    Family("frequency response", _log_grid),
    Family("hand-made table", _hand_made),
]
