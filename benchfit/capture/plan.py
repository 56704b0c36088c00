"""Which column is what: time, channels, and columns that are neither."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.cells import Precision, number, precision
from benchfit.capture.evidence import Layout
from benchfit.capture.header import Title, title
from benchfit.capture.page import Page
from benchfit.capture.spacing import robust_step
from benchfit.errors import CaptureError, Remark

Floats = NDArray[np.float64]
_COMPANION = re.compile(
    r"(?P<of>.*?)[\s_-]*(peak[\s_-]*detect|envelope|min(imum)?|max(imum)?)", re.IGNORECASE
)
_LOGARITHM = re.compile(r"(ln|log|log10|lg)\b.*|ln[\s_(]?\w+\)?", re.IGNORECASE)
_NUMBERS_THE_ROWS = "it numbers the rows"
# Seconds since 1970 in this century: a clock beside the data, not a voltage.
_EPOCH = (9e8, 5e9)


@dataclass(frozen=True)
class Column:
    """A channel to be read: its column, ``name``, base ``unit`` and the factor to it."""

    index: int
    name: str
    unit: str
    scale: float = 1.0
    unit_is_assumed: bool = False


@dataclass(frozen=True)
class Plan:
    """What to read from a table and how time is to be had.

    ``time`` is the column of stamps or of increments (None: there is none), ``time_scale`` its factor to
    seconds, ``precision`` how it is printed (before scaling). ``interval`` and ``start`` (s) are those that
    the file states elsewhere, ``stated`` where.
    """

    channels: tuple[Column, ...]
    time: int | None = None
    time_name: str = ""
    time_scale: float = 1.0
    time_unit: str = ""
    precision: Precision = Precision()
    is_increment: bool = False
    interval: float | None = None
    start: float | None = None
    stated: str = ""
    dropped: tuple[str, ...] = ()
    remarks: tuple[Remark, ...] = ()
    why_no_time: str = ""


class _Columns:
    """Titles and the values in the head, by column."""

    def __init__(self, page: Page, titles: Sequence[Title]) -> None:
        self._page = page
        self._titles = titles
        self._values: dict[int, Floats] = {}

    def title(self, column: int) -> Title:
        return self._titles[column] if column < len(self._titles) else Title()

    def values(self, column: int) -> Floats:
        if column not in self._values:
            self._values[column] = np.array(
                [number(cell, self._page.decimal) for cell in self._page.column(column)]
            )
        return self._values[column]

    def finite(self, column: int) -> Floats:
        values = self.values(column)
        return values[np.isfinite(values)]

    def precision(self, column: int) -> Precision:
        return precision(self._page.column(column), self._page.decimal)

    def quantum(self, column: int) -> float:
        values = self.finite(column)
        return self.precision(column).quantum(float(np.max(np.abs(values))) if values.size else 0.0)

    def is_whole(self, column: int) -> bool:
        """Whether the values are whole numbers."""
        values = self.finite(column)
        return values.size > 0 and _nearly_all(values == np.round(values))

    def is_bare_whole(self, column: int) -> bool:
        """Whether the values are written as whole numbers: without decimals, as counts are."""
        cells = [cell for cell in self._page.column(column) if cell]
        return bool(cells) and _nearly_all(np.array([cell.lstrip("+-").isdigit() for cell in cells]))

    def is_steady(self, column: int) -> bool:
        """Whether the values grow or fall by the same step in every row."""
        steps = np.diff(self.finite(column))
        usual = float(np.median(steps)) if steps.size > 1 else 0.0
        return usual != 0.0 and _nearly_all(steps == usual)

    def is_count(self, column: int) -> bool:
        """Whether the column counts rows: whole numbers, one more in every row."""
        steps = np.diff(self.finite(column))
        return steps.size > 1 and self.is_whole(column) and _nearly_all(steps == 1)

    def is_rising(self, column: int) -> bool:
        """Whether hardly a value is less than the one before."""
        values = self.finite(column)
        return values.size > 2 and bool(values[-1] > values[0]) and bool(np.mean(np.diff(values) >= 0) > 0.9)

    def step(self, column: int) -> float:
        """The usual step from row to row, rounded print or not."""
        return robust_step(self.finite(column)) if self.finite(column).size > 2 else 0.0

    def is_even(self, column: int) -> bool:
        """Whether the values grow by equal steps, within what the printed digits leave open."""
        values, step = self.values(column), self.step(column)
        known = np.isfinite(values)
        if not step > 0 or known.sum() < 3:
            return False
        tolerance = max(1.5 * self.quantum(column), 2e-3 * step)
        rows = np.flatnonzero(known)
        if tolerance < 0.2 * step:
            return _nearly_all(np.abs(np.diff(values[known]) - step * np.diff(rows)) <= tolerance)
        # Rounded stamps: any slow rise has such steps, only time stays on a line.
        off = values[known] - step * rows
        quarter = off.size // 4 + 1
        off -= np.median(off[-quarter:] - off[:quarter]) * rows / (0.75 * values.size)
        return _nearly_all(np.abs(off - np.median(off)) <= tolerance)


def _nearly_all(facts: NDArray[np.bool_]) -> bool:
    """Whether facts hold but for a damaged cell or two, each of which spoils its row and a step or two."""
    return bool(facts.size) and int(np.count_nonzero(~facts)) <= max(2 if facts.size > 15 else 0, 0.02 * facts.size)


def make_plan(
    page: Page,
    layout: Layout,
    columns: Mapping[str, int | str] | None,
    refusal: Callable[[str], CaptureError],
) -> Plan:
    """The plan for a table; ``columns`` is the user's own, {name: number from 0 or title}. Raises CaptureError."""
    table = _Columns(page, layout.titles)
    if columns:
        return _wanted(page, layout, table, columns, refusal)
    time, why = _time_column(page, layout, table)
    plan = Plan((), interval=layout.interval, start=layout.start, stated=layout.stated)
    if time is not None:
        plan = _with_time(plan, table, time, layout, why)
    elif why:
        plan = replace(plan, why_no_time=why)
    plan = _with_channels(plan, page, table, time)
    if not plan.channels:
        raise refusal("has a time axis and no column of values")
    return plan


