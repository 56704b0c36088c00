"""Many tasks, one result each in the tasks' order: here, in processes of our own, or on anybody's executor.

Only so many tasks are under way at a time as keep the workers busy: memory does not grow with their number.
"""

from __future__ import annotations

import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import BrokenExecutor, CancelledError, Executor, Future, ProcessPoolExecutor
from contextlib import contextmanager
from typing import Protocol, TypeVar

from benchfit.errors import UsageError

Task = TypeVar("Task")
Result = TypeVar("Result")

# Matrices here are small: a BLAS that starts threads for them in each of many processes only gets in its way.
_ONE_THREAD = dict.fromkeys(("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"), "1")
# Windows waits for no more handles than this.
_MOST_PROCESSES = 61
_AHEAD = 4


class _Hands(Protocol):
    """Whatever takes on tasks."""

    def submit(self, work: Callable[[Task], Result], task: Task, /) -> Future[Result]: ...


def usual_jobs() -> int:
    """As many processes as this one may use processors, eight at most."""
    affinity = getattr(os, "sched_getaffinity", None)
    return max(1, min(len(affinity(0)) if affinity else os.cpu_count() or 1, 8))


def in_processes(
    work: Callable[[Task], Result],
    tasks: Iterable[Task],
    jobs: int,
    prepare: Callable[[], object],
    lost: Callable[[Task, BaseException], Result],
) -> Iterator[Result]:
    """The results in the tasks' order, from ``jobs`` processes; one job: from this process.

    Parameters
    ----------
    work : callable
        Does one task; must not raise.
    tasks : iterable
        Drawn only as far ahead as the workers need.
    jobs : int
    prepare : callable
        What a process does first.
    lost : callable
        Makes the result of a task whose process died, alone, once more.

    Raises
    ------
    UsageError
        Where no process can be started.
    """
    if jobs <= 1:
        yield from map(work, tasks)
        return
    crew = _Crew(min(jobs, _MOST_PROCESSES), prepare)
    is_done = False
    try:
        yield from _in_order(work, tasks, crew, _AHEAD * jobs, lost, crew.renew)
        is_done = True
    finally:
        crew.close(at_once=not is_done)


def through(
    work: Callable[[Task], Result],
    tasks: Iterable[Task],
    executor: Executor,
    lost: Callable[[Task, BaseException], Result],
    ahead: int = 64,
) -> Iterator[Result]:
    """The results in the tasks' order from an executor that is somebody else's, which is left open.

    ``ahead`` tasks are under way at a time.
    """
    yield from _in_order(work, tasks, executor, ahead, lost, None)


def _in_order(
    work: Callable[[Task], Result],
    tasks: Iterable[Task],
    hands: _Hands,
    ahead: int,
    lost: Callable[[Task, BaseException], Result],
    renew: Callable[[], None] | None,
) -> Iterator[Result]:
    waiting: deque[tuple[Task, Future[Result]]] = deque()
    rest = iter(tasks)
    try:
        while True:
            for task in rest:
                waiting.append((task, _submitted(hands, work, task)))
                if len(waiting) >= ahead:
                    break
            if not waiting:
                return
            task, future = waiting[0]
            try:
                result = future.result()
            except BrokenExecutor as error:
                if renew is None:
                    result = lost(task, error)
                else:
                    renew()
                    yield from _one_by_one(work, waiting, hands, lost, renew)
                    continue
            except (Exception, CancelledError) as error:
                result = lost(task, error)
            waiting.popleft()
            yield result
    finally:
        # Processes of our own are let go by whoever holds them; a pool that loses its processes after its
        # futures were cancelled here would complain.
        if renew is None:
            for _, future in waiting:
                future.cancel()


def _one_by_one(
    work: Callable[[Task], Result],
    waiting: deque[tuple[Task, Future[Result]]],
    hands: _Hands,
    lost: Callable[[Task, BaseException], Result],
    renew: Callable[[], None],
) -> Iterator[Result]:
    """What was under way when a process died, each task alone: so it shows whose fault it was."""
    while waiting:
        task, future = waiting.popleft()
        if future.done() and not future.cancelled() and future.exception() is None:
            yield future.result()
            continue
        try:
            yield _submitted(hands, work, task).result()
        except BrokenExecutor as error:
            renew()
            yield lost(task, error)
        except (Exception, CancelledError) as error:
            yield lost(task, error)


def _submitted(hands: _Hands, work: Callable[[Task], Result], task: Task) -> Future[Result]:
    """A future of the task, also where the executor is broken already."""
    try:
        return hands.submit(work, task)
    except BrokenExecutor as error:
        future: Future[Result] = Future()
        future.set_exception(error)
        return future


class _Crew:
    """Processes of our own; a pool that a death has broken is made anew."""

    def __init__(self, jobs: int, prepare: Callable[[], object]) -> None:
        self._jobs, self._prepare = jobs, prepare
        self._executor = self._start()

    def submit(self, work: Callable[[Task], Result], task: Task, /) -> Future[Result]:
        return self._executor.submit(work, task)

    def renew(self) -> None:
        self.close(at_once=True)
        self._executor = self._start()

    def close(self, *, at_once: bool) -> None:
        """Let the processes go; ``at_once``: whatever they are doing."""
        processes = dict(getattr(self._executor, "_processes", None) or {})
        self._executor.shutdown(wait=not at_once, cancel_futures=True)
        if at_once:
            for process in processes.values():
                process.terminate()

    def _start(self) -> ProcessPoolExecutor:
        import multiprocessing

        # Started afresh everywhere, as Windows and macOS do: a forked one may inherit a lock that is held.
        context = multiprocessing.get_context("spawn")
        try:
            with _one_thread(), interrupts_ignored():
                executor = ProcessPoolExecutor(self._jobs, mp_context=context, initializer=begin)
                # A task each starts them all now, while their surroundings are as they should be.
                prepared = [executor.submit(self._prepare) for _ in range(self._jobs)]
            prepared[0].result()
        except (BrokenExecutor, OSError) as error:
            raise UsageError(
                f"no process to work with can be started ({type(error).__name__}: {error}); use one job, and "
                'in a program of your own keep what it does under if __name__ == "__main__":'
            ) from None
        return executor


def begin() -> None:
    """What a process of ours begins with: Ctrl-C goes to all of a terminal, only the first answers it."""
    import warnings

    os.environ.update(_ONE_THREAD)
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    warnings.simplefilter("ignore")


@contextmanager
def interrupts_ignored() -> Iterator[None]:
    """A process started meanwhile ignores Ctrl-C from its first instant on, before it can say so itself."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGINT, signal.SIG_IGN)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


@contextmanager
def _one_thread() -> Iterator[None]:
    before = {name: os.environ.get(name) for name in _ONE_THREAD}
    os.environ.update(_ONE_THREAD)
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value
