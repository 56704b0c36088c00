"""A value with its limits, and a tolerance alone."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from benchfit.errors import QuantityError


@dataclass(frozen=True)
class Toleranced:
    """A value with its limits.

    Attributes
    ----------
    nominal, low, high : float
        In ``unit`` (base SI); low ≤ nominal ≤ high.
    unit : str
        "Ω", "F", "V", "A", "s", "Hz", "S", "K", "°C", "V/s", "1/V", or "1" for a ratio.
    stated : bool
        A tolerance stood in the text; else the limits are a default (or the nominal itself).
    text : str
        As it was written.
    """

    nominal: float
    low: float
    high: float
    unit: str
    stated: bool
    text: str

    @property
    def is_exact(self) -> bool:
        """Whether the limits leave it no room."""
        return self.low == self.high

    def prior_linear(self) -> tuple[float, float]:
        """Mean and standard deviation (in ``unit``) of the rectangle between the limits: JCGM 100, 4.3.7."""
        return 0.5 * (self.low + self.high), (self.high - self.low) / math.sqrt(12)

    def prior_log(self) -> tuple[float, float]:
        """Mean and standard deviation of ln x, a rectangle between ln low and ln high.

        Raises
        ------
        QuantityError
            Where the lower limit is not above 0.
        """
        if self.low <= 0:
            raise QuantityError(f'"{self.text}": the lower limit must be above 0', text=self.text)
        low, high = math.log(self.low), math.log(self.high)
        return 0.5 * (low + high), (high - low) / math.sqrt(12)

    def reciprocal(self, unit: str) -> Toleranced:
        """1/x with the limits exchanged: a period as a frequency. The value must not reach 0."""
        if self.low * self.high <= 0:
            raise QuantityError(f'"{self.text}": must not reach 0', text=self.text)
        return replace(self, nominal=1 / self.nominal, low=1 / self.high, high=1 / self.low, unit=unit)


@dataclass(frozen=True)
class Spread:
    """A tolerance alone: how far below and above a nominal (both ≥ 0), as fractions of it or in ``unit``."""

    down: float
    up: float
    is_relative: bool
    unit: str
    text: str

    def about(self, nominal: float, *, stated: bool = False, text: str = "") -> Toleranced:
        """The nominal (in ``unit``) with this spread about it."""
        scale = abs(nominal) if self.is_relative else 1.0
        low, high = nominal - self.down * scale, nominal + self.up * scale
        return Toleranced(nominal, low, high, self.unit, stated, text or self.text)
