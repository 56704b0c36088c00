"""Alarms: a value outside its limits, told from its noise, and told once.

An alarm is raised by a record that is beyond a limit by more than twice its own noise, or by a second
record in a row that is beyond it at all. It is cleared only by several records in a row that are inside by a
margin: so noise at a limit raises one alarm and not a stream of them (a Schmitt trigger's hysteresis).
"""

from __future__ import annotations

import math
import re
from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass, field

from benchfit.errors import UsageError

SHARE = 0.1
"""Margin inside the limits for clearing, as a share of the limits' half-width, at least."""
SIGMAS = 3.0
"""The same in the records' own scatter, at least (but never more than half the half-width)."""
QUIET = 3
"""Records in a row inside by the margin that clear an alarm."""
MEASURED = {
    "frequency": "Hz",
    "period": "s",
    "duty": "1",
    "jitter": "s",
    "charge_time": "s",
    "discharge_time": "s",
    "upper": "V",
    "lower": "V",
    "charge_asymptote": "V",
    "charge_time_constant": "s",
    "discharge_asymptote": "V",
    "discharge_time_constant": "s",
    "high": "V",
    "low": "V",
    "rise_time": "s",
    "fall_time": "s",
}
"""The measured quantities that a limit may be set on, and their units (contract, section 5)."""
_MEMORY = 50
_RELATIVE = re.compile(r"(?:±|\+-|\+/-)?\s*([0-9.]+(?:[eE][+-]?\d+)?)\s*(%|ppm)")
_SIDES = re.compile(r"-\s*([0-9.]+)\s*(%|ppm)\s*/\s*\+\s*([0-9.]+)\s*(%|ppm)")
_SCALE = {"%": 1e-2, "ppm": 1e-6}


@dataclass(frozen=True)
class Limit:
    """Limits of one quantity: two values in its unit, or two fractions of its first record's value."""

    quantity: str
    low: float
    high: float
    is_relative: bool
    text: str

    def about(self, first: float | None) -> tuple[float, float] | None:
        """Lower and upper limit in the quantity's unit; None while a relative one has no first record."""
        if not self.is_relative:
            return self.low, self.high
        if first is None or not math.isfinite(first):
            return None
        return first + self.low * abs(first), first + self.high * abs(first)


@dataclass(frozen=True)
class Raised:
    """An alarm begins: the value and the limits that it is outside of (in the quantity's unit)."""

    quantity: str
    value: float
    low: float
    high: float
    text: str

    @property
    def limit(self) -> float:
        """The limit that was passed."""
        return self.high if self.value > self.high else self.low


@dataclass(frozen=True)
class Cleared:
    """The alarm of a quantity is over."""

    quantity: str


def parse_limit(text: str, units: dict[str, str]) -> Limit:
    """ "frequency=2%" (of the first record), "duty=-1%/+2%", "frequency=11.5..12.5Hz", "upper=6 V ± 0.1 V".

    Parameters
    ----------
    text : str
    units : dict
        Unit of every quantity that may be named.

    Raises
    ------
    UsageError
        Where the quantity is not known, or the limits cannot be read.
    """
    from difflib import get_close_matches

    from benchfit.errors import QuantityError
    from benchfit.quantity import parse

    name, equals, spec = (part.strip() for part in text.partition("="))
    if not equals or not spec:
        raise UsageError(
            f"--limit {text}: write it as NAME=LIMITS, for instance frequency=2% or frequency=11.5..12.5Hz"
        )
    if name not in units:
        near = get_close_matches(name, list(units), 1, 0.0)
        hint = f"; did you mean {near[0]}?" if near else ""
        raise UsageError(f"--limit {text}: there is no measured quantity and no part {name}{hint}")
    if one := _RELATIVE.fullmatch(spec):
        half = float(one[1]) * _SCALE[one[2]]
        return Limit(name, -half, half, True, spec)
    if two := _SIDES.fullmatch(spec):
        return Limit(name, -float(two[1]) * _SCALE[two[2]], float(two[3]) * _SCALE[two[4]], True, spec)
    try:
        found = parse(spec, units[name])
    except QuantityError as fault:
        raise UsageError(f"--limit {name}: {fault.says}") from None
    if not found.stated or found.low >= found.high:
        raise UsageError(f"--limit {text}: give two limits, for instance {name}=2% or {name}=LOW..HIGH")
    return Limit(name, found.low, found.high, False, spec)


@dataclass(eq=False)
class Watch:
    """Watches one quantity of one unit; ``step`` is fed every record's value in turn.

    Attributes
    ----------
    limit : Limit
    first : float or None
        The first record's value, where there is one already.
    standing : bool
        An alarm is on.
    """

    limit: Limit
    first: float | None = None
    standing: bool = False
    _outside: int = 0
    _quiet: int = 0
    _last: float | None = None
    _steps: deque[float] = field(default_factory=lambda: deque(maxlen=_MEMORY))

    def prime(self, values: Iterable[float]) -> None:
        """Learn the scatter from records that were there before."""
        for value in values:
            self._learn(value)

    def step(self, value: float, noise: float = math.nan) -> Raised | Cleared | None:
        """The next record's value and its own noise (NaN: unknown, taken for none)."""
        if not math.isfinite(value):
            return None
        if self.first is None:
            self.first = value
        bounds = self.limit.about(self.first)
        self._learn(value)
        if bounds is None:
            return None
        low, high = bounds
        beyond = max(value - high, low - value)
        if self.standing:
            self._quiet = self._quiet + 1 if beyond < -self._margin(low, high) else 0
            if self._quiet < QUIET:
                return None
            self.standing, self._outside = False, 0
            return Cleared(self.limit.quantity)
        self._outside = self._outside + 1 if beyond > 0 else 0
        certain = beyond > 2 * (noise if math.isfinite(noise) else 0.0)
        if beyond > 0 and (certain or self._outside > 1):
            self.standing, self._quiet = True, 0
            return Raised(self.limit.quantity, value, low, high, self.limit.text)
        return None

    def _learn(self, value: float) -> None:
        if self._last is not None:
            self._steps.append(abs(value - self._last))
        self._last = value

    def _margin(self, low: float, high: float) -> float:
        half = 0.5 * (high - low)
        return min(max(SHARE * half, SIGMAS * self.scatter), 0.5 * half)

    @property
    def scatter(self) -> float:
        """Scatter of single records, from the median step between neighbours (Gaussian: 0.954·σ)."""
        if len(self._steps) < 5:
            return 0.0
        return sorted(self._steps)[len(self._steps) // 2] / 0.954
