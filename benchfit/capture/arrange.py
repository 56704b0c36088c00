"""How the rows of a file become samples on an even time axis."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Mask = NDArray[np.bool_]


class Step(Protocol):
    """One rearrangement of rows, applied to every column alike."""

    def values(self, column: Floats) -> Floats:
        """The column's values, rearranged."""
        ...

    def mask(self, column: Mask) -> Mask:
        """A mask on the column's values, rearranged."""
        ...


@dataclass(frozen=True)
class Keep:
    """Rows ``start`` to ``stop`` (past the end) as they are."""

    start: int
    stop: int

    def values(self, column: Floats) -> Floats:
        return column[self.start : self.stop]

    def mask(self, column: Mask) -> Mask:
        return column[self.start : self.stop]


@dataclass(frozen=True)
class Pairs:
    """Mid-points of rows taken two by two."""

    def values(self, column: Floats) -> Floats:
        return 0.5 * (column[::2] + column[1::2])

    def mask(self, column: Mask) -> Mask:
        return column[::2] | column[1::2]


@dataclass(frozen=True)
class Place:
    """Rows put at ``places`` of ``count`` samples; the others stay without a value."""

    places: NDArray[np.intp]
    count: int

    def values(self, column: Floats) -> Floats:
        result = np.full(self.count, np.nan, dtype=np.float64)
        result[self.places] = column
        return result

    def mask(self, column: Mask) -> Mask:
        result = np.zeros(self.count, dtype=bool)
        result[self.places] = column
        return result


@dataclass(frozen=True)
class Blend:
    """Values between the rows' stamps, on a straight line from row to row, at ``count`` even times."""

    stamps: Floats
    interval: float
    count: int

    def _times(self) -> Floats:
        return float(self.stamps[0]) + self.interval * np.arange(self.count, dtype=np.float64)

    def values(self, column: Floats) -> Floats:
        known = np.isfinite(column)
        if not known.any():
            return np.full(self.count, np.nan, dtype=np.float64)
        return np.asarray(np.interp(self._times(), self.stamps[known], column[known]), dtype=np.float64)

    def mask(self, column: Mask) -> Mask:
        return np.interp(self._times(), self.stamps, column.astype(np.float64)) > 0.0


@dataclass(frozen=True)
class Hold:
    """Each row's value until the next row's stamp, at ``count`` even times."""

    stamps: Floats
    interval: float
    count: int

    def _rows(self) -> NDArray[np.intp]:
        times = self.stamps[0] + self.interval * np.arange(self.count, dtype=np.float64)
        # A time that rounding puts just before a change belongs to it.
        rows = np.searchsorted(self.stamps, times + 1e-6 * self.interval, side="right") - 1
        return np.asarray(np.clip(rows, 0, self.stamps.size - 1), dtype=np.intp)

    def values(self, column: Floats) -> Floats:
        return column[self._rows()]

    def mask(self, column: Mask) -> Mask:
        return column[self._rows()]
