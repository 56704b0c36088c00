"""Measure and explain live, from an instrument over VISA, until Ctrl-C or --count."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from benchfit.commands import options, streams
from benchfit.errors import QuantityError, UsageError

if TYPE_CHECKING:
    from benchfit.instrument import Dialect
    from benchfit.sheet import Sheet


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of ``benchfit poll``."""
    parser.add_argument("resource", metavar="RESOURCE", nargs="?", help="VISA resource string")
    group = parser.add_argument_group("the instrument")
    group.add_argument(
        "--channel", metavar="NODE=CH1", action="append", default=[],
        help="what is clipped where; as often as needed (default: the sheet's [channels], else CH1)",
    )  # fmt: skip
    group.add_argument("--dialect", metavar="FILE", help="how it is spoken to (TOML; default: SCPI-1999)")
    group.add_argument("--visa-library", metavar="NAME", default="@py", help="VISA library (default: @py)")
    group.add_argument("--list", action="store_true", help="list the resources found, and end")
    group.add_argument(
        "--try", dest="try_out", action="store_true", help="connect, identify, read one capture, and end"
    )
    options.add_sheet(parser)
    group = parser.add_argument_group("how long and how often")
    group.add_argument("--count", metavar="N", type=int, help="end after so many records, failed ones too")
    group.add_argument("--every", metavar="TIME", help="from one acquisition to the next: 10s, 1m")
    group.add_argument("--give-up", metavar="TIME", help="end after so long without a capture: 5m")
    group.add_argument(
        "--trim", metavar="PART=LOW..HIGH", help="help with a trimmer of this range: --trim R=1k..20k"
    )
    options.add_results(parser, csv="one row per acquisition")
    options.add_talk(parser)


def run(args: argparse.Namespace) -> int:
    """Poll until Ctrl-C or --count; 0, or the first failure's status where no capture came at all."""
    if args.list:
        return _list(args.visa_library)
    if args.resource is None:
        says = "name the instrument, as in benchfit poll TCPIP::192.0.2.7::5025::SOCKET"
        raise UsageError(f"{says}; benchfit poll --list shows those found")
    options.check_outputs(args)
    count, every, give_up = _limits(args)
    trim = _trim(args.trim)
    sheet = _sheet(args, trim)
    channels = [choice.name for choice in sheet.channels.values()] if sheet is not None else []
    dialect = _dialect(args.dialect)
    if args.try_out:
        return _try_out(args, channels or ["CH1"], dialect)
    from benchfit.commands.polling import Plan, Polling
    from benchfit.instrument import Session

    trimming = None
    if trim is not None:
        from benchfit import pipeline

        if sheet is None:
            raise UsageError(
                "--trim needs the build: give --build SHEET, or --set keys that stand in for one"
            )
        trimming = pipeline.trimming(sheet, *trim)
    session = Session(args.resource, channels or ["CH1"], dialect=dialect, library=args.visa_library)
    plan = Plan(
        count=count, every=every, give_up=give_up, json=args.json, csv=args.csv, plot=args.plot,
        report=args.report, quiet=args.quiet, verbose=args.verbose,
    )  # fmt: skip
    return Polling(session, sheet, plan, trimming).run()


def _limits(args: argparse.Namespace) -> tuple[int | None, float | None, float | None]:
    from benchfit.quantity import duration

    if args.count is not None and args.count < 1:
        raise UsageError(f"--count {args.count}: at least one acquisition is needed")
    found = []
    for option, text in (("--every", args.every), ("--give-up", args.give_up)):
        seconds = None if text is None else duration(text, key=option)
        if seconds is not None and not 0 < seconds < float("inf"):
            raise UsageError(f"{option} {text}: give a time above 0, such as 10s or 5m")
        found.append(seconds)
    return args.count, found[0], found[1]


def _trim(text: str | None) -> tuple[str, float, float] | None:
    """The trimmer's name and its ends (SI)."""
    if text is None:
        return None
    name, equals, limits = (word.strip() for word in text.partition("="))
    low, dots, high = limits.partition("..")
    if not (name and equals and dots):
        raise UsageError(f"--trim {text}: write the part and its two ends, such as R=1k..20k")
    ends = sorted(_end(end, text) for end in (low, high))
    if not 0 <= ends[0] < ends[1]:
        raise UsageError(f"--trim {text}: the ends must be different and not below 0")
    return name, ends[0], ends[1]


def _end(text: str, given: str) -> float:
    from benchfit.quantity import parse

    for unit in ("Ω", "F", "V", "A", "1"):
        try:
            return parse(text, unit, key="--trim").nominal
        except QuantityError:
            continue
    raise UsageError(f'--trim {given}: "{text.strip()}" is not a value; write for instance 1k, 4k7 or 22p')


def _sheet(args: argparse.Namespace, trim: tuple[str, float, float] | None) -> Sheet | None:
    """The sheet, with --channel as its [channels] and a trimmer's range as its limits.

    A trimmer may stand anywhere between its ends: its range is no sign of a fault.
    """
    from benchfit.sheet import Sheet

    overrides = list(args.set)
    given = {}
    for text in args.channel:
        node, equals, name = (word.strip() for word in text.partition("="))
        if not (node and equals and name):
            raise UsageError(f"--channel {text}: write NODE=NAME, such as capacitor=CH1")
        given[node] = name
    if args.build is None and not overrides and not given:
        return None
    sheet = Sheet.load(args.build, overrides)
    for node, name in given.items():
        has_more = node in sheet.channels and sheet.channels[node].coupling != "dc"
        overrides.append(f"channels.{node}{'.name' if has_more else ''}={name}")
    if trim is not None and trim[0] in sheet.parts:
        overrides.append(f"parts.{trim[0]}={_range(sheet.parts[trim[0]].nominal, trim[1], trim[2])}")
    return Sheet.load(args.build, overrides) if len(overrides) > len(args.set) else sheet


def _range(nominal: float, low: float, high: float) -> str:
    """A trimmer's range as limits about its nominal, where that lies between them."""
    low = max(low, 1e-3 * high)
    if not low < nominal < high:
        return f"{low!r}..{high!r}"
    return f"{nominal!r} -{100 * (1 - low / nominal):.6f}%/+{100 * (high / nominal - 1):.6f}%"


def _dialect(path: str | None) -> Dialect:
    from benchfit.instrument import SCPI_1999, Dialect

    return SCPI_1999 if path is None else Dialect.load(path)


def _list(library: str) -> int:
    from benchfit.instrument import list_resources

    found, reasons = list_resources(library)
    for name in found:
        streams.emit(name)
    if not found:
        streams.say(f"no resource found by {library}; an instrument that is not listed can still be named:")
        streams.say("TCPIP::ADDRESS::5025::SOCKET (raw sockets never show in a list), TCPIP::ADDRESS::INSTR")
    for reason in reasons:
        streams.say(f"not looked for: {reason}")
    return 0


def _try_out(args: argparse.Namespace, channels: list[str], dialect: Dialect) -> int:
    from benchfit.instrument import trial

    status = 0
    for step in trial(args.resource, channels, dialect=dialect, library=args.visa_library):
        streams.emit(f"{'ok ' if step.worked else 'no '} {step.doing}: {step.says}")
        if step.error is not None and not status:
            status = step.error.status
    return status
