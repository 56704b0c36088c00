"""Makers of capture files in every family of layouts, with the values that a reader must find in them.

The families are those of real exports (metadata beside or above the table, names and units in rows of
their own, start and increment in the header, …); the waveforms, names and settings are invented.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

DELIMITERS = (",", ";", "\t", " ")
DECIMALS = (".", ",")
LINE_ENDS = ("\n", "\r\n", "\r")
ENCODINGS = ("utf-8", "utf-8-sig", "utf-16", "latin-1")
NUMBER_FORMS = ("fixed", "scientific", "plain", "engineering")


@dataclass(frozen=True)
class Style:
    """How cells, numbers, lines and characters are written."""

    delimiter: str = ","
    decimal: str = "."
    line_end: str = "\n"
    encoding: str = "utf-8"
    form: str = "scientific"
    last_line_end: bool = True

    def number(self, value: float, digits: int = 7) -> str:
        """A number as this style prints it."""
        if self.form == "fixed":
            text = f"{value:.{digits + 4}f}"
        elif self.form == "scientific":
            text = f"{value:.{digits}e}"
        elif self.form == "engineering" and value != 0:
            power = 3 * math.floor(math.log10(abs(value)) / 3)
            text = f"{value / 10.0**power:.{digits}f}E{power:+03d}"
        else:
            text = repr(float(value))
        return text.replace(".", self.decimal)


@dataclass(frozen=True)
class Wave:
    """What was measured: start and interval (s), and channels as (name, unit, values)."""

    start: float
    interval: float
    channels: tuple[tuple[str, str, Floats], ...]

    @property
    def samples(self) -> int:
        """Number of samples in each channel."""
        return int(self.channels[0][2].size)

    @property
    def times(self) -> Floats:
        """Time of each sample (s)."""
        return self.start + self.interval * np.arange(self.samples)


@dataclass(frozen=True)
class Made:
    """A file's bytes and what must be read from it; the user must give the interval where ``ask`` is true."""

    data: bytes
    start: float
    interval: float
    names: tuple[str, ...]
    units: tuple[str, ...]
    values: tuple[Floats, ...]
    ask: bool = False


Rows = list[list[str]]
# Rows, what the names and units become, whether the interval must be given, and changes to what is read back.
Sketch = tuple[Rows, tuple[str, ...], tuple[str, ...], bool]
Maker = Callable[[Wave, Style], Sketch]


def relaxation(
    samples: int, channels: int = 2, seed: int = 0, interval: float = 2e-5, start: float = -1e-3
) -> Wave:
    """A capacitor between two thresholds, its output, a stored reference, with a little noise in 8-bit steps."""
    rng = np.random.default_rng(seed)
    v, high = 2.0, True
    capacitor, output = np.empty(samples), np.empty(samples)
    for k in range(samples):
        v += ((9.0 if high else 0.0) - v) * 0.12
        high = (v < 6.0) if high else (v < 3.0)
        capacitor[k], output[k] = v, 8.9 if high else 0.1
    step = 10.0 / 256
    both = [
        np.round((column + 0.02 * rng.standard_normal(samples)) / step) * step
        for column in (capacitor, output)
    ]
    names = (("CH1", "V"), ("CH2", "V"), ("REF3", "V"), ("CH4", "A"))
    columns = [*both, np.full(samples, -5.12), 0.001 * both[1]]
    return Wave(start, interval, tuple((*names[k], columns[k]) for k in range(channels)))


def _names(wave: Wave) -> tuple[str, ...]:
    return tuple(name for name, _, _ in wave.channels)


def _units(wave: Wave) -> tuple[str, ...]:
    return tuple(unit for _, unit, _ in wave.channels)


def _default(wave: Wave) -> tuple[str, ...]:
    return tuple(f"CH{k + 1}" for k in range(len(wave.channels)))


def _table(wave: Wave, style: Style, scale: float = 1.0) -> Rows:
    columns = [wave.times / scale, *(values for _, _, values in wave.channels)]
    return [[style.number(column[k]) for column in columns] for k in range(wave.samples)]


def _values(wave: Wave, style: Style) -> Rows:
    return [[style.number(values[k]) for _, _, values in wave.channels] for k in range(wave.samples)]


_SETTINGS = (
    ("Record Length", "{samples}"), ("Sample Interval", "{interval}"), ("Trigger Point", "5"),
    ("Source", "CH1"), ("Vertical Units", "V"), ("Vertical Scale", "2"), ("Horizontal Units", "s"),
    ("Horizontal Scale", "0.001"), ("Probe Atten", "10"), ("Note", "bench no. 4"),
)  # fmt: skip


def _settings(wave: Wave, style: Style) -> list[tuple[str, str]]:
    facts = {"samples": str(wave.samples), "interval": style.number(wave.interval)}
    return [(key, value.format(**facts).replace(".", style.decimal)) for key, value in _SETTINGS]


