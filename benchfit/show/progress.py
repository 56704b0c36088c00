"""How far a burn-in or a lot is, on a terminal: a bar with the time left below the lines."""

from __future__ import annotations

import math
import sys
import threading
import time
from typing import Any


class Progress:
    """A bar that goes by records or by time, whichever is wanted; without an end the time that has passed.

    Parameters
    ----------
    count : int or None
        Records wanted.
    span : float or None
        Time wanted (s).
    done, spent : int, float
        Of that, before now.
    colour : bool
    """

    def __init__(self, count: int | None, span: float | None, done: int, spent: float, colour: bool) -> None:
        from rich.console import Console
        from rich.progress import (
            BarColumn,
            ProgressColumn,
            TextColumn,
            TimeElapsedColumn,
            TimeRemainingColumn,
        )
        from rich.progress import Progress as Bars
        from rich.text import Text

        begun = time.monotonic()

        class Left(ProgressColumn):
            """Time left of a run that ends by the clock."""

            def render(self, task: Any) -> Text:
                task.completed = min(task.total, spent + time.monotonic() - begun)
                return Text(_clock(math.ceil(task.total - task.completed)), style="progress.remaining")

        self._count = count
        self._console = Console(no_color=not colour, highlight=False, soft_wrap=True)
        by_time = count is None and span is not None
        end: list[Any] = [BarColumn(), Left() if by_time else TimeRemainingColumn(), TextColumn("left")]
        columns = end if count is not None or span is not None else [TimeElapsedColumn()]
        self._bars = Bars(TextColumn("{task.description}"), *columns, console=self._console, transient=True,
                          get_time=time.monotonic, refresh_per_second=2)  # fmt: skip
        total = float(count) if count is not None else span
        self._task = self._bars.add_task("burn-in", total=total)
        self._bars.update(self._task, completed=done if count is not None else spent)

    def start(self) -> None:
        """Show it."""
        self._bars.start()

    def line(self, text: str, done: int | None) -> None:
        """Print a line above it; ``done``: records so far."""
        self._console.print(text, markup=False)
        if self._count is not None and done is not None:
            self._bars.update(self._task, completed=done, description=f"{done} of {self._count} records")
        elif done is not None:
            self._bars.update(self._task, description=f"{done} records")

    def stop(self) -> None:
        """Take it away."""
        self._bars.stop()


def _clock(seconds: float) -> str:
    whole = max(0, int(seconds))
    return f"{whole // 3600}:{whole % 3600 // 60:02d}:{whole % 60:02d}"


class LotProgress:
    """How many captures of a lot are done: a bar on standard error, shown only once the lot takes a while.

    Parameters
    ----------
    total : int
    colour : bool
    after : float
        Seconds before it is shown.
    """

    def __init__(self, total: int, colour: bool, after: float = 0.5) -> None:
        self._total, self._colour, self._done = total, colour, 0
        self._bars: Any = None
        self._task: Any = None
        self._lock = threading.Lock()
        self._timer = threading.Timer(after, self._show)
        self._timer.daemon = True
        self._timer.start()

    def step(self) -> None:
        """One more is done."""
        with self._lock:
            self._done += 1
            if self._bars is not None:
                self._bars.update(self._task, completed=self._done)

    def say(self, text: str) -> None:
        """A line above the bar."""
        with self._lock:
            if self._bars is None:
                print(text, file=sys.stderr, flush=True)
            else:
                self._bars.console.print(text, markup=False)

    def stop(self) -> None:
        """Take it away, or never show it."""
        self._timer.cancel()
        with self._lock:
            self._done = self._total
            if self._bars is not None:
                self._bars.stop()
                self._bars = None

    def _show(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, TextColumn, TimeRemainingColumn
        from rich.progress import Progress as Bars

        with self._lock:
            if self._done >= self._total:
                return
            console = Console(stderr=True, no_color=not self._colour, highlight=False, soft_wrap=True)
            columns = (MofNCompleteColumn(), TextColumn("captures"), BarColumn(), TimeRemainingColumn(),
                       TextColumn("left"))  # fmt: skip
            self._bars = Bars(*columns, console=console, transient=True, refresh_per_second=4)
            self._task = self._bars.add_task("lot", total=self._total)
            self._bars.update(self._task, completed=self._done)
            self._bars.start()
