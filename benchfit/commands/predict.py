"""What a build should do before power is applied: frequency, duty, tolerance band, hazards."""

from __future__ import annotations

import argparse

from benchfit.commands import options, streams
from benchfit.errors import UsageError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """``benchfit predict SHEET``."""
    parser.add_argument("sheet", metavar="SHEET", nargs="?", help="build sheet (TOML)")
    options.add_overrides(parser)
    parser.add_argument("--json", metavar="FILE", help="prediction as JSON (- for standard output)")
    options.add_talk(parser)


def run(args: argparse.Namespace) -> int:
    """Predict one build."""
    sheet = options.sheet_of(args, args.sheet)
    if sheet is None:
        raise UsageError("name the build sheet: benchfit predict SHEET (benchfit sheet CIRCUIT makes one)")
    if args.json not in (None, "-"):
        streams.check_writable(args.json)
    from benchfit import pipeline
    from benchfit.show.record import dumps

    prediction = pipeline.predict(sheet)
    if args.json is not None:
        line = f"{dumps(prediction)}\n"
        if args.json != "-":
            streams.write(args.json, line)
        else:
            streams.emit(line.removesuffix("\n"))
            return 0
    from benchfit.show.design import render_prediction

    streams.emit(render_prediction(prediction, width=streams.width(), colour=streams.colour()))
    return 0
