"""A file, or the files of one shot, -> a Capture."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import IO

import numpy as np

from benchfit.capture.damage import check_fit, damage, missing
from benchfit.capture.describe import notes_of_file, notes_of_table
from benchfit.capture.evidence import MOST_BESIDE
from benchfit.capture.layouts import tell
from benchfit.capture.model import Capture, Channel
from benchfit.capture.page import look
from benchfit.capture.plan import Column, make_plan
from benchfit.capture.resolution import resolution
from benchfit.capture.shot import merged
from benchfit.capture.source import Source
from benchfit.capture.table import Table, read_table
from benchfit.capture.time_axis import Axis, make_axis


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
        check_fit(table, page, source.refusal)
        axis = make_axis(table, plan, interval, frame, source.refusal)
        channels = tuple(_channel(table, axis, column) for column in plan.channels)
        remarks = plan.remarks + axis.remarks + damage(table, source.fault, claim.layout.settings.count)
        if not (table.is_complete and axis.keeps_rows):
            remarks += missing(channels)
        notes = {
            **notes_of_file(source, page, family, claim),
            **notes_of_table(plan, axis.origin, axis.interval, axis.start, channels),
        }
        return Capture(source.path, axis.interval, axis.start, channels, remarks, notes)


def _channel(table: Table, axis: Axis, column: Column) -> Channel:
    rows = table.columns[column.index]
    values = axis.values(rows)
    # The mid-points of an envelope have neither the converter's steps nor the record's extremes.
    recorded = axis.frame(rows) if axis.is_envelope else values
    step = abs(column.scale) * resolution(recorded)
    if column.scale != 1.0:
        values = values * column.scale
    mask = table.overloaded.get(column.index)
    overloaded = axis.mask(mask) if mask is not None else None
    extremes = None
    if axis.is_envelope and np.isfinite(recorded).any():
        ends = column.scale * float(np.nanmin(recorded)), column.scale * float(np.nanmax(recorded))
        extremes = (min(ends), max(ends))
    return Channel(column.name, column.unit, values, step, overloaded, extremes)
