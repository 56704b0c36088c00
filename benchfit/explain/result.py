"""What an explanation is: frozen results in base SI units, ready to be shown or recorded."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from benchfit.errors import Remark


@dataclass(frozen=True)
class Quantity:
    """A value with its standard uncertainty (k = 1) and unit; ``u_noise`` is the record's own share (type
    A)."""

    value: float
    u: float | None
    unit: str
    u_noise: float | None = None


@dataclass(frozen=True)
class PartFound:
    """A part as the build turns out to have it.

    ``nominal`` and ``limits`` as the sheet states them (None for an absent parasitic); ``deviation`` =
    value/nominal − 1; ``within``: inside its limits; ``known_from``: "capture", "reading" or "build sheet".
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
class CaptureFacts:
    """What the record says of the capture that was explained (section 5, ``capture``)."""

    path: str
    samples: int
    interval: float
    channels: tuple[Mapping[str, object], ...]
    cycles: float | None


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
