"""What a burn-in's log says: drift and its law, the part it is due to, stability, alarms, time to the limits.

The log may be written meanwhile. Rates are per hour; nothing is interpolated over a gap."""

from __future__ import annotations

import argparse
import os
from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from benchfit.commands import options, streams
from benchfit.errors import LogError, UsageError

if TYPE_CHECKING:
    from benchfit.burnin.causes import Build
    from benchfit.burnin.reader import LogReader
    from benchfit.burnin.result import Trend


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of ``benchfit trend``."""
    parser.add_argument("log", metavar="FILE", help="the log that benchfit burnin writes")
    parser.add_argument("--unit", metavar="NAME", help="of a run of several units, this one alone")
    parser.add_argument(
        "--limit", metavar="NAME=LIMITS", action="append", default=[],
        help="limits in place of the run's own: frequency=2%% (of the first record), frequency=11.5..12.5Hz",
    )  # fmt: skip
    group = parser.add_argument_group("results")
    group.add_argument("--json", metavar="FILE", help="the trend as JSON (- for standard output)")
    group.add_argument("--csv", metavar="FILE", help="table, one row per record (- for standard output)")
    group.add_argument("--plot", metavar="FILE", help="figure; .png, .svg or .pdf by its ending")
    group.add_argument(
        "--raw", nargs=2, metavar=("SEQ", "FILE"),
        help="write the raw capture that was kept of record SEQ as CSV, and do nothing else",
    )  # fmt: skip
    group.add_argument(
        "--upgrade",
        metavar="NEWFILE",
        help="copy a log of an older version into a new one, and do nothing else",
    )
    options.add_talk(parser)


def run(args: argparse.Namespace) -> int:
    """Print what the log says; 0."""
    args.report = None
    # Hundreds of unknowns at most: on a busy machine the linear algebra's threads would only wait for each
    # other.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    options.check_outputs(args)
    if args.upgrade is not None:
        return _upgrade(args)
    if args.raw is not None:
        return _raw(args)
    from benchfit.burnin.trend import trend

    found = trend(args.log, _build, limits=args.limit, unit=args.unit)
    if not found.records:
        raise LogError(f"{args.log}: the log holds no records yet.", path=args.log)
    if "-" not in (args.json, args.csv):
        from benchfit.show.trend import render

        streams.emit(render(found, width=streams.width(), colour=streams.colour()))
    _write(args, found)
    return 0


def _build(sheet: str, nodes: Sequence[str]) -> Build:
    from benchfit import pipeline
    from benchfit.sheet import Sheet

    return pipeline.expected(Sheet.parse(sheet), nodes)


def _write(args: argparse.Namespace, found: Trend) -> None:
    if args.json is not None:
        from benchfit.show.record import dumps
        from benchfit.show.trend_record import record

        text = dumps(record(found))
        if args.json == "-":
            streams.emit(text)
        else:
            streams.write(args.json, f"{text}\n")
    if args.csv is not None:
        from benchfit.burnin.reader import LogReader

        with LogReader.open(args.log) as log:
            _table(args, log)
    if args.plot is not None:
        from benchfit.show.trend_plot import plot

        plot(found, args.plot)


def _table(args: argparse.Namespace, log: LogReader) -> None:
    from benchfit.show.trend_record import csv_lines

    lines: Iterator[str] = csv_lines(log.quantities(), log.rows(args.unit), has_units=log.units() != [""])
    if args.csv == "-":
        for line in lines:
            if not streams.emit(line.removesuffix("\n")):
                break
        return
    with streams.replacing(args.csv) as scratch, scratch.open("w", encoding="utf-8", newline="\n") as file:
        file.writelines(lines)


def _raw(args: argparse.Namespace) -> int:
    from benchfit.burnin.reader import LogReader

    seq, path = args.raw
    if not seq.isdecimal():
        raise UsageError(f"--raw {seq}: the number of a record is needed, as in --raw 17 capture.csv")
    with LogReader.open(args.log) as log:
        capture = log.capture(int(seq))
    import numpy as np

    head = ",".join(["time (s)", *(f"{c.name} ({c.unit})" if c.unit else c.name for c in capture.channels)])
    table = np.column_stack([capture.time, *(c.values for c in capture.channels)])
    rows = [head, *(",".join("" if x != x else repr(x) for x in row) for row in table.tolist())]
    streams.write(path, "\n".join(rows) + "\n")
    return 0


def _upgrade(args: argparse.Namespace) -> int:
    from pathlib import Path

    from benchfit import __version__
    from benchfit.burnin.schema import upgraded

    upgraded(Path(args.log), Path(args.upgrade), f"benchfit {__version__}")
    if not args.quiet:
        streams.say(f"{args.upgrade}: the log as this program reads it; {args.log} is as it was")
    return 0
