"""How far a burn-in is, on a terminal: a bar with the time left below the records' lines."""

from __future__ import annotations

import math
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

        class Left(ProgressColumn):
            """Time left of a run that ends by the clock."""

            def render(self, task: Any) -> Text:
                return Text(
                    _clock(math.ceil((task.total or 0.0) - task.completed)), style="progress.remaining"
                )

        self._count, self._span, self._spent = count, span, spent
        self._begun = time.monotonic()
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
        elif self._span is not None:
            self._bars.update(self._task, completed=self._spent + time.monotonic() - self._begun)
        elif done is not None:
            self._bars.update(self._task, description=f"{done} records")

    def stop(self) -> None:
        """Take it away."""
        self._bars.stop()


def _clock(seconds: float) -> str:
    whole = max(0, int(seconds))
    return f"{whole // 3600}:{whole % 3600 // 60:02d}:{whole % 60:02d}"
