"""Frames in one file: time that jumps back, rows parted by text, segments far apart."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.table import Table


@dataclass(frozen=True)
class Frame:
    """Rows ``start`` to ``stop`` (past the end) of a table; its ``number`` from 1, the ``text`` above it."""

    number: int
    start: int
    stop: int
    text: str = ""


def split(stamps: NDArray[np.float64] | None, table: Table, step: float, quantum: float) -> tuple[Frame, ...]:
    """The frames of a table, at least one.

    A frame begins where time jumps back by more than rounding can; in a table without ``stamps`` (s),
    where a line of text is repeated between rows. ``step`` is the usual one, ``quantum`` that of the print.
    """
    texts = {row: text for row, text in table.breaks if 0 < row < table.rows}
    if stamps is None:
        words = list(texts.values())
        repeated = [row for row, text in texts.items() if words.count(text) > 1]
        begins = [0, *repeated]
    else:
        jumps = np.diff(stamps)
        back = jumps < -max(1.01 * quantum, 0.5 * abs(step))
        begins = [0, *(np.flatnonzero(back) + 1).tolist()]
        if len(begins) == 1:
            # Segments of one acquisition, each with its own trigger: nothing was sampled in between.
            far = jumps > max(1000.0, 0.25 * table.rows) * max(step, quantum)
            if 0 < np.count_nonzero(far) < max(2.0, table.rows / 16):
                begins += (np.flatnonzero(far) + 1).tolist()
    ends = [*begins[1:], table.rows]
    return tuple(
        Frame(k + 1, a, b, texts.get(a, "")) for k, (a, b) in enumerate(zip(begins, ends, strict=True))
    )
