"""Explaining in a process of its own, so that measuring keeps pace with the instrument."""

from __future__ import annotations

import signal
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING

from benchfit.errors import BenchfitError

if TYPE_CHECKING:
    from benchfit.capture import Capture
    from benchfit.explain.result import Explanation
    from benchfit.pipeline import Found
    from benchfit.sheet import Sheet

_MOST_DEATHS = 3
_DRAW_EVERY = 10.0
"""Seconds after which a figure is drawn anew although captures wait to be explained."""


@dataclass(frozen=True, eq=False)
class Explained:
    """What came of one explanation: of the capture acquired at ``stamp`` (``number`` in the run, from 1).

    ``says``: what went wrong, in explaining or in drawing.
    """

    number: int = 0
    stamp: str = ""
    explanation: Explanation | None = None
    says: str = ""


class Explainer:
    """Explains the latest capture it is offered; while it works, older ones that wait are passed over.

    Parameters
    ----------
    sheet : Sheet or None
    plot, report : str or None
        Files to write anew as explanations come.
    when_done : callable
        Called (from another thread) when an explanation is ready to be fetched.
    """

    def __init__(
        self,
        sheet: Sheet | None,
        *,
        plot: str | None = None,
        report: str | None = None,
        when_done: Callable[[], None] = lambda: None,
    ) -> None:
        self.sheet, self.plot, self.report = sheet, plot, report
        self.latest: Explained | None = None
        self._when_done = when_done
        self._deaths = 0
        self._drawn, self._drawn_at = 0, 0.0
        self._future: Future[Explained] | None = None
        self._waiting: tuple[int, str, Capture] | None = None
        self._executor = self._start_warm()

    def _start_warm(self) -> Executor:
        with _interrupts_ignored():
            executor = self._start()
            executor.submit(_warm_up)
        return executor

    def _start(self) -> Executor:
        import multiprocessing

        if self._deaths >= _MOST_DEATHS:
            return ThreadPoolExecutor(1)
        try:
            # Started afresh, as Windows and macOS do: a forked process would inherit the session's socket.
            context = multiprocessing.get_context("spawn")
            return ProcessPoolExecutor(1, mp_context=context, initializer=_leave_interrupts_alone)
        except (OSError, ImportError):
            return ThreadPoolExecutor(1)

    @property
    def is_busy(self) -> bool:
        """Whether something is being worked on, waits for it, or is still to be drawn."""
        return self._future is not None or self._waiting is not None or self._is_undrawn()

    def offer(self, number: int, stamp: str, capture: Capture) -> None:
        """Explain this capture next; one that waits already is passed over."""
        self._waiting = (number, stamp, capture)
        self._go_on()

    def fetch(self) -> Explained | None:
        """What is newly finished: an explanation (kept as ``latest``), or what went wrong; None: nothing."""
        future = self._future
        if future is None or not future.done():
            return None
        self._future = None
        try:
            found = future.result()
        except (BrokenProcessPool, OSError) as error:
            self._start_anew()
            found = Explained(says=f"the process that explains died ({type(error).__name__}); started anew")
        if found.explanation is not None:
            self.latest = found
        self._go_on()
        return found

    def wait(self, timeout: float) -> bool:
        """Wait (s) for what is being worked on; whether it is done."""
        from concurrent.futures import wait

        if self._future is not None:
            wait([self._future], timeout)
        return self._future is None or self._future.done()

    def close(self) -> None:
        """Let go of the process; what it works on is not waited for."""
        processes = getattr(self._executor, "_processes", None) or {}
        self._executor.shutdown(wait=False, cancel_futures=True)
        for process in list(processes.values()):
            process.terminate()

    def _is_undrawn(self) -> bool:
        wanted = self.plot is not None or self.report is not None
        return wanted and self.latest is not None and self.latest.number != self._drawn

    def _go_on(self) -> None:
        """Draw what was explained last, when nothing waits or the figure is old; else explain what waits."""
        if self._future is not None:
            return
        try:
            is_old = time.monotonic() - self._drawn_at > _DRAW_EVERY
            if self._is_undrawn() and (self._waiting is None or is_old):
                assert self.latest is not None
                self._drawn, self._drawn_at = self.latest.number, time.monotonic()
                self._future = self._executor.submit(draw_last, self.plot, self.report)
            elif self._waiting is not None:
                (number, stamp, capture), self._waiting = self._waiting, None
                self._future = self._executor.submit(explain_one, number, stamp, capture, self.sheet)
            else:
                return
        except (BrokenProcessPool, RuntimeError):
            self._start_anew()
            return
        self._future.add_done_callback(lambda _: self._when_done())

    def _start_anew(self) -> None:
        self._deaths += 1
        self._executor.shutdown(wait=False, cancel_futures=True)
        self._executor = self._start_warm()


# The explanation that this process made last, for drawing it: it need not travel there and back.
_last: list[Found] = []


def explain_one(number: int, stamp: str, capture: Capture, sheet: Sheet | None) -> Explained:
    """Explain one capture; an error becomes a sentence."""
    from benchfit import pipeline

    try:
        found = pipeline.explain(capture, sheet)
    except BenchfitError as error:
        return Explained(number, stamp, says=error.says)
    except Exception as error:
        return Explained(number, stamp, says=_fault(error))
    _last[:] = [found]
    return Explained(number, stamp, found.explanation)


def draw_last(plot: str | None, report: str | None) -> Explained:
    """Draw what this process explained last, each file replaced in one step; an error becomes a sentence."""
    from benchfit.commands.streams import replacing

    try:
        for found in _last:
            if plot is not None:
                with replacing(plot) as scratch:
                    found.plot(str(scratch))
            if report is not None:
                from benchfit.show.report import report as write_report

                with replacing(report) as scratch:
                    write_report(found.explanation, found.constants[0], found.captures[0], scratch)
    except BenchfitError as error:
        return Explained(says=error.says)
    except Exception as error:
        return Explained(says=_fault(error))
    return Explained()


def _fault(error: Exception) -> str:
    from benchfit.commands.main import fault

    return fault(error)


def _warm_up() -> None:
    from benchfit import pipeline

    pipeline.warm_up()


@contextmanager
def _interrupts_ignored() -> Iterator[None]:
    """A process started meanwhile ignores Ctrl-C from its first instant on, before it can say so itself."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


def _leave_interrupts_alone() -> None:
    """Ctrl-C goes to every process of a terminal; only the one that measures answers it."""
    import warnings

    signal.signal(signal.SIGINT, signal.SIG_IGN)
    warnings.simplefilter("ignore")
