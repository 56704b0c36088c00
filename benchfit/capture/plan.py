"""Which column is what: time, channels, and columns that are neither."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from benchfit.capture.cells import Precision
from benchfit.capture.columns import NUMBERS_THE_ROWS, Columns, no_channel
from benchfit.capture.evidence import Layout
from benchfit.capture.header import Title, title
from benchfit.capture.page import Page
from benchfit.errors import CaptureError, Remark

Refusal = Callable[[str], CaptureError]


@dataclass(frozen=True)
class Column:
    """A channel to be read: its column, ``name``, base ``unit`` and the ``scale`` to it."""

    index: int
    name: str
    unit: str
    scale: float = 1.0
    unit_is_assumed: bool = False


@dataclass(frozen=True)
class Plan:
    """What to read from a table and how time is to be had.

    ``time`` is the column of stamps or of increments (None: there is none, ``why_no_time`` says why),
    ``time_scale`` its factor to seconds, ``precision`` how it is printed. ``interval`` and ``start`` (s) are
    those that the file states elsewhere, ``stated`` where.
    """

    channels: tuple[Column, ...] = ()
    time: int | None = None
    time_name: str = ""
    time_scale: float = 1.0
    time_unit: str = ""
    precision: Precision = field(default_factory=Precision)
    is_increment: bool = False
    interval: float | None = None
    start: float | None = None
    stated: str = ""
    dropped: tuple[str, ...] = ()
    remarks: tuple[Remark, ...] = ()
    why_no_time: str = ""


def make_plan(page: Page, layout: Layout, columns: Mapping[str, int | str] | None, refusal: Refusal) -> Plan:
    """The plan for a table; ``columns`` is the user's own: {name: number from 0, or title}.

    Raises CaptureError where ``columns`` names what is not there, or no channel is left.
    """
    table = Columns(page, layout.titles)
    # A garbled first stamp is none.
    start = layout.start if layout.start is not None and np.isfinite(layout.start) else None
    plan = Plan(interval=layout.interval, start=start, stated=layout.stated)
    if columns:
        return _wanted(plan, page, layout, table, columns, refusal)
    time, why = _time_column(page, layout, table)
    plan = replace(plan, why_no_time=why) if time is None else _with_time(plan, table, time, layout, why)
    plan = _with_channels(plan, page, table, time)
    if not plan.channels:
        raise refusal("has a time axis and no column of values")
    return plan


# -- time ----------------------------------------------------------------------------------------------------


def _time_column(page: Page, layout: Layout, table: Columns) -> tuple[int | None, str]:
    """The column of time stamps and why it is one; or None and what speaks against the likeliest."""
    if layout.has_no_stamps:
        return None, ""
    numeric = page.numeric
    titled = _time_titles([(column, table.title(column)) for column in numeric])
    stamps = [(column, named) for column, named in titled if not named.is_increment]
    for column, named in stamps:
        if named.unit is not None and named.unit.is_time:
            return column, "its unit"
    for column, named in [*stamps, *titled]:
        if named.is_time or named.is_increment:
            return column, "its name"
    if len(numeric) < 2:
        return None, "it has one column of numbers only"
    first = numeric[0]
    if table.is_count(first) and len(numeric) > 2 and _is_even_time(numeric[1], table):
        first = numeric[1]
    if layout.time_is_first and table.is_rising(first):
        return first, "its place"
    if not table.is_even(first):
        return None, ""
    if layout.interval is not None:
        if abs(table.step(first) / layout.interval - 1) < 0.01:
            return first, f"its steps, which are those of {layout.stated}"
        # An even rise that is not the stated one is a ramp.
        return None, ""
    if not table.is_written_whole(first):
        return first, "its even steps"
    return None, f"its first column holds {_whole_numbers(first, table)}"


def _time_titles(titled: Sequence[tuple[int, Title]]) -> list[tuple[int, Title]]:
    """Columns whose titles may name the time: a lone letter does in the first place only.

    Further on, "T" is a temperature or a period.
    """
    first = 1 if titled and titled[0][1].is_index else 0
    return [
        (column, named)
        for place, (column, named) in enumerate(titled)
        if len(named.name) != 1 or named.unit is not None or place <= first
    ]


def _is_even_time(column: int, table: Columns) -> bool:
    return table.is_even(column) and not table.is_written_whole(column)


def _whole_numbers(column: int, table: Columns) -> str:
    if table.is_count(column):
        return "row numbers"
    return f"whole numbers without a unit, {table.step(column):g} from row to row"


def _with_time(plan: Plan, table: Columns, time: int, layout: Layout, why: str) -> Plan:
    """The plan with its time column, or with the reason why that column cannot be used."""
    named, name = table.title(time), table.name(time)
    measure = named.unit
    if measure is None and layout.horizontal:
        measure = title(f"[{layout.horizontal}]").unit
    if measure is not None and measure.base and not measure.is_time:
        return replace(plan, why_no_time=f'"{name}" is in "{measure.text}", which is no unit of time')
    remarks = plan.remarks
    if measure is None or not measure.is_time:
        if table.is_written_whole(time) and not why.startswith("its steps"):
            return replace(plan, why_no_time=f'"{name}" holds {_whole_numbers(time, table)}')
        says = f"{name} is taken for time in seconds, by {why}; the file gives no unit."
        remarks = (*remarks, Remark("layout-guessed", says))
    is_known = measure is not None and measure.is_time
    return replace(
        plan,
        time=time,
        time_name=name,
        time_scale=measure.scale if measure is not None and is_known else 1.0,
        time_unit=measure.text if measure is not None and is_known else "",
        precision=table.precision(time),
        is_increment=named.is_increment,
        remarks=remarks,
    )


# -- channels ------------------------------------------------------------------------------------------------


def _with_channels(plan: Plan, page: Page, table: Columns, time: int | None) -> Plan:
    left = [column for column in page.numeric if column != time]
    dropped: list[str] = []
    for column in list(left):
        reason = no_channel(column, left, table, time)
        if reason and len(left) > 1:
            left.remove(column)
            dropped.append(f"{table.name(column)} ({reason})")
    channels = [_channel(column, table.title(column), place, table) for place, column in enumerate(left)]
    remarks = plan.remarks
    if companions := [text for text in dropped if NUMBERS_THE_ROWS not in text]:
        remarks = (*remarks, Remark("derived-column", f"Not read as channels: {', '.join(companions)}."))
    return _settled(replace(plan, dropped=tuple(dropped), remarks=remarks), channels)


def _channel(column: int, named: Title, place: int, table: Columns) -> Column:
    name = named.name or f"CH{place + 1}"
    if named.unit is not None:
        return Column(column, name, named.unit.base, named.unit.scale)
    values = table.finite(column)
    spread = float(np.ptp(values)) if values.size else 0.0
    codes = table.is_whole(column) and (spread >= 16 or set(np.unique(values)) <= {0.0, 1.0})
    return Column(column, name, "" if codes else "V", unit_is_assumed=True)


def _settled(plan: Plan, channels: Sequence[Column]) -> Plan:
    """The plan with its channels, no name twice, and a remark on the units that no title gave."""
    distinct: list[Column] = []
    for channel in channels:
        name, count = channel.name, 1
        while name in {other.name for other in distinct}:
            count += 1
            name = f"{channel.name} ({count})"
        distinct.append(replace(channel, name=name))
    remarks = list(plan.remarks)
    if assumed := [c.name for c in distinct if c.unit_is_assumed and c.unit]:
        says = f"The file gives no unit for {', '.join(assumed)}; volts are assumed."
        remarks.append(Remark("layout-guessed", says))
    if bare := [c.name for c in distinct if c.unit_is_assumed and not c.unit]:
        says = f"{', '.join(bare)}: whole numbers without a unit, taken for bare codes."
        remarks.append(Remark("layout-guessed", says))
    return replace(plan, channels=tuple(distinct), remarks=tuple(remarks))


# -- the user's own columns ----------------------------------------------------------------------------------


def _wanted(
    plan: Plan, page: Page, layout: Layout, table: Columns, columns: Mapping[str, int | str], refusal: Refusal
) -> Plan:
    channels: list[Column] = []
    has_time = False
    for key, where in columns.items():
        column = _number_of(page, layout, key, where, refusal)
        asked = title(key)
        measure = asked.unit or table.title(column).unit
        if asked.is_time or asked.is_increment:
            has_time = True
            retitled = _Retitled(page, layout, column, replace(asked, unit=measure))
            plan = _with_time(plan, retitled, column, layout, "you")
            continue
        # A name that is also a unit, "V" or "A", is a name here.
        name = asked.name or key
        unit = measure if asked.name else table.title(column).unit
        channels.append(_channel(column, Title(name, unit, key), len(channels), table))
    if not channels:
        raise refusal("--columns names no channel; add one, as in --columns time=0,CH1=1")
    if not has_time:
        time, why = _time_column(page, layout, table)
        if time is None or time in {channel.index for channel in channels}:
            plan = replace(plan, why_no_time=why if time is None else "")
        else:
            plan = _with_time(plan, table, time, layout, why)
    return _settled(plan, channels)


class _Retitled(Columns):
    """Columns of which one has the title that the user gave it."""

    def __init__(self, page: Page, layout: Layout, column: int, named: Title) -> None:
        titles = [*layout.titles, *[Title()] * (column + 1 - len(layout.titles))]
        titles[column] = named
        super().__init__(page, titles)


def _number_of(page: Page, layout: Layout, key: str, where: int | str, refusal: Refusal) -> int:
    """Number of the column that the user named by number, name or title. Raises CaptureError."""
    titles = {named.text: column for column, named in enumerate(layout.titles) if named.text}
    names = {named.name: column for column, named in enumerate(layout.titles) if named.name}
    text = str(where).strip()
    if isinstance(where, int):
        column = where
    elif text in names or text in titles:
        column = names.get(text, titles.get(text, -1))
    else:
        column = int(text) if re.fullmatch(r"\d{1,4}", text) else -1
    if column in page.numeric:
        return column
    called = {column: f" ({text})" for text, column in titles.items()}
    has = ", ".join(f"{column}{called.get(column, '')}" for column in page.numeric)
    raise refusal(f"--columns {key}={where}: there is no such column of numbers; the columns are {has}")