# -- time ----------------------------------------------------------------------------------------------------


def _time_column(page: Page, layout: Layout, table: _Columns) -> tuple[int | None, str]:
    """The column of time stamps and why it is taken for that, or None and what speaks against the likeliest."""
    if layout.has_no_stamps:
        return None, ""
    numeric = page.numeric
    titled = [(k, table.title(k)) for k in numeric]
    # A lone letter names the time only in the first place: further on, "T" is a temperature or a period.
    titled = [(k, named) for place, (k, named) in enumerate(titled) if len(named.name) != 1 or named.unit or not place or (
        place == 1 and titled[0][1].is_index)]
    for test, why in (
        (lambda t: t.unit is not None and t.unit.is_time and not t.is_increment, "its unit"),
        (lambda t: t.is_time and not t.is_increment, "its name"),
        (lambda t: t.is_increment, "its name"),
    ):
        for column, named in titled:
            if test(named):
                return column, why
    if len(numeric) < 2:
        return None, "it has one column of numbers only"
    first = numeric[0]
    if table.is_count(first) and len(numeric) > 2 and table.is_even(numeric[1]) and not table.is_bare_whole(numeric[1]):
        first = numeric[1]
    if layout.time_is_first and table.is_rising(first):
        return first, "its place"
    if table.is_even(first):
        step = table.step(first)
        if layout.interval is not None and abs(step / layout.interval - 1) < 0.01:
            return first, f"its steps, which are those of {layout.stated}"
        if not table.is_bare_whole(first):
            return first, "its even steps"
        what = (
            "row numbers" if table.is_count(first) else f"whole numbers in steps of {step:g} without a unit"
        )
        return None, f"its first column holds {what}"
    return None, ""


def _with_time(plan: Plan, table: _Columns, time: int, layout: Layout, why: str) -> Plan:
    named = table.title(time)
    measure = named.unit
    remarks = list(plan.remarks)
    name = named.name or f"column {time + 1}"
    if measure is None and layout.horizontal:
        measure = title(f"[{layout.horizontal}]").unit
    if measure is not None and measure.base and not measure.is_time:
        return replace(plan, why_no_time=f'"{name}" is in "{measure.text}", which is no unit of time')
    if measure is None or not measure.is_time:
        whole = table.is_bare_whole(time) and not why.startswith("its steps")
        if whole:
            what = "row numbers" if table.is_count(time) else "whole numbers without a unit"
            return replace(
                plan, why_no_time=f'"{name}" holds {what}' if named.name else f"{name} holds {what}"
            )
        remarks.append(
            Remark(
                "layout-guessed", f"{name} is taken for time in seconds, by {why}; the file gives no unit."
            )
        )
    scale = measure.scale if measure is not None and measure.is_time else 1.0
    return replace(
        plan, time=time, time_name=name, time_scale=scale, time_unit=measure.text if measure else "", remarks=tuple(remarks),
        precision=table.precision(time), is_increment=named.is_increment,
    )  # fmt: skip


