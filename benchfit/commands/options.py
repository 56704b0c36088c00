"""Options that several commands share, and what they say in the library's terms."""

from __future__ import annotations

import argparse
import re
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, NoReturn

from benchfit.errors import UsageError

if TYPE_CHECKING:
    from benchfit.sheet import Sheet


class Parser(argparse.ArgumentParser):
    """An argument parser that raises UsageError, and names the option that was probably meant."""

    def __init__(self, **options: Any) -> None:
        super().__init__(allow_abbrev=False, add_help=False, **options)

    def error(self, message: str) -> NoReturn:
        unknown = re.match(r"unrecognized arguments: (\S+)", message)
        if unknown:
            message = f"unknown option {unknown[1]}{self._hint(unknown[1])}"
            if not unknown[1].startswith("-"):
                message = f"there is no place for {unknown[1]}"
        raise UsageError(f"{message}; {self.prog} --help lists what can be given")

    def _hint(self, word: str) -> str:
        from difflib import get_close_matches

        known = [option for action in self._actions for option in action.option_strings]
        close = get_close_matches(word.partition("=")[0], known, n=1, cutoff=0.5)
        return f", the nearest known one is {close[0]}" if close else ""


class _Version(argparse.Action):
    def __call__(self, parser: argparse.ArgumentParser, *rest: object) -> None:
        from benchfit import __version__

        print(f"benchfit {__version__}")
        parser.exit()


def add_sheet(parser: argparse.ArgumentParser) -> None:
    """--build and --set."""
    group = parser.add_argument_group("what was meant to be built")
    group.add_argument("--build", metavar="SHEET", help="build sheet (TOML)")
    add_overrides(group)


def add_overrides(parser: Any) -> None:
    """--set alone."""
    parser.add_argument(
        "--set", metavar="KEY=VALUE", action="append", default=[],
        help="override a key of the sheet, or stand in for one: --set parts.R=1M; as often as needed",
    )  # fmt: skip


def add_layout(parser: argparse.ArgumentParser) -> None:
    """What a file does not tell about its own layout: --columns, --interval, --frame."""
    group = parser.add_argument_group("files whose layout cannot be told")
    group.add_argument("--columns", metavar="NAME=N,…", help="which column is what, from 0: time=0,CH1=1")
    group.add_argument("--interval", metavar="TIME", help="time between two samples, as in 1us")
    group.add_argument("--frame", metavar="N", type=int, help="which of a file's frames to read, from 1")


def add_results(parser: argparse.ArgumentParser, *, csv: str = "one row per capture") -> None:
    """--json, --plot, --report, --csv."""
    group = parser.add_argument_group("results")
    group.add_argument("--json", metavar="FILE", help="result record as JSON (- for standard output)")
    group.add_argument("--csv", metavar="FILE", help=f"table, {csv} (- for standard output)")
    group.add_argument("--plot", metavar="FILE", help="figure; .png, .svg or .pdf by its ending")
    group.add_argument("--report", metavar="FILE", help="self-contained HTML page")


def add_talk(parser: argparse.ArgumentParser) -> None:
    """-v, -q, --version, --help."""
    group = parser.add_argument_group("talk")
    group.add_argument("-v", "--verbose", action="count", default=0, help="say how things were understood")
    group.add_argument("-q", "--quiet", action="store_true", help="say nothing but results and errors")
    group.add_argument("--version", action=_Version, nargs=0, help="print the version and end")
    group.add_argument("-h", "--help", action="help", help="print this and end")


def sheet_of(args: argparse.Namespace, path: str | None = None) -> Sheet | None:
    """The build sheet that --build (or ``path``) and --set describe; None where neither is given.

    Raises
    ------
    SheetError
        Where it cannot be used.
    """
    path = path if path is not None else getattr(args, "build", None)
    if path is None and not args.set:
        return None
    from benchfit.sheet import Sheet

    return Sheet.load(path, args.set)


def layout_of(args: argparse.Namespace) -> dict[str, Any]:
    """--columns, --interval and --frame as keywords of :func:`benchfit.read`; only those that were given.

    Raises
    ------
    UsageError, QuantityError
        Where one is not understood.
    """
    found: dict[str, Any] = {}
    if args.columns is not None:
        found["columns"] = _columns(args.columns)
    if args.interval is not None:
        from benchfit.quantity import parse

        found["interval"] = parse(args.interval, "s", key="--interval").nominal
        if found["interval"] <= 0:
            raise UsageError(f"--interval {args.interval}: the time between samples must be above 0")
    if args.frame is not None:
        if args.frame < 1:
            raise UsageError(f"--frame {args.frame}: frames are counted from 1")
        found["frame"] = args.frame
    return found


def _columns(text: str) -> dict[str, int | str]:
    found: dict[str, int | str] = {}
    for entry in text.split(","):
        name, equals, column = (word.strip() for word in entry.partition("="))
        if not (name and equals and column):
            raise UsageError(f'--columns {text}: "{entry}" is not NAME=N; write for instance time=0,CH1=1')
        if name in found:
            raise UsageError(f"--columns {text}: {name} is given twice")
        found[name] = int(column) if column.isascii() and column.isdigit() else column
    return found


def check_outputs(args: argparse.Namespace, plots: Sequence[str] = (".png", ".svg", ".pdf")) -> None:
    """Refuse outputs that could not be written, before any work is done.

    Raises
    ------
    UsageError
    """
    from benchfit.commands.streams import check_writable

    if args.json == "-" and args.csv == "-":
        raise UsageError("--json - and --csv - both want standard output; give one of them a file")
    for path in (args.json, args.csv, args.plot, args.report):
        if path is not None and path != "-":
            check_writable(path)
    for option, path in (("--plot", args.plot), ("--report", args.report)):
        if path == "-":
            raise UsageError(f"{option} -: give the name of a file")
    if args.plot is not None and not args.plot.lower().endswith(tuple(plots)):
        raise UsageError(f"--plot {args.plot}: the name must end in one of {', '.join(plots)}")
