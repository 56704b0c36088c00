"""Read captures, measure them, fit the circuit, explain."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from benchfit.commands import options, streams
from benchfit.errors import UsageError

if TYPE_CHECKING:
    from benchfit.commands.work import Outcome, Task
    from benchfit.explain.result import Explanation
    from benchfit.sheet import Sheet

# Between a capture and the files that belong to it, on the way through argparse.
_JOINT = "\0"
# From so many captures on, processes are worth their start.
_MANY = 16


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of the main job."""
    group = parser.add_argument_group("captures")
    group.add_argument(
        "captures", metavar="CAPTURE", nargs="*", type=lambda text: text.split(_JOINT),
        help="a scope's CSV file; - for standard input",
    )  # fmt: skip
    group.add_argument(
        "--with", metavar="FILE", dest="also",
        help="one more file of the capture named before it (an instrument that writes a file per channel)",
    )  # fmt: skip
    group.add_argument("--joint", action="store_true", help="the captures are of one build: fit together")
    options.add_sheet(parser)
    options.add_layout(parser)
    options.add_results(parser)
    group = parser.add_argument_group("how")
    group.add_argument(
        "--as-found", metavar="FILE",
        help="record (--json) of the build before a change: says what the change did",
    )  # fmt: skip
    group.add_argument("--check", action="store_true", help="exit with 1 where the verdict is not pass")
    group.add_argument("--jobs", metavar="N", type=int, help="processes to work on many captures with")
    group.add_argument("--cluster", metavar="ADDRESS", help="dask scheduler to work on many captures with")
    options.add_talk(parser)


def arrange(parser: argparse.ArgumentParser, words: Sequence[str]) -> list[str]:
    """The words with all captures last, each joined with the files that ``--with`` adds to it.

    argparse has no notion of an option that belongs to the positional before it.

    Raises
    ------
    UsageError
        Where ``--with`` has no capture before it or no file after it.
    """
    takes_value = {name: a.nargs is None for a in parser._actions for name in a.option_strings}
    captures: list[str] = []
    rest: list[str] = []
    waiting = list(words)
    while waiting:
        word = waiting.pop(0)
        if word == "--":
            captures += waiting
            break
        name, equals, value = word.partition("=")
        if name == "--with":
            if not equals and not waiting:
                raise UsageError("--with needs the name of a file after it")
            if not captures:
                raise UsageError("--with adds a file to the capture named before it, and there is none")
            captures[-1] += _JOINT + (value if equals else waiting.pop(0))
        elif word == "-" or not word.startswith("-"):
            captures.append(word)
        else:
            rest.append(word)
            if takes_value.get(name) and not equals and waiting:
                rest.append(waiting.pop(0))
    return [*rest, "--", *captures]


def run(args: argparse.Namespace) -> int:
    """Explain every capture; the first failure's status, else 0 (1: --check and a verdict not passed)."""
    options.check_outputs(args)
    captures = _found(args.captures)
    sheet = options.sheet_of(args)
    _check(args, captures, sheet)
    from benchfit.commands.work import Task

    task = Task(captures=tuple(captures), sheet=sheet, layout=options.layout_of(args),
                plot=args.plot, report=args.report, as_found=_as_found(args.as_found))  # fmt: skip
    tasks = [task] if args.joint else [
        replace(task, captures=(paths,), plot=_each(args.plot, number, captures),
                report=_each(args.report, number, captures))
        for number, paths in enumerate(captures)
    ]  # fmt: skip
    return _Results(args).take(_outcomes(args, tasks))


def _found(captures: Sequence[list[str]]) -> list[list[str]]:
    """The captures, patterns expanded where the shell has not done so.

    Raises
    ------
    UsageError
        Where there is none, or a word is close to a command's name and no file.
    """
    if not captures:
        raise UsageError("name a capture file, or a command; benchfit --help lists them")
    found: list[list[str]] = []
    for paths in captures:
        path = paths[0]
        if path == "-" or Path(path).exists():
            found.append(paths)
            continue
        if any(letter in path for letter in "*?["):
            import glob

            matches = sorted(glob.glob(path))
            if not matches:
                raise UsageError(f"{path}: no file has a name like this")
            found += [[match, *paths[1:]] for match in matches]
            continue
        _check_command(path)
        found.append(paths)
    return found


def _as_found(path: str | None) -> dict[str, Any] | None:
    """The record of before.

    Raises
    ------
    UsageError
        Where the file cannot be read, or holds no such record.
    """
    if path is None:
        return None
    from benchfit.show.record import loads

    try:
        text = Path(path).read_bytes().decode("utf-8-sig", "replace")
    except OSError as error:
        says = f"--as-found {path}: cannot be read: {error.strerror or error}"
        raise UsageError(says, path=path) from None
    return loads(text, path)