def beside(wave: Wave, style: Style) -> Sketch:
    """A: settings in the cells left of the first rows; one channel; a separator at the end of every row."""
    rows = _table(wave, style)
    settings = _settings(wave, style)
    made = []
    for k, row in enumerate(rows):
        key, value = settings[k] if k < len(settings) else ("", "")
        made.append([key, value, "", row[0], row[1], ""])
    return made, ("CH1",), ("V",), False


def beside_mirrored(wave: Wave, style: Style) -> Sketch:
    """A: time and value first, the settings in columns 6 and 7 of the first rows."""
    rows = _table(wave, style)
    settings = _settings(wave, style)
    made = [
        [*row, "", "", "", *settings[k]] if k < len(settings) else [*row, "", "", "", "", ""]
        for k, row in enumerate(rows)
    ]
    return made, ("CH1",), ("V",), False


def above(wave: Wave, style: Style) -> Sketch:
    """B: settings above, a blank line among them, a header row."""
    settings: Rows = [[key, value, ""] for key, value in _settings(wave, style)]
    return (
        [*settings[:3], [], *settings[3:], ["TIME", *_names(wave)], *_table(wave, style)],
        _names(wave),
        ("V",) * 4,
        False,
    )


def above_without_header(wave: Wave, style: Style) -> Sketch:
    """B: settings above, a date called Time, no header row."""
    settings: Rows = [[key, value, ""] for key, value in _settings(wave, style)]
    return [["Time", "04-Aug-23 14:07:43", ""], *settings, *_table(wave, style)], ("CH1",), ("V",), False


def above_values_only(wave: Wave, style: Style) -> Sketch:
    """B: settings above with the sample interval, values without a time."""
    settings: Rows = [[key, value] for key, value in _settings(wave, style)]
    return [*settings, *_values(wave, style)], ("CH1",), ("V",), False


_WORDS = {"V": "Volt", "A": "Ampere", "s": "second"}


def names_and_units(wave: Wave, style: Style) -> Sketch:
    """C: a row of names that are bare digits, a row of unit words."""
    digits = [str(k + 1) for k in range(len(wave.channels))]
    words = [_WORDS[unit] for unit in _units(wave)]
    return [["x-axis", *digits], ["second", *words], *_table(wave, style)], tuple(digits), _units(wave), False


def units_only(wave: Wave, style: Style) -> Sketch:
    """C: the row of names cut off."""
    words = [_WORDS[unit] for unit in _units(wave)]
    return [["second", *words], *_table(wave, style)], _default(wave), _units(wave), False


def source_row(wave: Wave, style: Style) -> Sketch:
    """C: a row that begins with "Source", or has its first cell empty, above the row of units."""
    words = [_WORDS[unit] for unit in _units(wave)]
    first = "Source" if wave.samples % 2 else ""
    return (
        [[first, *_names(wave)], ["second", *words], *_table(wave, style)],
        _names(wave),
        _units(wave),
        False,
    )


def start_and_increment(wave: Wave, style: Style) -> Sketch:
    """D: start and increment in the header, values only, a separator at the end."""
    words = [_WORDS[unit] for unit in _units(wave)]
    rows: Rows = [[*row, ""] for row in _values(wave, style)]
    head = [
        [*_names(wave), "Start", "Increment", ""],
        [*words, style.number(wave.start), style.number(wave.interval)],
    ]
    return [*head, *rows], _names(wave), _units(wave), False


def sequence_and_increment(wave: Wave, style: Style) -> Sketch:
    """D: the same with a sequence number in front of the values."""
    words = [_WORDS[unit] for unit in _units(wave)]
    rows: Rows = [[str(k), *row, ""] for k, row in enumerate(_values(wave, style))]
    head = [["X", *_names(wave), "Start", "Increment", ""],
            ["Sequence", *words, style.number(wave.start), style.number(wave.interval), ""]]  # fmt: skip
    return [*head, *rows], _names(wave), _units(wave), False


def units_in_words(wave: Wave, style: Style) -> Sketch:
    """E: "in s", "C1 in V"."""
    return [["in s", *(f"{name} in {unit}" for name, unit in zip(_names(wave), _units(wave), strict=True))],
            *_table(wave, style)], _names(wave), _units(wave), False  # fmt: skip


def units_in_brackets(wave: Wave, style: Style) -> Sketch:
    """E: "[s]", "CH2[V]"; milliseconds when the record is even in length."""
    unit, scale = ("ms", 1e-3) if wave.samples % 2 == 0 else ("s", 1.0)
    names = [f"{name}[{unit}]" for name, unit in zip(_names(wave), _units(wave), strict=True)]
    return [[f"[{unit}]", *names], *_table(wave, style, scale)], _names(wave), _units(wave), False


def comment_then_header(wave: Wave, style: Style) -> Sketch:
    """G: comments, a blank line, a header row; one comment is a user's note."""
    notes = [
        ["# Bench recorder, unit 12 °C"],
        ["#Date Time: 2025-11-07 16:43:23.169"],
        ["#Samples: " + str(wave.samples)],
        ["#2,4kHz"],
        [],
    ]
    names = [f"{name}({unit})" for name, unit in zip(_names(wave), _units(wave), strict=True)]
    return [*notes, ["Time(s)", *names], *_table(wave, style)], _names(wave), _units(wave), False


