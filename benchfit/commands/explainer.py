"""Explaining in a process of its own, so that measuring keeps pace with the instrument."""

from __future__ import annotations

import signal
import threading
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
    from benchfit.sheet import Sheet

_MOST_DEATHS = 3


@dataclass(frozen=True, eq=False)
class Explained:
    """What came of one explanation: of the capture acquired at ``stamp`` (``number`` in the run)."""

    number: int
    stamp: str
    explanation: Explanation | None = None
    says: str = ""


class Explainer:
    """Explains the latest capture it is offered; while it works, older ones that wait are passed over.

    Parameters
    ----------
    sheet : Sheet or None
    plot, report : str or None
        Files to write anew with each explanation.
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
        """Whether an explanation is being worked on, or a capture waits for one."""
        return self._future is not None or self._waiting is not None

    def offer(self, number: int, stamp: str, capture: Capture) -> None:
        """Explain this capture next; one that waits already is passed over."""
        self._waiting = (number, stamp, capture)
        self._go_on()

    def fetch(self) -> Explained | None:
        """A newly finished explanation, kept as ``latest`` too; None where there is none."""
        future = self._future
        if future is None or not future.done():
            return None
        self._future = None
        try:
            found = future.result()
        except (BrokenProcessPool, OSError) as error:
            self._deaths += 1
            self._executor.shutdown(wait=False, cancel_futures=True)
            self._executor = self._start_warm()
            found = Explained(
                0, "", says=f"the process that explains died ({type(error).__name__}); started anew"
            )
        self._go_on()
        if found.explanation is not None:
            self.latest = found
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

    def _go_on(self) -> None:
        if self._future is not None or self._waiting is None:
            return
        (number, stamp, capture), self._waiting = self._waiting, None
        try:
            self._future = self._executor.submit(
                explain_one, number, stamp, capture, self.sheet, self.plot, self.report
            )
        except (BrokenProcessPool, RuntimeError):
            self._deaths += 1
            self._executor = self._start_warm()
            return
        self._future.add_done_callback(lambda _: self._when_done())


def explain_one(
    number: int, stamp: str, capture: Capture, sheet: Sheet | None, plot: str | None, report: str | None
) -> Explained:
    """Explain one capture and draw what is wanted; an error becomes a sentence."""
    from benchfit import pipeline
    from benchfit.commands.streams import replacing

    try:
        found = pipeline.explain(capture, sheet)
        if plot is not None:
            with replacing(plot) as scratch:
                found.plot(str(scratch))
        if report is not None:
            from benchfit.show.report import report as write_report

            with replacing(report) as scratch:
                write_report(found.explanation, found.constants[0], found.captures[0], scratch)
    except BenchfitError as error:
        return Explained(number, stamp, says=error.says)
    except Exception as error:
        from benchfit.commands.main import fault

        return Explained(number, stamp, says=fault(error))
    return Explained(number, stamp, found.explanation)


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