# -- channels ------------------------------------------------------------------------------------------------


def _with_channels(plan: Plan, page: Page, table: _Columns, time: int | None) -> Plan:
    left = [k for k in page.numeric if k != time]
    dropped: list[str] = []
    for column in list(left):
        reason = _no_channel(column, left, table, time)
        if reason and len(left) > 1:
            left.remove(column)
            dropped.append(f"{_called(table, column)} ({reason})")
    channels: list[Column] = []
    for column in left:
        channels.append(_channel(column, table.title(column), len(channels), table))
    remarks = list(plan.remarks)
    companions = [text for text in dropped if _NUMBERS_THE_ROWS not in text]
    if companions:
        remarks.append(Remark("derived-column", f"Not read as channels: {', '.join(companions)}."))
    return _settled(replace(plan, dropped=tuple(dropped), remarks=tuple(remarks)), channels)


def _settled(plan: Plan, channels: Sequence[Column]) -> Plan:
    """The plan with its channels, and a remark on the units that no title gave."""
    distinct = _distinct(channels)
    remarks = list(plan.remarks)
    if assumed := [c.name for c in distinct if c.unit_is_assumed and c.unit]:
        says = f"The file gives no unit for {', '.join(assumed)}; volts are assumed."
        remarks.append(Remark("layout-guessed", says))
    if bare := [c.name for c in distinct if c.unit_is_assumed and not c.unit]:
        says = f"{', '.join(bare)}: whole numbers without a unit, taken for bare codes."
        remarks.append(Remark("layout-guessed", says))
    return replace(plan, channels=distinct, remarks=tuple(remarks))


def _channel(column: int, named: Title, place: int, table: _Columns) -> Column:
    name = named.name or f"CH{place + 1}"
    if named.unit is not None:
        return Column(column, name, named.unit.base, named.unit.scale)
    values = table.finite(column)
    spread = float(np.ptp(values)) if values.size else 0.0
    codes = table.is_whole(column) and (spread >= 16 or set(np.unique(values)) <= {0.0, 1.0})
    return Column(column, name, "" if codes else "V", unit_is_assumed=True)


def _distinct(channels: Sequence[Column]) -> tuple[Column, ...]:
    """Channels with no name twice."""
    names: list[str] = []
    result = []
    for channel in channels:
        name, count = channel.name, 1
        while name in names:
            count += 1
            name = f"{channel.name} ({count})"
        names.append(name)
        result.append(replace(channel, name=name))
    return tuple(result)


def _called(table: _Columns, column: int) -> str:
    return table.title(column).name or f"column {column + 1}"


def _no_channel(column: int, others: Sequence[int], table: _Columns, time: int | None) -> str:
    """Why a column is no channel of its own; "" where it is one."""
    named = table.title(column)
    values = table.finite(column)
    if time is not None and _nearly_all(table.values(column) == table.values(time)):
        return "the time axis once more"
    if (named.is_index or named.is_axis_letter) and table.is_whole(column) and table.is_steady(column):
        return _NUMBERS_THE_ROWS
    if named.unit is not None and named.unit.is_time:
        return "a second time axis"
    if found := _COMPANION.fullmatch(named.name):
        if any(table.title(k).name == found["of"].strip() for k in others if k != column):
            return f"a companion of {found['of'].strip()}"
    if table.is_whole(column) and values.size > 2 and _is_bare(named):
        if _EPOCH[0] < float(np.min(values)) and float(np.max(values)) < _EPOCH[1]:
            return "a clock"
        if table.is_steady(column) and (table.is_count(column) or abs(table.step(column)) > 1):
            return "a counter"
    for other in others:
        if other != column and (reason := _derived(column, other, table)):
            return f"{reason} {_called(table, other)}"
    return ""


