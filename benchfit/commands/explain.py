"""Read captures, measure them, fit the circuit, explain."""

from __future__ import annotations

import argparse
from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from benchfit.commands import completion, options
from benchfit.errors import UsageError

if TYPE_CHECKING:
    from benchfit.commands.work import Outcome, Task
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
    group = parser.add_argument_group("shell")
    group.add_argument(
        "--completion", metavar="SHELL", action=completion.Action, choices=completion.SHELLS,
        help='script that completes command lines in bash or zsh: eval "$(benchfit --completion bash)"',
    )  # fmt: skip


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
    from benchfit.commands.results import LotResults, Results
    from benchfit.commands.work import Task

    task = Task(captures=tuple(captures), sheet=sheet, layout=options.layout_of(args),
                plot=args.plot, report=args.report, as_found=_as_found(args.as_found))  # fmt: skip
    if args.joint or len(captures) == 1:
        return Results(args).take(_outcomes(args, [task]))
    one = replace(task, plot=None, report=None, is_brief=not args.verbose)
    tasks = [replace(one, captures=(paths,)) for paths in captures]
    return LotResults(args, sheet, len(tasks)).take(_outcomes(args, tasks))


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
        if path.lower().endswith(".toml"):
            raise UsageError(f"{path}: this is no capture by its name; a build sheet goes behind --build")
        if path == "-" or Path(path).exists():
            found.append(paths)
            continue
        if any(letter in path for letter in "*?["):
            import glob

            matches = sorted(glob.glob(path, recursive=True))
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

    if word == "help":
        raise UsageError("help: benchfit --help lists what can be given, benchfit COMMAND --help for a command")
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


def _outcomes(args: argparse.Namespace, tasks: Sequence[Task]) -> Iterator[Outcome]:
    """What came of each task, in order."""
    from benchfit.commands.work import in_processes, on_cluster

    if args.cluster is not None:
        return on_cluster(args.cluster, tasks)
    from benchfit.workers import usual_jobs

    jobs = min(args.jobs or (usual_jobs() if len(tasks) >= _MANY else 1), len(tasks))
    is_piped = any(task.captures[0][0] == "-" for task in tasks)
    return in_processes(1 if is_piped else jobs, tasks)
