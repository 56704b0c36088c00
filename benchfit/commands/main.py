"""``benchfit``: which command, and what becomes of its errors."""

from __future__ import annotations

import argparse
import importlib
import sys
from collections.abc import Sequence

from benchfit.commands import streams
from benchfit.commands.options import Parser
from benchfit.errors import BenchfitError
from benchfit.errors import fault as fault

COMMANDS = {
    "poll": ("benchfit.commands.poll", "the same, live, from an instrument over VISA"),
    "burnin": ("benchfit.commands.burnin", "measure on a schedule into a log that survives a crash"),
    "trend": ("benchfit.commands.trend", "what a log says: drift, its cause, stability, alarms"),
    "predict": ("benchfit.commands.predict", "what a build should do before power is applied"),
    "circuits": ("benchfit.commands.circuits", "the circuits, their parts, nodes, equations, defaults"),
    "sheet": ("benchfit.commands.sheet", "a commented starter build sheet"),
}
MAIN = "benchfit.commands.explain"
FLAGS = ("-v", "-vv", "-q", "--verbose", "--quiet")
"""Options that may stand before a command's name."""
_ABOUT = """\
Says why a relaxation oscillator misses its target: which part is to blame, how sure that is,
what to read next, what to change. Reads a capture, measures it, fits the circuit, explains."""
_CLOSING = """\
exit status: 0 done, whatever the verdict; 1 with --check, verdict fail or conditional; 2 the command
line or the build sheet cannot be used; 3 a capture cannot be read; 4 the instrument cannot be reached
or answers wrongly; 5 the log cannot be written"""


def main(argv: Sequence[str] | None = None) -> int:
    """Run one command line (without the program's name); its exit status."""
    words = list(sys.argv[1:] if argv is None else argv)
    streams.prepare()
    is_verbose = any(word in ("-v", "-vv", "--verbose") for word in words)
    if not is_verbose:
        # A library's warnings are for its programmers; what a user must know is in the result.
        import warnings

        warnings.simplefilter("ignore")
    try:
        status = _run(words)
        sys.stdout.flush()
        return status
    except BenchfitError as error:
        streams.say(error.says)
        return error.status
    except KeyboardInterrupt:
        streams.say("interrupted")
        return 130
    except SystemExit as end:
        return end.code if isinstance(end.code, int) else 0
    except Exception as error:
        if is_verbose:
            import traceback

            traceback.print_exc()
        streams.say(fault(error))
        return BenchfitError.status


def _run(words: list[str]) -> int:
    first = next((word for word in words if word not in FLAGS), None)
    if first in COMMANDS:
        name = str(first)
        words.remove(name)
        module = importlib.import_module(COMMANDS[name][0])
        parser = Parser(prog=f"benchfit {name}", description=module.__doc__, formatter_class=_Formatter)
        module.add_arguments(parser)
    else:
        name = ""
        module = importlib.import_module(MAIN)
        parser = Parser(
            prog="benchfit", usage=_usage(), description=_ABOUT, epilog=_CLOSING, formatter_class=_Formatter
        )
        module.add_arguments(parser)
        words = module.arrange(parser, words)
    args = parser.parse_args(words)
    if getattr(args, "verbose", 0):
        import logging

        level = logging.DEBUG if args.verbose > 1 else logging.INFO
        logging.basicConfig(level=level, format="benchfit: %(message)s", stream=sys.stderr)
    status: int = module.run(args)
    return status


def _usage() -> str:
    listed = "\n".join(f"  benchfit {name:<10} {says}" for name, (_, says) in COMMANDS.items())
    main_job = "benchfit CAPTURE… [--build SHEET] [options]"
    return f"{main_job}\n\nother commands (benchfit COMMAND --help):\n{listed}"


class _Formatter(argparse.RawDescriptionHelpFormatter):
    def __init__(self, prog: str) -> None:
        super().__init__(prog, max_help_position=26)
