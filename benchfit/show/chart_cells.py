"""A small chart in a terminal's cells: two by four dots a cell (the Unicode block of Braille patterns)."""

from __future__ import annotations

import math
from collections.abc import Sequence

_DOTS = ((0x01, 0x08), (0x02, 0x10), (0x04, 0x20), (0x40, 0x80))
_BLANK = 0x2800
_LABEL = 9


def chart(
    points: Sequence[tuple[float, float]],
    width: int,
    rows: int,
    span: float,
    *,
    zero: bool = False,
    limit: float | None = None,
    unit: str = "",
) -> list[str]:
    """``rows`` lines of ``width`` cells: values over time, now at the right edge.

    Parameters
    ----------
    points : sequence of (seconds ago, value)
    span : float
        Seconds across.
    zero : bool
        The scale always holds 0.
    limit : float or None
        With ``zero``: ± limit are held too where the values come within a factor of three of it.
    """
    across, down = max(width - _LABEL - 1, 1) * 2, rows * 4
    values = [value for age, value in points if 0 <= age <= span and math.isfinite(value)]
    low, high = _scale(values, zero, limit)
    grid = [[0] * (across // 2) for _ in range(rows)]
    axis = round(high / (high - low) * (down - 1)) if zero else None
    if axis is not None:
        for x in range(0, across, 8):
            grid[axis // 4][x // 2] |= _DOTS[axis % 4][x % 2]
    last: tuple[int, int] | None = None
    for age, value in points:
        if not (0 <= age <= span and math.isfinite(value)):
            continue
        x = min(across - 1, int((1 - age / span) * (across - 1) + 0.5))
        y = min(down - 1, max(0, round((high - value) / (high - low) * (down - 1))))
        for px, py in _between(last, (x, y)):
            grid[py // 4][px // 2] |= _DOTS[py % 4][px % 2]
        last = (x, y)
    labels = _labels(low, high, rows, unit, None if axis is None else axis // 4)
    return [
        f"{label:>{_LABEL}}┤{''.join(chr(_BLANK + cell) for cell in row)}"
        for label, row in zip(labels, grid, strict=True)
    ]


def _scale(values: Sequence[float], zero: bool, limit: float | None) -> tuple[float, float]:
    inside = [*values, *([0.0] if zero else [])]
    if zero and limit is not None and max((abs(v) for v in values), default=0.0) > limit / 3:
        inside += [-limit, limit]
    low, high = min(inside, default=0.0), max(inside, default=1.0)
    least = 1e-3 * max(abs(low), abs(high), 1e-6) if not zero else 0.01
    if high - low < least:
        middle = (low + high) / 2
        low, high = middle - least / 2, middle + least / 2
    edge = 0.05 * (high - low)
    return low - edge, high + edge


def _labels(low: float, high: float, rows: int, unit: str, zero_row: int | None) -> list[str]:
    """Values at the top, at the bottom and in between: at 0 where that is on the scale."""
    if rows == 1:
        return [_number((low + high) / 2, high - low, unit)]
    places = {0: high, rows - 1: low}
    between = rows // 2 if zero_row is None else zero_row
    if 2 <= between <= rows - 3:
        places[between] = high - (high - low) * between / (rows - 1) if zero_row is None else 0.0
    return [_number(places[row], high - low, unit) if row in places else "" for row in range(rows)]


def _number(value: float, span: float, unit: str) -> str:
    decimals = max(0, min(6, 1 - math.floor(math.log10(span)))) if span > 0 else 0
    text = f"{value:.{decimals}f}"
    if len(text) > _LABEL:
        text = f"{value:.2g}"
    return text if len(text) + len(unit) + 1 > _LABEL else f"{text} {unit}".rstrip()


def _between(start: tuple[int, int] | None, end: tuple[int, int]) -> list[tuple[int, int]]:
    """Dots from one point to the next; a gap of more than a few cells is left open."""
    if start is None or end[0] - start[0] > 12:
        return [end]
    steps = max(abs(end[0] - start[0]), abs(end[1] - start[1]), 1)
    return [
        (
            round(start[0] + (end[0] - start[0]) * k / steps),
            round(start[1] + (end[1] - start[1]) * k / steps),
        )
        for k in range(1, steps + 1)
    ]
