"""A file, or the files of one shot, -> a Capture."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import IO

import numpy as np

from benchfit.capture.evidence import MOST_BESIDE, Claim, Family
from benchfit.capture.layouts import tell
from benchfit.capture.model import Capture, Channel
from benchfit.capture.page import Page, look
from benchfit.capture.plan import Column, Plan, make_plan
from benchfit.capture.resolution import resolution
from benchfit.capture.shot import merged
from benchfit.capture.source import Source
from benchfit.capture.table import Table, read_table
from benchfit.capture.time_axis import Axis, make_axis
from benchfit.errors import Remark

# Above this share of rows that do not fit, a file is not damaged but misunderstood.
_MOST_LEFT_OUT = 0.1


def read(
    path: str | Path,
    also: Sequence[str | Path] = (),
    *,
    columns: Mapping[str, int | str] | None = None,
    interval: float | None = None,
    frame: int | None = None,
    limit: int | None = None,
    stdin: IO[bytes] | None = None,
) -> Capture:
    """The capture in ``path`` ("-" for standard input), whatever instrument wrote it.

    Parameters
    ----------
    path : file name
        Text with a table of numbers in it, plain or compressed (gzip, bzip2, xz, zstd).
    also : file names
        Further files of the same shot, one or more channels each, on the same time axis.
    columns : mapping, optional
        {"time": 0, "CH1": 1}: which columns to read, by number from 0 or by their title, and what to call
        them. A unit may follow the name: "time[ms]", "CH1[mV]". "increment" in place of "time" is a column
        that holds the time since the row before.
    interval : float, optional
        Time between samples [s]; wins over everything in the file.
    frame : int, optional
        Which frame to read where time starts anew within the file, from 1.
    limit : int, optional
        Most bytes of text, and of memory for the values, that are taken; default 2 GiB.
    stdin : binary file, optional
        What "-" stands for.

    Raises
    ------
    CaptureError
        In one sentence: what the file seems to be, or what it does not tell and which option does.
    """
    first = _read_one(path, columns, interval, frame, limit, stdin)
    others = [_read_one(other, columns, interval, frame, limit, stdin) for other in also]
    return merged(first, others) if others else first


def _read_one(
    path: str | Path,
    columns: Mapping[str, int | str] | None,
    interval: float | None,
    frame: int | None,
    limit: int | None,
    stdin: IO[bytes] | None,
) -> Capture:
    # Garbled digits make numbers that overflow in sums and squares; what comes of them fails the checks.
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"), Source(path, limit, stdin) as source:
        page = look(source.head.lines, source.head.whole)
        family, claim, found = tell(page)
        if claim.layout is None:
            raise source.refusal(claim.refusal)
        plan = make_plan(page, claim.layout, columns, source.refusal)
        wanted = [*([] if plan.time is None else [plan.time]), *(channel.index for channel in plan.channels)]
        wide = MOST_BESIDE if found.beside.pairs else 1
        table = read_table(source, page, wanted, plan.time, wide)
        _check_fit(source, table, page)
        axis = make_axis(table, plan, interval, frame, source.refusal)
        channels = tuple(_channel(table, axis, column) for column in plan.channels)
        remarks = plan.remarks + axis.remarks + _damage(source, table, claim)
        if not (table.is_complete and axis.keeps_rows):
            remarks += _empty(channels)
        notes = _notes(source, page, _Understood(family, claim, plan, axis, channels))
        return Capture(source.path, axis.interval, axis.start, channels, remarks, notes)


def _check_fit(source: Source, table: Table, page: Page) -> None:
    """Refuse a file of which too much does not fit the table that was seen in it."""
    if not table.rows:
        raise source.refusal("has no complete row of numbers; save the capture again")
    if table.left_out > max(3, _MOST_LEFT_OUT * (table.rows + table.left_out)):
        comma = (
            " (decimal commas without quotes in a comma-separated file?)"
            if page.dialect and page.dialect.delimiter == ","
            else ""
        )
        raise source.refusal(f"{table.left_out} of {table.rows + table.left_out} rows do not have the cells that the others have{comma}, first "
                             f"{table.example}; export it anew")  # fmt: skip
    if table.unread > max(3, _MOST_LEFT_OUT * table.rows):
        raise source.refusal(
            f"{table.unread} cells among {table.rows} rows are no numbers, first {table.example}; export it anew"
        )


def _channel(table: Table, axis: Axis, column: Column) -> Channel:
    rows = table.columns[column.index]
    values = axis.values(rows)
    # The mid-points of an envelope have neither the converter's steps nor the record's extremes.
    recorded = axis.frame(rows) if axis.is_envelope else values
    step = abs(column.scale) * resolution(recorded)
    if column.scale != 1.0:
        values = values * column.scale
    mask = table.overloaded.get(column.index)
    extremes = None
    if axis.is_envelope and np.isfinite(recorded).any():
        ends = column.scale * float(np.nanmin(recorded)), column.scale * float(np.nanmax(recorded))
        extremes = (min(ends), max(ends))
    return Channel(
        column.name, column.unit, values, step, axis.mask(mask) if mask is not None else None, extremes
    )


def _damage(source: Source, table: Table, claim: Claim) -> tuple[Remark, ...]:
    remarks = []
    if table.left_out:
        remarks.append(
            Remark(
                "damaged",
                f"{table.left_out} rows that are no rows of the table were left out, first {table.example}.",
            )
        )
    if table.unread:
        remarks.append(
            Remark(
                "damaged",
                f"{table.unread} cells that are no numbers were left without a value, first {table.example}.",
            )
        )
    if table.cut:
        remarks.append(Remark("damaged", "The last row is cut off in the middle and was left out."))
    inner = [text for row, text in table.breaks if 0 < row < table.rows]
    if inner:
        remarks.append(
            Remark(
                "damaged",
                f'{len(inner)} lines of text between the rows were passed over, first "{inner[0][:40]}".',
            )
        )
    if source.fault:
        remarks.append(
            Remark(
                "damaged",
                f"The compressed file is damaged ({source.fault}); it was read as far as it could be unpacked.",
            )
        )
    assert claim.layout is not None
    announced = claim.layout.settings.count
    if announced is not None and table.rows < 0.98 * announced and not remarks:
        remarks.append(
            Remark(
                "cut-short",
                f"The file announces {announced} samples and holds {table.rows} rows; it may be cut.",
            )
        )
    return tuple(remarks)


def _empty(channels: Sequence[Channel]) -> tuple[Remark, ...]:
    remarks = []
    for channel in channels:
        over = int(np.count_nonzero(channel.overloaded)) if channel.overloaded is not None else 0
        empty = int(np.count_nonzero(np.isnan(channel.values))) - over
        if over:
            remarks.append(
                Remark(
                    "clipped", f"{channel.name}: {over} samples are marked as out of range by the instrument."
                )
            )
        if empty > 0:
            remarks.append(Remark("empty-cells", f"{channel.name}: {empty} samples have no value."))
    return tuple(remarks)


@dataclass(frozen=True)
class _Understood:
    family: Family
    claim: Claim
    plan: Plan
    axis: Axis
    channels: tuple[Channel, ...]


def _notes(source: Source, page: Page, what: _Understood) -> dict[str, str]:
    """How the file was understood, in the order in which ``describe`` says it."""
    assert page.dialect is not None
    plan, axis = what.plan, what.axis
    mark = " with byte order mark" if source.has_bom else ""
    packed = f", compressed with {source.compression}" if source.compression else ""
    decimal = "decimal point" if page.decimal == "." else "decimal comma"
    single = len(page.numeric) == 1
    time = (
        []
        if plan.time is None
        else [f"time from column {plan.time + 1} ({plan.time_name}{_in(plan.time_unit)})"]
    )
    read = [f"{c.name} from column {c.index + 1}" for c in plan.channels]
    notes = {
        "encoding": f"{source.encoding.upper()}{mark}, line ends {source.line_end}{packed}",
        "layout": f"{what.family.name}: {'; '.join(what.claim.reasons)}; table from line {page.first + 1} on",
        "delimiter": f"{'one column' if single else page.dialect.says}, {decimal}",
        "columns": ", ".join(time + read)
        + (f"; not read: {', '.join(plan.dropped)}" if plan.dropped else ""),
        "units": ", ".join(f"{c.name} in {c.unit or 'codes'}" for c in what.channels),
        "samples": f"{what.channels[0].values.size}",
        "interval": f"{axis.interval:.9g} s from {axis.origin}",
        "start": f"{axis.start:.9g} s",
        "resolution": ", ".join(
            f"{c.name} {c.resolution:.4g}{' ' + c.unit if c.unit else ''}" for c in what.channels
        ),
    }
    return notes


def _in(unit: str) -> str:
    return f" in {unit}" if unit else ""