def _check_command(word: str) -> None:
    from difflib import get_close_matches

    from benchfit.commands.main import COMMANDS

    close = get_close_matches(word, COMMANDS, n=1, cutoff=0.7)
    if close:
        raise UsageError(f'{word}: neither a file nor a command; the nearest command is "{close[0]}"')


def _check(args: argparse.Namespace, captures: Sequence[Sequence[str]], sheet: Sheet | None) -> None:
    numbers = sorted(sheet.captures) if sheet is not None else []
    if args.joint and numbers and numbers[-1] > len(captures):
        raise UsageError(f"the build sheet has [capture.{numbers[-1]}], yet {len(captures)} are given")
    if numbers and not args.joint and len(captures) > 1:
        raise UsageError(f"the build sheet's [capture.{numbers[0]}] counts only with --joint; add it")
    if args.as_found is not None and len(captures) > 1 and not args.joint:
        raise UsageError("--as-found is the record of one build; give one capture, or --joint")
    if args.jobs is not None and args.jobs < 1:
        raise UsageError(f"--jobs {args.jobs}: at least one process is needed")
    if sum(paths[0] == "-" for paths in captures) > 1:
        raise UsageError("standard input (-) can be read once only")


def _each(path: str | None, number: int, captures: Sequence[Sequence[str]]) -> str | None:
    """The name of one capture's own file: with several captures, the capture's name goes into it."""
    if path is None or len(captures) == 1:
        return path
    name = Path(path)
    stems = [Path(paths[0]).stem for paths in captures]
    tail = f"-{number + 1}" if stems.count(stems[number]) > 1 else ""
    return str(name.with_name(f"{name.stem}-{stems[number]}{tail}{name.suffix}"))


def _outcomes(args: argparse.Namespace, tasks: Sequence[Task]) -> Iterator[Outcome]:
    """What came of each task, in order."""
    from benchfit.commands.work import in_processes, on_cluster, work

    if args.cluster is not None:
        return on_cluster(args.cluster, tasks)
    import os

    usual = min(os.cpu_count() or 1, 8) if len(tasks) >= _MANY else 1
    jobs = min(args.jobs or usual, len(tasks))
    is_piped = any(task.captures[0][0] == "-" for task in tasks)
    return in_processes(jobs, tasks) if jobs > 1 and not is_piped else map(work, tasks)


class _Results:
    """Where the outcomes go, one after the other."""

    def __init__(self, args: argparse.Namespace) -> None:
        self.args = args
        self.is_text = "-" not in (args.json, args.csv)
        files = (args.json, args.csv, args.plot, args.report)
        self.has_files = any(path not in (None, "-") for path in files) or args.csv == "-"
        self.records: list[dict[str, Any]] = []
        self.status = 0

    def take(self, outcomes: Iterable[Outcome]) -> int:
        is_checked_bad = False
        is_read = True
        for number, outcome in enumerate(outcomes):
            self.records.append(outcome.record)
            is_checked_bad |= outcome.record.get("verdict") in ("fail", "conditional")
            if outcome.error is not None:
                self.status = self.status or outcome.error.status
                streams.say(outcome.error.says)
            self.talk(outcome)
            if self.args.json == "-":
                is_read = is_read and streams.emit(_line(outcome.record))
            elif outcome.explanation is not None and self.is_text:
                is_read = is_read and self.show(outcome.explanation, is_first=number == 0)
            if not is_read and not self.has_files:
                break  # whoever read standard output has seen enough, and nothing else is wanted
        self.write()
        return self.status or int(is_checked_bad and self.args.check)

    def show(self, explanation: Explanation, *, is_first: bool) -> bool:
        from benchfit.show.text import render

        text = render(explanation, width=streams.width(), colour=streams.colour())
        return streams.emit(text if is_first else f"\n{text}")

    def talk(self, outcome: Outcome) -> None:
        if self.args.verbose and not self.args.quiet:
            for path, notes in outcome.notes:
                for key, value in notes.items():
                    streams.say(f"{path}: {key}: {value}")
            if outcome.trace:
                print(outcome.trace, file=sys.stderr)

    def write(self) -> None:
        if self.args.json not in (None, "-"):
            streams.write(self.args.json, "".join(f"{_line(record)}\n" for record in self.records))
        if self.args.csv is not None:
            from benchfit.commands.table import as_csv

            table = as_csv(self.records)
            if self.args.csv == "-":
                streams.emit(table.removesuffix("\n"))
            else:
                streams.write(self.args.csv, table)


def _line(record: dict[str, Any]) -> str:
    from benchfit.show.record import dumps

    return dumps(record)
