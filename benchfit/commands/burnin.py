"""Measure one build (or several) again and again, on a schedule, into a log that survives a crash.

SOURCE is a VISA resource, or a folder into which captures fall. A record counts only when it is on the disk.
Killed at any instant, the same command goes on in the same log. Ctrl-C ends it in order."""

from __future__ import annotations

import argparse
import os
import shlex
import signal
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from benchfit.commands import options, streams
from benchfit.errors import UsageError

if TYPE_CHECKING:
    from benchfit.burnin.alarms import Limit
    from benchfit.burnin.contents import Identity
    from benchfit.burnin.log import LogWriter
    from benchfit.burnin.loop import Logged, Plan
    from benchfit.burnin.source import Source
    from benchfit.capture.model import Capture
    from benchfit.sheet import Sheet

_EVERY = 60.0


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The options of ``benchfit burnin``."""
    parser.add_argument("source", metavar="SOURCE", nargs="?", help="VISA resource, or a folder of captures")
    parser.add_argument(
        "--unit", metavar="NAME=SOURCE", action="append", default=[],
        help="one of several units in one run; as often as needed, in place of SOURCE",
    )  # fmt: skip
    parser.add_argument("--log", metavar="FILE", required=True, help="the log: made, or gone on with")
    group = parser.add_argument_group("when")
    group.add_argument(
        "--every", metavar="TIME", help="between acquisitions (60s; a folder is looked into: 1s)"
    )
    group.add_argument("--for", metavar="TIME", dest="time", help="how long, as in 48h")
    group.add_argument("--count", metavar="N", type=int, help="how many records, failed ones too")
    group.add_argument("--give-up", metavar="TIME", help="end after so long without a capture, as in 5m")
    group = parser.add_argument_group("limits")
    group.add_argument(
        "--limit", metavar="NAME=LIMITS", action="append", default=[],
        help="alarm beyond: frequency=2%% (of the first record), frequency=11.5..12.5Hz; measured or part",
    )  # fmt: skip
    group.add_argument("--on-alarm", choices=("go", "stop"), default="go", help="go on (the default) or stop")
    group.add_argument(
        "--keep", choices=("all", "alarms", "none"), default="alarms",
        help="which raw captures go into the log (default: those of alarms and failures)",
    )  # fmt: skip
    group.add_argument("--note", metavar="TEXT", action="append", default=[], help="ambient, lot, operator")
    options.add_sheet(parser)
    group = parser.add_argument_group("instrument")
    group.add_argument(
        "--channel", metavar="NODE=CHANNEL", action="append", default=[],
        help="what to read: capacitor=CH1 (default: the sheet's [channels])",
    )  # fmt: skip
    group.add_argument("--dialect", metavar="FILE", help="how the instrument is spoken to (TOML)")
    group.add_argument("--visa-library", metavar="NAME", default="@py", help="VISA library (default: @py)")
    options.add_layout(parser)
    group = parser.add_argument_group("results")
    group.add_argument(
        "--json", metavar="FILE", help="every record as a line of JSON (- for standard output)"
    )
    options.add_talk(parser)


def run(args: argparse.Namespace) -> int:
    """Measure until it is complete or told to end; 0."""
    # Small matrices only, and the machine may have other work to do while it waits for captures.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    if args.json not in (None, "-"):
        streams.check_writable(args.json)
    sources = _sources(args)
    sheet = _sheet(args)
    plan = _plan(args, sheet, sources)
    from benchfit.burnin.contents import Wanted
    from benchfit.burnin.log import LogWriter

    wanted = Wanted(plan.every, plan.count, plan.time)
    log = LogWriter.open(args.log, _identity(sheet), sources, wanted)
    why = "failed"
    try:
        for text in args.note:
            log.note(text)
        if plan.limits:
            log.bounds({limit.quantity: limit.text for limit in plan.limits})
        _resumed(args, log)
        why = _measure(args, plan, log, sheet, sources)
    except KeyboardInterrupt:
        why = "stopped"
    finally:
        log.close(why)
    _closing(args, log, plan, why)
    return 0


# --- what was asked for -----------------------------------------------------------------------------------


def _sources(args: argparse.Namespace) -> dict[str, str]:
    """Unit → source; one unit without a name is ""."""
    if bool(args.source) == bool(args.unit):
        raise UsageError("name one SOURCE (a VISA resource or a folder), or several with --unit NAME=SOURCE")
    if args.source:
        return {"": args.source}
    found: dict[str, str] = {}
    for entry in args.unit:
        name, equals, source = (word.strip() for word in entry.partition("="))
        if not (name and equals and source):
            raise UsageError(f"--unit {entry}: write it as NAME=SOURCE, for instance 0017=captures/0017")
        if name in found or source in found.values():
            raise UsageError(f"--unit {entry}: that name or source is given twice")
        found[name] = source
    return found


def _sheet(args: argparse.Namespace) -> Sheet | None:
    """The build sheet; --channel stands in for its [channels]."""
    from benchfit.sheet import Sheet

    given: dict[str, str] = {}
    for entry in args.channel:
        node, equals, channel = (word.strip() for word in entry.partition("="))
        if not (node and equals and channel):
            raise UsageError(f"--channel {entry}: write it as NODE=CHANNEL, for instance capacitor=CH1")
        given[node] = channel
    sheet = options.sheet_of(args)
    if not given:
        return sheet
    overrides = list(args.set)
    for node, channel in given.items():
        has_more = sheet is not None and node in sheet.channels and sheet.channels[node].coupling != "dc"
        overrides.append(f"channels.{node}{'.name' if has_more else ''}={channel}")
    args.set = overrides
    return Sheet.load(args.build, overrides)


def _plan(args: argparse.Namespace, sheet: Sheet | None, sources: Mapping[str, str]) -> Plan:
    from benchfit.burnin.loop import LOOK, Plan
    from benchfit.burnin.source import is_resource
    from benchfit.quantity import duration

    def seconds(text: str | None, option: str) -> float | None:
        return None if text is None else duration(text, key=option)

    every = seconds(args.every, "--every")
    if every is None:
        every = _EVERY if any(is_resource(source) for source in sources.values()) else LOOK
    if args.count is not None and args.count < 1:
        raise UsageError(f"--count {args.count}: at least one record is needed")
    time, give_up = seconds(args.time, "--for"), seconds(args.give_up, "--give-up")
    if time is not None and time <= 0:
        raise UsageError(f"--for {args.time}: the time must be above 0")
    return Plan(every, args.count, time, _limits(args, sheet), args.keep, args.on_alarm == "stop", give_up)


def _limits(args: argparse.Namespace, sheet: Sheet | None) -> tuple[Limit, ...]:
    if not args.limit:
        return ()
    from benchfit.burnin.alarms import MEASURED, parse_limit

    circuit = sheet.circuit if sheet is not None else None
    units = {**({part.name: part.unit for part in circuit.parts} if circuit else {}), **MEASURED}
    found = {limit.quantity: limit for limit in (parse_limit(text, units) for text in args.limit)}
    if len(found) != len(args.limit):
        raise UsageError("--limit: give each quantity one pair of limits")
    return tuple(found.values())


def _identity(sheet: Sheet | None) -> Identity:
    from benchfit import __version__
    from benchfit.burnin.contents import Identity

    program = f"benchfit {__version__}"
    if sheet is None:
        return Identity("", None, "", "", program)
    circuit = sheet.circuit.name if sheet.circuit is not None else None
    return Identity(sheet.title, circuit, sheet.dump(), sheet.digest, program)


# --- doing it ---------------------------------------------------------------------------------------------


def _measure(
    args: argparse.Namespace, plan: Plan, log: LogWriter, sheet: Sheet | None, sources: Mapping[str, str]
) -> str:
    from benchfit import pipeline
    from benchfit.burnin.loop import Burnin

    def explain(capture: Capture) -> dict[str, Any]:
        return pipeline.explain(capture, sheet).record()

    _warm_up()
    opened = {name: _source(args, name, source, log, sheet) for name, source in sources.items()}
    stop = threading.Event()
    with _ended_by_signals(stop), _Output(args, plan, log, stop) as output:
        burnin = Burnin(plan, opened, log, explain, output.take, output.say, _changed(args, sheet), stop)
        try:
            return burnin.run()
        finally:
            for source in opened.values():
                source.close()


def _warm_up() -> None:
    """Import what explaining takes before the schedule begins, so that the first slots are not late."""
    import lmfit  # noqa: F401
    import scipy.optimize  # noqa: F401


def _source(args: argparse.Namespace, unit: str, source: str, log: LogWriter, sheet: Sheet | None) -> Source:
    from benchfit.burnin.source import FolderSource, InstrumentSource, is_resource

    if is_resource(source):
        from benchfit.instrument import SCPI_1999, Dialect, Session

        dialect = Dialect.load(args.dialect) if args.dialect is not None else SCPI_1999
        return InstrumentSource(
            source, Session(source, _channels(sheet), dialect=dialect, library=args.visa_library)
        )
    from benchfit.capture import read

    layout = options.layout_of(args)
    return FolderSource(
        source, Path(source), lambda path: read(path, **layout), lambda name: log.was_taken(unit, name)
    )


def _channels(sheet: Sheet | None) -> list[str]:
    """The instrument's channels to read."""
    named = [choice.name for choice in (sheet.channels if sheet is not None else {}).values()]
    return list(dict.fromkeys(named)) or ["CH1"]