def header_in_comment(wave: Wave, style: Style) -> Sketch:
    """G: the last comment is the header."""
    return (
        [["# recorded on the bench"], ["# time", *_names(wave)], *_table(wave, style)],
        _names(wave),
        ("V",) * 4,
        False,
    )


def index_first(wave: Wave, style: Style) -> Sketch:
    """H: a number of the sample before the time."""
    rows: Rows = [[str(k), *row] for k, row in enumerate(_table(wave, style))]
    names = [f"{name}({unit})" for name, unit in zip(_names(wave), _units(wave), strict=True)]
    return [["Sample", "Time(S)", *names], *rows], _names(wave), _units(wave), False


def bare(wave: Wave, style: Style) -> Sketch:
    """I: no header."""
    return _table(wave, style), _default(wave), ("V",) * 4, False


def bare_values(wave: Wave, style: Style) -> Sketch:
    """I: no header, no time."""
    return _values(wave, style), _default(wave), ("V",) * 4, True


def names_units_blank(wave: Wave, style: Style) -> Sketch:
    """K: names, units in brackets, a blank third row, milliseconds."""
    units = [f"({unit})" for unit in _units(wave)]
    names = [f"Kanal {chr(65 + k)}" for k in range(len(wave.channels))]
    if style.delimiter == " ":
        names = [name.replace(" ", "") for name in names]
    return (
        [["Zeit", *names], ["(ms)", *units], [], *_table(wave, style, 1e-3)],
        tuple(names),
        _units(wave),
        False,
    )


def logger(wave: Wave, style: Style) -> Sketch:
    """L: "Time [s]" and names of the user's own."""
    names = [f"Messpunkt_{chr(228)}{k}" for k in range(len(wave.channels))]
    time = "Time[s]" if style.delimiter == " " else "Time [s]"
    return [[time, *names], *_table(wave, style)], tuple(names), ("V",) * 4, False


def tuples(wave: Wave, style: Style) -> Sketch:
    """L: rows in brackets, as a script prints tuples."""
    rows = [[f"({row[0]}", *row[1:-1], f"{row[-1]})"] for row in _table(wave, style)]
    return [["time[s]", *_names(wave)], *rows], _names(wave), ("V",) * 4, False


def letters(wave: Wave, style: Style) -> Sketch:
    """N: saved again by a spreadsheet: column letters for names, an empty cell too many."""
    names = [chr(66 + k) for k in range(len(wave.channels))]
    return [["A", *names, ""], *_table(wave, style)], tuple(names), ("V",) * 4, False


FAMILIES: dict[str, Maker] = {
    maker.__name__: maker
    for maker in (
        beside, beside_mirrored, above, above_without_header, above_values_only, names_and_units, units_only,
        source_row, start_and_increment, sequence_and_increment, units_in_words, units_in_brackets, comment_then_header,
        header_in_comment, index_first, bare, bare_values, names_units_blank, logger, tuples, letters,
    )
}  # fmt: skip
# Families of one channel per file.
SINGLE = frozenset(("beside", "beside_mirrored", "above_without_header", "above_values_only"))
# Blanks as separators leave no empty cells and no blanks inside a cell.
_NO_BLANKS = frozenset(
    ("beside", "beside_mirrored", "above", "above_without_header", "above_values_only", "source_row",
     "units_in_words", "start_and_increment", "sequence_and_increment", "letters", "tuples")
)  # fmt: skip


def is_possible(family: str, style: Style) -> bool:
    """Whether a family can be written in a style at all."""
    if style.delimiter == style.decimal:
        return False
    return not (style.delimiter == " " and family in _NO_BLANKS)


def styles() -> list[Style]:
    """Every combination of delimiter, decimal mark, line end and encoding."""
    return [Style(*parts) for parts in product(DELIMITERS, DECIMALS, LINE_ENDS, ENCODINGS)]


def make(family: str, wave: Wave, style: Style) -> Made:
    """The bytes of a file of ``family`` with ``wave`` in it, and what must be read back."""
    if family in SINGLE:
        wave = replace(wave, channels=wave.channels[:1])
    rows, names, units, ask = FAMILIES[family](wave, style)
    text = style.line_end.join(style.delimiter.join(row) for row in rows) + (
        style.line_end if style.last_line_end else ""
    )
    count = len(wave.channels)
    read_back = [
        np.array([_parsed(style.number(value)) for value in values]) for _, _, values in wave.channels
    ]
    start = 0.0 if ask or family == "above_values_only" else wave.start
    return Made(
        text.encode(style.encoding), start, wave.interval, names[:count], units[:count], tuple(read_back), ask
    )


def _parsed(text: str) -> float:
    return float(text.replace(",", "."))
