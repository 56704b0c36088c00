"""The loop of ``benchfit poll``: a thread reads the instrument, this one measures, a process explains."""

from __future__ import annotations

import queue
import statistics
import sys
import threading
import time
from collections import deque
from collections.abc import Mapping
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from itertools import pairwise
from typing import TYPE_CHECKING, Any, Final

from benchfit.commands import streams
from benchfit.commands.explainer import Explained, Explainer
from benchfit.errors import BenchfitError, CaptureError
from benchfit.show.live import LiveScreen, LiveState, failure_line, plain_line

if TYPE_CHECKING:
    from benchfit.explain.result import Explanation, Quantity, Turn
    from benchfit.instrument import Acquisition, Session
    from benchfit.pipeline import Trimming
    from benchfit.sheet import Sheet

SPAN: Final = 120.0
"""Seconds of the trace."""

_TICK: Final = 0.2
_FRAMES: Final = 0.1
_BACKLOG: Final = 2
_PACE_OVER: Final = 33
_TRACE_STEP: Final = SPAN / 1200
_LAST_WAIT: Final = 300.0
_LEARN_WAIT: Final = 15.0
_EXPLAINED: Final = object()


@dataclass(frozen=True)
class Plan:
    """What was asked for: when to end, and where results go."""

    count: int | None = None
    every: float | None = None
    give_up: float | None = None
    json: str | None = None
    csv: str | None = None
    plot: str | None = None
    report: str | None = None
    quiet: bool = False
    verbose: int = 0


@dataclass(frozen=True, eq=False)
class Pending:
    """An acquisition that was measured and whose record waits for its explanation, or for the next one."""

    acquisition: Acquisition
    look: Explanation
    turn: Turn | None