def _changed(args: argparse.Namespace, sheet: Sheet | None) -> Callable[[], str]:
    """Tells when the build sheet on the disk is no longer the one that the run goes by."""
    if args.build is None or sheet is None:
        return lambda: ""
    path = Path(args.build)

    def stamp() -> tuple[int, int] | None:
        try:
            found = path.stat()
        except OSError:
            return None
        return found.st_mtime_ns, found.st_size

    known = [stamp()]

    def changed() -> str:
        if stamp() == known[0]:
            return ""
        known[0] = stamp()
        from benchfit.errors import BenchfitError

        try:
            other = options.sheet_of(args)
        except BenchfitError:
            other = None
        if other is not None and other.digest == sheet.digest:
            return ""
        return (
            f"{args.build} was changed; the run goes on with the sheet that it began with (it is in the log)"
        )

    return changed


@contextmanager
def _ended_by_signals(stop: threading.Event) -> Iterator[None]:
    """Ctrl-C and the system's requests to end set ``stop``; a second one interrupts the record in hand."""

    def handler(*_: object) -> None:
        if stop.is_set():
            raise KeyboardInterrupt
        stop.set()

    names = ("SIGINT", "SIGTERM", "SIGHUP", "SIGBREAK")
    kinds = [getattr(signal, name) for name in names if hasattr(signal, name)]
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {kind: signal.signal(kind, handler) for kind in kinds}
    try:
        yield
    finally:
        for kind, old in before.items():
            signal.signal(kind, old if old is not None else signal.SIG_DFL)


