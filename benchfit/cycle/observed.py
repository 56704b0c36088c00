"""What one node shows, before nodes are joined."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.constants import PhaseFit

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Observed:
    """Constants of one node, named as in CycleConstants, with their covariance and what belongs to them.

    ``turns`` are the starts of the cycles (s, from the first sample), ``cycles`` the number of each turn (whole
    numbers, gaps where cycles are missing).
    """

    names: tuple[str, ...]
    values: Array
    covariance: Array
    turns: Array = field(default_factory=lambda: np.empty(0))
    jitter: tuple[float, float] | None = None
    noise: float = 0.0
    highest: tuple[float, float] | None = None
    lowest: tuple[float, float] | None = None
    phases: tuple[PhaseFit, ...] = ()

    def value(self, name: str) -> float:
        return float(self.values[self.names.index(name)])

    def u(self, name: str) -> float:
        i = self.names.index(name)
        return float(np.sqrt(self.covariance[i, i]))
