"""What one node shows, before nodes are joined."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.constants import PhaseFit
from benchfit.errors import Remark


@dataclass(frozen=True, eq=False)
class Observed:
    """Constants of one node, named as in CycleConstants, with their covariance and what belongs to them.

    ``turns`` are the starts of the cycles (s, from the first sample); ``series`` single cycles' "period" (s), "upper"
    and "lower" (V); ``share_jitter`` the part of its share's variance that is the oscillator's own jitter.
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
    remarks: tuple[Remark, ...] = ()
    series: dict[str, Array] = field(default_factory=dict)
    share_jitter: float = 0.0
    node: str = ""

    def value(self, name: str) -> float:
        return float(self.values[self.names.index(name)])

    def u(self, name: str) -> float:
        i = self.names.index(name)
        return float(np.sqrt(self.covariance[i, i]))
