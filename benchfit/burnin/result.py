"""What a log says, as data: frozen results in base SI units, ready to be shown or recorded."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Deviation:
    """Allan deviation at one averaging time.

    Attributes
    ----------
    averaging_time : float
        s.
    adev : float
        Of the fractional frequency.
    u : float
        Standard uncertainty, adev/√(2·edf).
    low, high : float
        68.3 % confidence interval (chi-squared with ``edf`` degrees of freedom).
    edf : float
    noise : int
        Exponent α of the spectrum S_y(f) ∝ f^α that the interval was worked out for: 2, 1 (phase noise), 0
        white, −1 flicker, −2 random walk of frequency.
    """

    averaging_time: float
    adev: float
    u: float
    low: float
    high: float
    edf: float
    noise: int


@dataclass(frozen=True)
class Leaving:
    """When a quantity will leave its limits, s from the run's start: best estimate and 95 % interval.

    ``latest`` is None where the interval has no end within what may be extrapolated. Where nothing can
    honestly be said, all three are None and ``why`` says so. ``limit`` is the limit that is headed for.
    """

    low: float
    high: float
    limit: float | None = None
    at: float | None = None
    earliest: float | None = None
    latest: float | None = None
    why: str = ""


@dataclass(frozen=True)
class QuantityTrend:
    """What one quantity does over the run; drifts in its unit per second.

    Attributes
    ----------
    name, unit, kind : str
        ``kind`` is "measured" or "part".
    records : int
        That have the quantity.
    first, last, mean, u : float
        u: standard uncertainty of the mean, the scope's share included.
    law : str or None
        "none", "linear", "logarithmic", "settling", "step"; None where too few records tell.
    probability : float
        Of that law; ``runner_up`` names the next likely one with its own.
    drift, u_drift : float
        Mean rate over the run; for a step what is left beside it.
    change, u_change : float
        Over the whole run.
    drift_now : float
        Rate at the run's end.
    parameter, u_parameter : float
        Settling: time constant; logarithmic: age at the start; step: its moment (all s). NaN otherwise.
    scatter : float
        White scatter of a single record.
    wander : float
        Standard deviation of the random walk over the whole run.
    left_out : int
        Stray records left out of the drift.
    leaving : Leaving or None
        Where the quantity has limits.
    """

    name: str
    unit: str
    kind: str
    records: int
    first: float
    last: float
    mean: float
    u: float
    law: str | None = None
    probability: float = float("nan")
    runner_up: tuple[str, float] = ("none", 0.0)
    drift: float = float("nan")
    u_drift: float = float("nan")
    change: float = float("nan")
    u_change: float = float("nan")
    drift_now: float = float("nan")
    parameter: float = float("nan")
    u_parameter: float = float("nan")
    scatter: float = float("nan")
    wander: float = float("nan")
    left_out: int = 0
    leaving: Leaving | None = None

    @property
    def is_drifting(self) -> bool:
        """A law other than none was found."""
        return self.law not in (None, "none")


@dataclass(frozen=True)
class Cause:
    """What the frequency's drift is due to: shares of it, with the relative change of frequency that each
    makes.

    ``change`` is the part's own relative change (absolute, in SI, for a parasitic or a part that may be 0);
    ``either`` names the parts that the captures cannot tell from it.
    """

    cause: str
    share: float
    u: float
    frequency_change: float
    change: float
    unit: str
    either: tuple[str, ...] = ()


@dataclass(frozen=True)
class AlarmSeen:
    """An alarm: when it was raised and by what, and which record cleared it."""

    seq: int
    acquired: float
    unit: str
    quantity: str
    value: float
    limit: float
    text: str
    cleared: int | None


@dataclass(frozen=True)
class GapSeen:
    """Nothing was recorded between two moments (Unix time); "stopped", "interrupted" or "late"."""

    began: float
    ended: float
    why: str
    unit: str


@dataclass(frozen=True)
class Drawn:
    """A quantity for drawing: hours from the start, block means, smallest and largest, the law's curve."""

    time: Array
    mean: Array
    low: Array
    high: Array
    law: Array


@dataclass(frozen=True, eq=False)
class UnitTrend:
    """What the log says of one unit ("" where units have no names)."""

    unit: str
    records: int
    failures: int
    span: float
    quantities: Mapping[str, QuantityTrend]
    causes: tuple[Cause, ...] = ()
    unexplained: float | None = None
    why_no_cause: str = ""
    stability: tuple[Deviation, ...] = ()
    interval: float | None = None
    drawn: Mapping[str, Drawn] = field(default_factory=dict)
    limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)


@dataclass(frozen=True)
class Departure:
    """How a unit's quantity moves against its siblings, their common movement taken off.

    ``law`` and ``drift`` (relative, per s) of the difference; ``level``: mean relative distance from the
    siblings' median; the ``u``s are standard uncertainties that include how far the siblings differ among
    themselves.
    """

    unit: str
    quantity: str
    is_departing: bool
    law: str
    change: float
    u_change: float
    drift: float
    u_drift: float
    level: float
    u_level: float
    is_off: bool


@dataclass(frozen=True, eq=False)
class Trend:
    """What a log says. Times are Unix times (s)."""

    path: str
    title: str
    circuit: str | None
    started: float | None
    ended: float | None
    records: int
    failures: int
    is_closed: bool
    gaps: tuple[GapSeen, ...]
    notes: tuple[str, ...]
    events: tuple[tuple[float, str], ...]
    units: tuple[UnitTrend, ...]
    alarms: tuple[AlarmSeen, ...]
    departures: tuple[Departure, ...] = ()
    errors: tuple[tuple[str, int], ...] = ()
