"""One explanation as a task that another process can do."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from benchfit import lot, workers
from benchfit.errors import BenchfitError, CaptureError, UsageError

if TYPE_CHECKING:
    from benchfit.explain.result import Explanation
    from benchfit.sheet import Sheet


@dataclass(frozen=True)
class Task:
    """Captures to explain together (one, but for joint explanations), each with the files that belong to it.

    ``layout`` holds keywords of :func:`benchfit.read`; ``plot`` and ``report`` are files to write;
    ``as_found`` is the record of before. ``is_brief``: its record alone is wanted, not the explanation.
    """

    captures: tuple[Sequence[str], ...]
    sheet: Sheet | None = None
    layout: Mapping[str, Any] = field(default_factory=dict)
    plot: str | None = None
    report: str | None = None
    as_found: Mapping[str, Any] | None = None
    is_brief: bool = False

    @property
    def name(self) -> str:
        """What to call it in a sentence."""
        return self.captures[0][0]


@dataclass(frozen=True)
class Outcome:
    """What came of a task: an explanation with its record, or an error and what stands in its place.

    ``notes`` say how each file was understood; ``trace`` is where a fault of the program's own came from.
    """

    record: dict[str, Any]
    explanation: Explanation | None = None
    error: BenchfitError | None = None
    notes: tuple[tuple[str, dict[str, str]], ...] = ()
    trace: str = ""


def work(task: Task) -> Outcome:
    """Do a task. Nothing but an interruption escapes it."""
    return lot.guarded(
        task.name, lambda: _explained(task), lambda error, trace: _failed(task, error, trace)
    )


def _explained(task: Task) -> Outcome:
    from benchfit import pipeline
    from benchfit.capture import read
    from benchfit.commands.streams import replacing

    captures = [read(path, also=also, **task.layout) for path, *also in task.captures]
    found = pipeline.explain(captures=captures, sheet=task.sheet, as_found=task.as_found)
    if task.plot is not None:
        with replacing(task.plot) as scratch:
            found.plot(str(scratch))
    if task.report is not None:
        from benchfit.show.report import report

        with replacing(task.report) as scratch:
            report(found.explanation, found.constants[0], found.captures[0], scratch)
    notes = tuple((capture.path, dict(capture.notes)) for capture in captures)
    return Outcome(
        record=found.record(), explanation=None if task.is_brief else found.explanation, notes=notes
    )


def _failed(task: Task, error: BenchfitError, trace: str = "") -> Outcome:
    from benchfit.show.record import failure

    return Outcome(record=failure(task.name, error), error=error, trace=trace)


def in_processes(jobs: int, tasks: Sequence[Task]) -> Iterator[Outcome]:
    """The outcomes in the tasks' order, from so many processes."""
    from benchfit import pipeline

    return workers.in_processes(work, tasks, jobs, pipeline.warm_up, _lost)


def on_cluster(address: str, tasks: Sequence[Task]) -> Iterator[Outcome]:
    """The outcomes in the tasks' order, from the workers of a dask scheduler.

    Raises
    ------
    UsageError
        Where the extra package is not installed, or nobody answers at the address.
    """
    try:
        from distributed import Client
    except ImportError:
        says = "--cluster needs the package distributed; install it with pip install 'benchfit[cluster]'"
        raise UsageError(says) from None
    try:
        client: Any = Client(address, timeout="10 s")  # type: ignore[no-untyped-call]
    except (OSError, ValueError) as error:
        raise UsageError(f"--cluster {address}: no dask scheduler answers there ({error})") from None
    with client, client.get_executor(pure=False) as executor:
        ahead = max(16, 4 * sum(client.nthreads().values()))
        yield from workers.through(work, tasks, executor, _lost, ahead)


def _lost(task: Task, error: BaseException) -> Outcome:
    says = f"{task.name}: its worker died ({type(error).__name__}); try it alone, or with --jobs 1"
    return _failed(task, CaptureError(says, path=task.name))