class Polling:
    """One run of ``benchfit poll``.

    A record goes out when its own explanation is ready, or as soon as the next acquisition is there: then
    with the last explanation, and it says of which acquisition that is.
    """

    def __init__(self, session: Session, sheet: Sheet | None, plan: Plan, trimming: Trimming | None) -> None:
        self.session, self.sheet, self.plan, self.trimming = session, sheet, plan, trimming
        self.targets = _targets(sheet)
        self.status = 0
        self._queue: queue.Queue[object] = queue.Queue()
        self._slots = threading.Semaphore(_BACKLOG)
        self._stop = threading.Event()
        self._explainer = Explainer(
            sheet, plot=plan.plot, report=plan.report, when_done=lambda: self._queue.put(_EXPLAINED)
        )
        self._pending: Pending | None = None
        self._trace: deque[tuple[float, float]] = deque(maxlen=4096)
        self._last: Pending | None = None
        self._captures = self._failures = 0
        self._times: deque[float] = deque(maxlen=_PACE_OVER)
        self._last_fault = ""
        self._outputs = _outputs(plan, sheet)
        self._is_read = True
        self._was_interrupted = False
        self._drawn = 0.0
        self._screen: LiveScreen | None = None

    # -- the run --------------------------------------------------------------------------------------------

    def run(self) -> int:
        """Poll until the end; the exit status."""
        reader = threading.Thread(target=self._read, name="instrument", daemon=True)
        error: BaseException | None = None
        try:
            with self._view():
                reader.start()
                try:
                    self._loop()
                except KeyboardInterrupt:
                    self._interrupted()
                except Exception as caught:
                    error = caught
                    self._emit_pending()
        finally:
            self._stop.set()
            self._explainer.close()
            for output in self._outputs:
                output.close()
        if error is None or self._captures:
            self._summary()
        if error is not None:
            raise error
        reader.join(timeout=1.0)
        return self.status if self._captures == 0 and self._failures and not self._was_interrupted else 0

    def _view(self) -> AbstractContextManager[Any]:
        plain = self.plan.quiet or "-" in (self.plan.json, self.plan.csv)
        if plain or not sys.stdout.isatty() or not _can_redraw():
            return nullcontext()
        self._screen = LiveScreen(sys.stdout, colour=streams.colour())
        return self._screen

    def _read(self) -> None:
        """In a thread of its own: the only one that talks to the instrument."""
        plan = self.plan
        try:
            for acquisition in self.session.acquisitions(
                count=plan.count, every=plan.every, give_up=plan.give_up, stop=self._stop
            ):
                while not self._slots.acquire(timeout=0.1):
                    if self._stop.is_set():
                        return
                self._queue.put(acquisition)
        except Exception as error:
            self._queue.put(error)
        finally:
            self._queue.put(None)

    def _loop(self) -> None:
        from benchfit.instrument import Acquisition

        while self._is_read:
            try:
                item = self._queue.get(timeout=_TICK)
            except queue.Empty:
                self._draw()
                continue
            if item is None:
                self._finish()
                return
            if isinstance(item, Exception):
                raise item
            if isinstance(item, Acquisition):
                self._slots.release()
                self._take(item)
            self._fetch()
            self._draw()
        self._stop.set()

    def _take(self, acquisition: Acquisition) -> None:
        error: BenchfitError | None = acquisition.error
        if acquisition.capture is not None:
            try:
                self._measure(acquisition)
            except BenchfitError as caught:
                error = caught
            except Exception as caught:
                from benchfit.commands.main import fault

                error = CaptureError(f"{self.session.resource}: {fault(caught)}", path=self.session.resource)
        if error is not None:
            self._emit_pending()
            self._failed(acquisition, error)

    def _measure(self, acquisition: Acquisition) -> None:
        from benchfit import pipeline

        assert acquisition.capture is not None
        look = pipeline.look(acquisition.capture, self.sheet)
        now = time.monotonic()
        self._captures += 1
        self._times.append(now)
        pending = Pending(acquisition, look, self._turn(look, now))
        # Not before: interrupted while it measures, the run still ends with a record that waited.
        self._emit_pending()
        self._pending = self._last = pending
        name = self.trimming.quantity if self.trimming is not None else "frequency"
        q = look.measured.get(name)
        if q is not None and (not self._trace or now - self._trace[-1][0] >= _TRACE_STEP):
            self._trace.append((now, q.value))
        self._explainer.offer(acquisition.number, acquisition.stamp, acquisition.capture)

    def _turn(self, look: Explanation, now: float) -> Turn | None:
        trimming = self.trimming
        q: Quantity | None = look.measured.get(trimming.quantity) if trimming is not None else None
        if trimming is None or q is None:
            return None
        latest = self._explainer.latest
        explained = latest.explanation if latest is not None else None
        parts = explained.parts if explained is not None else ()
        before = self._last.turn if self._last is not None else None
        return trimming.turn(before, q, now, parts, self._pace() or 0.0)

    def _failed(self, acquisition: Acquisition, error: BenchfitError) -> None:
        from benchfit.show.record import failure

        self._failures += 1
        self.status = self.status or error.status
        self._last_fault = error.says
        self._emit(failure(self.session.resource, error, acquired=acquisition.stamp))
        if self._is_plain_text:
            self._is_read = streams.emit(failure_line(acquisition.stamp, error.says)) and self._is_read
        elif self._screen is None and not self.plan.quiet:
            streams.say(error.says)

    # -- explanations ---------------------------------------------------------------------------------------

    def _fetch(self) -> None:
        found = self._explainer.fetch()
        if found is None:
            return
        if found.says and not self.plan.quiet:
            self._last_fault = found.says
            if self._screen is None:
                streams.say(found.says)
        pending = self._pending
        if pending is not None and found.number == pending.acquisition.number:
            self._emit_pending()

    def _finish(self) -> None:
        """The last record waits for its own explanation, the end for the last figure."""
        deadline = time.monotonic() + _LAST_WAIT
        while self._explainer.is_busy and time.monotonic() < deadline:
            self._explainer.wait(_TICK)
            self._fetch()
            self._draw()
        self._emit_pending()

    def _interrupted(self) -> None:
        """Ctrl-C: what was learned so far is kept; a first explanation that is under way is waited for."""
        self._stop.set()
        self._was_interrupted = True
        deadline = time.monotonic() + _LEARN_WAIT
        try:
            while self._is_worth_waiting() and time.monotonic() < deadline:
                self._explainer.wait(_TICK)
                self._fetch()
        except KeyboardInterrupt:
            pass
        self._emit_pending()

    def _is_worth_waiting(self) -> bool:
        """Whether nothing was explained yet, or not drawn, and that is under way."""
        wants_figure = self.plan.plot is not None or self.plan.report is not None
        return self._explainer.is_busy and (self._explainer.latest is None or wants_figure)

    # -- what goes out --------------------------------------------------------------------------------------

    @property
    def _is_plain_text(self) -> bool:
        return self._screen is None and "-" not in (self.plan.json, self.plan.csv) and not self.plan.quiet

    def _emit_pending(self) -> None:
        pending, self._pending = self._pending, None
        if pending is None:
            return
        latest = self._explainer.latest
        self._emit(_record(pending, latest))
        if self._is_plain_text:
            explanation = latest.explanation if latest is not None else None
            explained = latest.stamp if latest is not None else None
            stamp = pending.acquisition.stamp
            line = plain_line(stamp, pending.look, explanation, explained, self.targets, pending.turn)
            self._is_read = streams.emit(line) and self._is_read

    def _emit(self, record: dict[str, Any]) -> None:
        for output in self._outputs:
            self._is_read = output.take(record) and self._is_read

    def _summary(self) -> None:
        """At the end: the last explanation, and how the link did."""
        latest = self._explainer.latest
        if (
            latest is not None
            and latest.explanation is not None
            and "-" not in (self.plan.json, self.plan.csv)
        ):
            from benchfit.show.text import render

            text = render(latest.explanation, width=streams.width(), colour=streams.colour())
            streams.emit(f"\n{text}" if self._is_plain_text else text)
        if not self.plan.quiet:
            streams.say(_account(self._captures, self._failures, self.session))

    def _pace(self) -> float | None:
        """Seconds from one capture to the next: the median of the last ones."""
        times = list(self._times)
        steps = [after - before for before, after in pairwise(times)]
        return statistics.median(steps) if steps else None

    def _draw(self) -> None:
        now = time.monotonic()
        if self._screen is None or now - self._drawn < _FRAMES:
            return
        self._drawn = now
        self._screen.draw(self._state(now))

    def _state(self, now: float) -> LiveState:
        latest, last = self._explainer.latest, self._last
        lag = None
        if latest is not None and last is not None:
            lag = (last.acquisition.acquired - datetime.fromisoformat(latest.stamp)).total_seconds()
        age = None
        if last is not None:
            age = max((datetime.now(UTC) - last.acquisition.acquired).total_seconds(), 0.0)
        session = self.session
        return LiveState(
            resource=session.resource,
            instrument=session.identity or "",
            title=self.sheet.title if self.sheet is not None else "",
            link=_link(session, self._failures),
            is_up=session.is_connected,
            captures=self._captures,
            failures=self._failures,
            faults=dict(session.faults),
            last_fault=self._last_fault,
            age=age,
            pace=self._pace(),
            look=last.look if last is not None else None,
            explanation=latest.explanation if latest is not None else None,
            lag=lag,
            targets=self.targets,
            trace=[(now - at, value) for at, value in self._trace],
            trace_name=self.trimming.quantity if self.trimming is not None else "frequency",
            span=SPAN,
            turn=last.turn if last is not None else None,
        )


