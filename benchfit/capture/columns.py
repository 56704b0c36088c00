"""What the values in the head of a file say of each column: whole, even, counting, derived from another."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.cells import Precision, number, precision
from benchfit.capture.header import Title
from benchfit.capture.page import Page
from benchfit.capture.spacing import robust_step

Floats = NDArray[np.float64]
_COMPANION = re.compile(
    r"(?P<of>.*?)[\s_-]*(peak[\s_-]*detect|envelope|min(imum)?|max(imum)?)", re.IGNORECASE
)
# Seconds since 1970 in this century: a clock beside the data, not a voltage.
_EPOCH = (9e8, 5e9)
NUMBERS_THE_ROWS = "it numbers the rows"


class Columns:
    """Titles and values of the columns in the head of a file; facts hold but for a damaged cell or two."""

    def __init__(self, page: Page, titles: Sequence[Title]) -> None:
        self._page = page
        self._titles = titles
        self._values: dict[int, Floats] = {}

    def title(self, column: int) -> Title:
        """The column's title, an empty one where the header has none."""
        return self._titles[column] if column < len(self._titles) else Title()

    def name(self, column: int) -> str:
        """The column's name, or its number from 1 in words."""
        return self.title(column).name or f"column {column + 1}"

    def values(self, column: int) -> Floats:
        """Values by row, NaN where a cell holds no number."""
        if column not in self._values:
            numbers = [number(cell, self._page.decimal) for cell in self._page.column(column)]
            self._values[column] = np.array(numbers, dtype=np.float64)
        return self._values[column]

    def finite(self, column: int) -> Floats:
        """Values without the rows that have none."""
        values = self.values(column)
        return np.asarray(values[np.isfinite(values)])

    def precision(self, column: int) -> Precision:
        """How finely the column is printed."""
        return precision(self._page.column(column), self._page.decimal)

    def quantum(self, column: int) -> float:
        """One step of the last printed digit of the largest value."""
        values = self.finite(column)
        return self.precision(column).quantum(float(np.max(np.abs(values))) if values.size else 0.0)

    def is_whole(self, column: int) -> bool:
        """Whether the values are whole numbers."""
        values = self.finite(column)
        return values.size > 0 and nearly_all(values == np.round(values))

    def is_written_whole(self, column: int) -> bool:
        """Whether the values are written as whole numbers: without decimals, as counts and codes are."""
        cells = [cell for cell in self._page.column(column) if cell]
        return bool(cells) and nearly_all(np.array([cell.lstrip("+-").isdigit() for cell in cells]))

    def is_steady(self, column: int) -> bool:
        """Whether the values grow or fall by the same step in every row."""
        steps = np.diff(self.finite(column))
        usual = float(np.median(steps)) if steps.size > 1 else 0.0
        return usual != 0.0 and nearly_all(steps == usual)

    def is_count(self, column: int) -> bool:
        """Whether the column counts rows: whole numbers, one more in every row."""
        steps = np.diff(self.finite(column))
        return steps.size > 1 and self.is_whole(column) and nearly_all(steps == 1)

    def is_rising(self, column: int) -> bool:
        """Whether hardly a value is less than the one before."""
        values = self.finite(column)
        return values.size > 2 and bool(values[-1] > values[0]) and bool(np.mean(np.diff(values) >= 0) > 0.9)

    def step(self, column: int) -> float:
        """The usual step from row to row, rounded print or not."""
        values = self.finite(column)
        return robust_step(values) if values.size > 2 else 0.0

    def is_even(self, column: int) -> bool:
        """Whether the values grow by equal steps, within what the printed digits leave open."""
        values, step = self.values(column), self.step(column)
        known = np.isfinite(values)
        if not step > 0 or known.sum() < 3:
            return False
        tolerance = max(1.5 * self.quantum(column), 2e-3 * step)
        rows = np.flatnonzero(known)
        if tolerance < 0.2 * step:
            return nearly_all(np.abs(np.diff(values[known]) - step * np.diff(rows)) <= tolerance)
        # Rounded stamps: any slow rise has such steps, only time stays on a line.
        off = values[known] - step * rows
        quarter = off.size // 4 + 1
        off -= np.median(off[-quarter:] - off[:quarter]) * rows / (0.75 * values.size)
        return nearly_all(np.abs(off - np.median(off)) <= tolerance)


def nearly_all(facts: NDArray[np.bool_]) -> bool:
    """Whether facts hold but for a damaged cell or two, each of which spoils its row and a step or two."""
    allowed = max(2 if facts.size > 15 else 0, 0.02 * facts.size)
    return bool(facts.size) and int(np.count_nonzero(~facts)) <= allowed


def no_channel(column: int, others: Sequence[int], table: Columns, time: int | None) -> str:
    """Why a column is no channel of its own beside the ``others``; "" where it is one."""
    named = table.title(column)
    if time is not None and nearly_all(table.values(column) == table.values(time)):
        return "the time axis once more"
    if (named.is_index or named.is_axis_letter) and table.is_whole(column) and table.is_steady(column):
        return NUMBERS_THE_ROWS
    if named.unit is not None and named.unit.is_time:
        return "a second time axis"
    found = _COMPANION.fullmatch(named.name)
    if found and found["of"].strip() in {table.title(k).name for k in others if k != column} - {""}:
        return f"a companion of {found['of'].strip()}"
    if _is_bare(named) and (reason := _counter(column, table)):
        return reason
    for other in others:
        if other != column and (reason := _derived(column, other, table)):
            return f"{reason} {table.name(other)}"
    return ""


def _is_bare(named: Title) -> bool:
    """Whether a column has no unit, or that of bare codes."""
    return named.unit is None or not named.unit.base


def _counter(column: int, table: Columns) -> str:
    values = table.finite(column)
    if values.size < 3 or not table.is_whole(column):
        return ""
    if _EPOCH[0] < float(np.min(values)) and float(np.max(values)) < _EPOCH[1]:
        return "a clock"
    steady = table.is_steady(column) and (table.is_count(column) or abs(table.step(column)) > 1)
    return "a counter" if steady else ""


def _derived(column: int, other: int, table: Columns) -> str:
    """Whether a column follows from another: raw codes of the same channel, or its logarithm; "" if not."""
    x, y = table.values(column), table.values(other)
    both = np.isfinite(x) & np.isfinite(y)
    x, y = x[both], y[both]
    if x.size < 8 or np.ptp(x) == 0 or np.ptp(y) == 0:
        return ""
    if _is_bare(table.title(column)) and table.is_whole(column) and not table.is_whole(other):
        order = np.argsort(x, kind="stable")
        a, b = order[x.size // 20], order[-1 - x.size // 20]
        slope = (y[b] - y[a]) / (x[b] - x[a]) if x[b] != x[a] else math.inf
        tolerance = max(2.01 * table.quantum(other), 1e-6 * abs(y[b] - y[a]))
        if nearly_all(np.abs(y - y[a] - slope * (x - x[a])) <= tolerance):
            return "raw codes of"
    positive = y > 0
    if table.title(column).unit is None and positive.sum() >= 8 and np.ptp(x[positive]) > 0:
        for factor, name in ((1.0, "ln"), (math.log(10.0), "lg")):
            misfit = np.abs(factor * x[positive] - np.log(y[positive]))
            if nearly_all(misfit < max(1e-4, 2 * table.quantum(column)) * factor):
                return f"{name} of"
    return ""