# --- saying so --------------------------------------------------------------------------------------------


class _Output:
    """Where the records go once they are on the disk: lines of text or JSON, progress on a terminal."""

    def __init__(self, args: argparse.Namespace, plan: Plan, log: LogWriter, stop: threading.Event) -> None:
        self.args, self.plan, self._stop = args, plan, stop
        self._first = {unit: log.first_value(unit, "frequency") for unit in log.units}
        self._json: Any = None
        self._progress: Any = None
        self._done = log.resumed.count
        self._spent = log.resumed.time

    def __enter__(self) -> _Output:
        if self.args.json not in (None, "-"):
            self._json = open(self.args.json, "a", encoding="utf-8", newline="\n")
        if sys.stdout.isatty() and self.args.json != "-" and not self.args.quiet:
            from benchfit.show.progress import Progress

            self._progress = Progress(
                self.plan.count, self.plan.time, self._done, self._spent, streams.colour()
            )
            self._progress.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._progress is not None:
            self._progress.stop()
        if self._json is not None:
            self._json.close()

    def take(self, logged: Logged) -> None:
        """A record that was logged."""
        from benchfit.show.record import dumps

        if self.args.json == "-":
            self._emit(dumps(logged.record))
        else:
            self._show(logged)
        if self._json is not None:
            self._json.write(f"{dumps(logged.record)}\n")
            self._json.flush()

    def _show(self, logged: Logged) -> None:
        from benchfit.burnin.alarms import Raised
        from benchfit.show.trend import record_line

        found = logged.scalars.get("frequency")
        if self._first.get(logged.unit) is None and found is not None:
            self._first[logged.unit] = found.value
        words = [
            f"ALARM: {a.quantity} beyond {a.text}" if isinstance(a, Raised) else f"{a.quantity} is back"
            for a in logged.alarms
        ]
        line = record_line(logged.record, words, self._first.get(logged.unit))
        if self._progress is not None:
            self._progress.line(line, logged.done)
        elif not self.args.quiet:
            self._emit(line)

    def _emit(self, text: str) -> None:
        if not streams.emit(text):
            self._stop.set()

    def say(self, text: str) -> None:
        """A sentence for people."""
        if self._progress is not None:
            self._progress.line(f"benchfit: {text}", None)
        elif not self.args.quiet:
            streams.say(text)


def _resumed(args: argparse.Namespace, log: LogWriter) -> None:
    if log.resumed.acquired is None or args.quiet:
        return
    import time

    from benchfit.burnin.clock import spoken

    since = spoken(time.time() - log.resumed.acquired)
    how = "was stopped" if log.resumed.in_order else "was interrupted"
    streams.say(f"{args.log}: goes on after record {log.seq}, where it {how} {since} ago")


def _closing(args: argparse.Namespace, log: LogWriter, plan: Plan, why: str) -> None:
    if args.quiet:
        return
    if why == "completed":
        streams.say(f"complete: {log.seq} records in {args.log}; see benchfit trend {args.log}")
        return
    how = "an alarm ended it" if why == "alarm" else "stopped"
    streams.say(f"{how}: {log.seq} records are in {args.log}. The same command goes on from there:")
    words = ["benchfit", *sys.argv[1:]]
    print(
        f"  {shlex.join(words) if sys.platform != 'win32' else subprocess.list2cmdline(words)}",
        file=sys.stderr,
    )