def _record(pending: Pending, latest: Explained | None) -> dict[str, Any]:
    """The record of one acquisition: measured of its own, explained of the latest that was."""
    from benchfit.show.record import record

    look, stamp = pending.look, pending.acquisition.stamp
    if latest is None or latest.explanation is None:
        found = record(look, acquired=stamp)
    else:
        of = latest.explanation
        if latest.stamp != stamp:
            of = replace(of, captures=look.captures, oscillates=look.oscillates, measured=look.measured)
        found = record(of, acquired=stamp)
    return {**found, "explained": latest.stamp if latest is not None else None}


def _targets(sheet: Sheet | None) -> Mapping[str, tuple[float, float | None]]:
    """Targets of a sheet with their limits as shares; None where no acceptance limit is stated."""
    if sheet is None:
        return {}
    found = {}
    for name, target in (("frequency", sheet.target_frequency), ("duty", sheet.target_duty)):
        if target is not None:
            half = max(target.high - target.nominal, target.nominal - target.low) / target.nominal
            found[name] = (target.nominal, half if target.stated and half > 0 else None)
    return found


def _outputs(plan: Plan, sheet: Sheet | None) -> list[Any]:
    from benchfit.commands.growing import CsvRows, JsonLines

    outputs: list[Any] = []
    if plan.json is not None:
        outputs.append(JsonLines(plan.json))
    if plan.csv is not None:
        outputs.append(CsvRows(plan.csv, sheet))
    return outputs


def _link(session: Session, failures: int) -> str:
    if session.is_connected:
        return "connected"
    if session.connections == 0 and not failures:
        return "connecting"
    return f"reconnecting, pause {session.pause:.3g} s" if session.pause else "reconnecting"


def _account(captures: int, failures: int, session: Session) -> str:
    text = f"{captures} capture{'' if captures == 1 else 's'} of {session.resource}"
    if failures:
        kinds = ", ".join(f"{kind} {times}" for kind, times in session.faults.items())
        text += f", {failures} failed{f' ({kinds})' if kinds else ''}"
    again = session.connections - 1
    return f"{text}, connected anew {again} time{'' if again == 1 else 's'}" if again > 0 else text


def _can_redraw() -> bool:
    import os

    return os.environ.get("TERM") != "dumb"
