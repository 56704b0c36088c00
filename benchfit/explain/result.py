"""What an explanation is: frozen results in base SI units, ready to be shown or recorded."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

from benchfit.errors import Remark


@dataclass(frozen=True)
class Quantity:
    """A value with its standard uncertainty (k = 1) and unit; ``u_noise`` is the record's own share (type A)."""

    value: float
    u: float | None
    unit: str
    u_noise: float | None = None


@dataclass(frozen=True)
class PartFound:
    """A part as the build turns out to have it.

    ``nominal`` and ``limits`` as the sheet states them (None for an absent parasitic); ``deviation`` = value/nominal
    − 1; ``within``: inside its limits; ``known_from``: "capture", "reading" or "build sheet".
    """

    name: str
    value: float | None
    u: float | None
    unit: str
    nominal: float | None
    limits: tuple[float, float] | None
    deviation: float | None
    within: bool | None
    known_from: str


@dataclass(frozen=True)
class Share:
    """One cause's share of a miss, as a fraction of the target, with its u."""

    cause: str
    share: float
    u: float | None


@dataclass(frozen=True)
class Miss:
    """on_paper + all shares + unexplained = miss; all but target and built are fractions of the target."""

    target: float
    built: float | None
    miss: float | None
    on_paper: float | None
    shares: tuple[Share, ...] = ()
    unexplained: float | None = None
    limits: tuple[float, float] | None = None


@dataclass(frozen=True)
class Suspect:
    """A hypothesis of which parts are off: ``change`` is effective/nominal − 1, a parasitic's value in SI."""

    causes: tuple[str, ...]
    change: Mapping[str, float]
    probability: float
    says: str


@dataclass(frozen=True)
class RuledOut:
    """What was looked for and what in the data speaks against it."""

    cause: str
    by: str


@dataclass(frozen=True)
class NextReading:
    """A reading a bench can give, and the expected rise of the first suspect's probability."""

    reading: str
    node_or_part: str
    would_settle: float


@dataclass(frozen=True)
class Remedy:
    """A standard value that brings the build onto its target, with what it should then do."""

    part: str
    before: float
    after: float
    series: str
    predicts: Mapping[str, Quantity]


@dataclass(frozen=True)
class Candidate:
    """A circuit that could have made this waveform, where no sheet names one; scores sum to 1."""

    circuit: str
    score: float


@dataclass(frozen=True)
class Rest:
    """Acquisitions since the trimmer was last moved.

    ``mean`` of ``count`` values; ``noise`` is the standard uncertainty of a single one by the record's own
    scatter, ``scope`` what averaging does not lessen; ``began`` and ``last`` in s.
    """

    mean: float
    noise: float
    scope: float
    began: float
    last: float
    count: int = 1

    @property
    def u(self) -> float:
        """Standard uncertainty of the mean."""
        return math.hypot(self.noise / math.sqrt(self.count), self.scope)


@dataclass(frozen=True)
class Turn:
    """What to do with the trimmer.

    Attributes
    ----------
    part, unit, quantity : str
        The trimmer, its unit, and what it is turned for: "frequency" or "duty".
    low, high : float
        Its ends (in ``unit``).
    now, goal : float or None
        Its value and the one to turn to; None where the model has none.
    u : float or None
        u of goal − now; None before the first explanation: how well its value is known is then not known.
    is_there : bool
        goal − now is nothing within what the readings alone can tell.
    is_reachable : bool
        Whether ``goal`` lies between its ends.
    miss, expanded, limit : float
        (built − target)/target without the probe, its U (k = 2), and the limit.
    best : float or None
        The miss that is left at the nearer end where the goal is out of reach.
    is_tight : bool
        U is at most a quarter of the limit.
    wait : float or None
        Seconds at rest until it is (0 where it is; None: never, the scope alone is worse).
    rest : Rest
        The readings that it rests on.
    """

    part: str
    unit: str
    quantity: str
    low: float
    high: float
    now: float | None
    goal: float | None
    u: float | None
    is_there: bool
    is_reachable: bool
    miss: float
    expanded: float
    limit: float
    best: float | None
    is_tight: bool
    wait: float | None
    rest: Rest

    @property
    def travel(self) -> float | None:
        """How far to turn, as a signed share of the trimmer's range; None where that is not known."""
        if self.now is None or self.goal is None:
            return None
        return (self.goal - self.now) / (self.high - self.low)

    @property
    def is_inside(self) -> bool:
        """Whether the build is inside its limit beyond doubt: |miss| + U ≤ limit (JCGM 106)."""
        return abs(self.miss) + self.expanded <= self.limit


@dataclass(frozen=True)
class CaptureFacts:
    """What the record says of the capture that was explained (section 5, ``capture``)."""

    path: str
    samples: int
    interval: float
    channels: tuple[Mapping[str, object], ...]
    cycles: float | None


@dataclass(frozen=True)
class Changed:
    """A part that is another one than when the build was found.

    ``before`` and ``after`` are nominals (None: not there); where ``is_taken`` the nominal is the same and a
    remedy's part is taken to have been fitted, ``before`` is what was found.
    """

    part: str
    before: float | None
    after: float | None
    unit: str
    is_taken: bool = False


@dataclass(frozen=True)
class AsFound:
    """What a change to the build did, by the record of before.

    Attributes
    ----------
    path : str
        The capture of then.
    verdict : str or None
        The verdict of then.
    before, predicted, obtained : mapping of Quantity
        Frequency (Hz) and duty: as found, what the record's remedy said the change would give (empty where it
        named no such change), as left.
    is_lifted : bool
        Where a probe was on it, before and obtained are those without it.
    changed : tuple of Changed
    effect : str or None
        "as predicted", "partly" or "not by this change"; None where nothing was predicted.
    """

    path: str
    verdict: str | None
    before: Mapping[str, Quantity]
    predicted: Mapping[str, Quantity]
    obtained: Mapping[str, Quantity]
    is_lifted: bool
    changed: tuple[Changed, ...] = ()
    effect: str | None = None


@dataclass(frozen=True)
class Explanation:
    """The whole answer for one capture (or one joint set): section 5 of the contract, as data.

    ``measured`` maps the contract's names to quantities (None where unknown). ``model`` holds the fitted
    circuit's curve of one cycle for drawing, {node: (times from the cycle's start, volts)}, and under
    "nominal:NODE" that of the sheet's nominal parts.
    """

    captures: tuple[CaptureFacts, ...]
    oscillates: bool
    measured: Mapping[str, Quantity | None]
    circuit: str | None
    title: str = ""
    candidates: tuple[Candidate, ...] = ()
    parts: tuple[PartFound, ...] = ()
    unseparated: tuple[tuple[str, ...], ...] = ()
    miss: Mapping[str, Miss] | None = None
    suspects: tuple[Suspect, ...] = ()
    settled: bool | None = None
    ruled_out: tuple[RuledOut, ...] = ()
    next_readings: tuple[NextReading, ...] = ()
    remedies: tuple[Remedy, ...] = ()
    without_probe: Mapping[str, Quantity] | None = None
    verdict: str | None = None
    warnings: tuple[Remark, ...] = ()
    record_notes: Mapping[str, str] = field(default_factory=dict)
    finding: str = ""
    model: Mapping[str, tuple[tuple[float, ...], tuple[float, ...]]] = field(default_factory=dict)
    as_found: AsFound | None = None