def _is_bare(named: Title) -> bool:
    """Whether a column has no unit, or that of bare codes."""
    return named.unit is None or not named.unit.base


def _derived(column: int, other: int, table: _Columns) -> str:
    """Whether a column follows from another: raw codes of the same channel, or its logarithm."""
    x, y = table.values(column), table.values(other)
    both = np.isfinite(x) & np.isfinite(y)
    x, y = x[both], y[both]
    if x.size < 8 or np.ptp(x) == 0 or np.ptp(y) == 0:
        return ""
    if table.is_whole(column) and not table.is_whole(other) and _is_bare(table.title(column)):
        order = np.argsort(x, kind="stable")
        a, b = order[x.size // 20], order[-1 - x.size // 20]
        slope = (y[b] - y[a]) / (x[b] - x[a]) if x[b] != x[a] else np.inf
        if _nearly_all(np.abs(y - y[a] - slope * (x - x[a])) <= max(2.01 * table.quantum(other), 1e-6 * abs(y[b] - y[a]))):
            return "raw codes of"
    positive = y > 0
    if _LOGARITHM.fullmatch(table.title(column).name) or table.title(column).unit is None:
        if positive.sum() >= 8 and np.ptp(x[positive]) > 0:
            for factor, name in ((1.0, "ln"), (np.log(10.0), "lg")):
                if (
                    np.max(np.abs(factor * x[positive] - np.log(y[positive])))
                    < max(1e-4, 2 * table.quantum(column)) * factor
                ):
                    return f"{name} of"
    return ""


# -- the user's own columns ----------------------------------------------------------------------------------


def _wanted(
    page: Page,
    layout: Layout,
    table: _Columns,
    columns: Mapping[str, int | str],
    refusal: Callable[[str], CaptureError],
) -> Plan:
    plan = Plan((), interval=layout.interval, start=layout.start, stated=layout.stated)
    channels: list[Column] = []
    time = None
    for key, where in columns.items():
        column = _number_of(page, layout, key, where, refusal)
        asked = title(key)
        if not asked.name and not asked.is_time:
            asked = Title(key, None, key)
        if asked.is_time or asked.is_increment:
            time = column
            known = replace(asked, unit=asked.unit or table.title(column).unit)
            plan = replace(
                plan, time=column, time_name=table.title(column).name or f"column {column + 1}",
                time_scale=known.unit.scale if known.unit and known.unit.is_time else 1.0, is_increment=asked.is_increment,
                time_unit=known.unit.text if known.unit else "",
            )  # fmt: skip
            plan = replace(plan, precision=table.precision(column))
            if known.unit is None and table.is_bare_whole(column):
                plan = replace(
                    plan,
                    time=None,
                    why_no_time=f'"{key}" has whole numbers without a unit (say "{key}[ms]" or the like)',
                )
            elif known.unit is None:
                plan = replace(
                    plan,
                    remarks=(
                        Remark("layout-guessed", "The file gives no unit for time; seconds are assumed."),
                    ),
                )
            continue
        named = replace(asked, unit=asked.unit or table.title(column).unit, name=asked.name or key)
        channels.append(_channel(column, named, len(channels), table))
    if not channels:
        raise refusal("--columns names no channel; add one, as in --columns time=0,CH1=1")
    if time is None:
        found, why = _time_column(page, layout, table)
        if found is not None and found not in {c.index for c in channels}:
            plan = _with_time(plan, table, found, layout, why)
        else:
            plan = replace(plan, why_no_time=why if found is None else "")
    return _settled(plan, channels)


def _number_of(
    page: Page, layout: Layout, key: str, where: int | str, refusal: Callable[[str], CaptureError]
) -> int:
    titles = {named.text: k for k, named in enumerate(layout.titles) if named.text}
    names = {named.name: k for k, named in enumerate(layout.titles) if named.name}
    text = str(where).strip()
    column = (
        int(text)
        if re.fullmatch(r"\d+", text) and text not in names
        else names.get(text, titles.get(text, -1))
    )
    if isinstance(where, int):
        column = where
    if column in page.numeric:
        return column
    has = ", ".join(f"{k} ({layout.titles[k].text})" if k < len(layout.titles) and layout.titles[k].text else str(k)
                    for k in page.numeric)  # fmt: skip
    raise refusal(f"--columns {key}={where}: there is no such column of numbers; the columns are {has}")
