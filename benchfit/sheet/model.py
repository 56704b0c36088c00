"""What a build sheet says, as data."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

from benchfit.circuits.model import Circuit
from benchfit.quantity import Spread, Toleranced


@dataclass(frozen=True)
class ChannelChoice:
    """Which channel of the capture was clipped to a node, and how the scope was coupled."""

    name: str
    coupling: Literal["dc", "ac"] = "dc"


@dataclass(frozen=True)
class Probe:
    """What a probe does to the node that it sits on: ``resistance`` (Ω) and ``capacitance`` (F) to ground.

    None: as good as none of it. ``scaled``: the export already holds the voltage at the tip; else it is to be
    multiplied by ``ratio``.
    """

    resistance: Toleranced | None = None
    capacitance: Toleranced | None = None
    scaled: bool = True
    ratio: float = 1.0

    @property
    def scale(self) -> float:
        """Factor from the recorded value to the voltage at the tip."""
        return 1.0 if self.scaled else self.ratio


@dataclass(frozen=True)
class Scope:
    """Limits of the instrument's own errors (JCGM 100, type B).

    Attributes
    ----------
    gain : float
        Fraction of the reading, each channel its own.
    offset : float or None
        V, each channel its own; None: 2 % of the channel's span.
    timebase : float
        Fraction of the time, one for the instrument.
    given : bool
        The sheet has the section.
    """

    gain: float = 0.03
    offset: float | None = None
    timebase: float = 50e-6
    given: bool = False


@dataclass(frozen=True)
class CaptureChanges:
    """What was different when one of several captures was taken.

    ``added_C`` (F) and ``added_R`` (Ω) lie across the timing capacitor; ``parts`` hold their values then;
    a probe of None was lifted.
    """

    added_C: Toleranced | None = None
    added_R: Toleranced | None = None
    parts: Mapping[str, Toleranced] = field(default_factory=dict)
    probes: Mapping[str, Probe | None] = field(default_factory=dict)
    channels: Mapping[str, ChannelChoice] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Build:
    """The sheet with the circuit's defaults filled in.

    Attributes
    ----------
    circuit : Circuit
    parts : mapping of Toleranced
        Every part that is there, in the circuit's order: as given, or the circuit's default (one that follows
        other parts is evaluated at their nominals). Parasitics only where the sheet gives them.
    given : frozenset of str
        Those that the sheet gives.
    absent : frozenset of str
        Parts that are not there: "none" in the sheet, optional and left out, or of another alternative.
    parasitics : tuple of str
        Those whose nominal is that they are absent, and that may turn out to be there all the same.
    spreads : mapping of Spread
        The tolerance of each default that follows other parts, about what they make of it.
    """

    circuit: Circuit
    parts: Mapping[str, Toleranced]
    given: frozenset[str]
    absent: frozenset[str]
    parasitics: tuple[str, ...]
    spreads: Mapping[str, Spread]


@dataclass(frozen=True, eq=False)
class Sheet:
    """What was meant to be built, and how it was probed. Made by :meth:`load` or :meth:`parse`.

    Attributes
    ----------
    title : str
    circuit : Circuit or None
    target_frequency : Toleranced or None
        Hz; a target period is converted. Its limits are the acceptance limits where ``stated``.
    target_duty : Toleranced or None
        Fraction of the period.
    parts : mapping of Toleranced
        As the sheet gives them; without a tolerance of their own they have the circuit's default one.
    absent : frozenset of str
        Parts that the sheet says are not there ("none").
    readings : mapping of Toleranced
        Meter readings of parts, and "frequency", "duty", "period"; the tolerance is the meter's.
    channels : mapping of ChannelChoice
        By node.
    probes : mapping of Probe
        By node.
    scope : Scope
    record : mapping of str
        Free text, passed on.
    captures : mapping of CaptureChanges
        By the capture's number, from 1.
    path : str
        Where it was read from; "" for a text.
    source : mapping
        The sheet's own words, overrides included, as TOML has them.
    """

    title: str = ""
    circuit: Circuit | None = None
    target_frequency: Toleranced | None = None
    target_duty: Toleranced | None = None
    parts: Mapping[str, Toleranced] = field(default_factory=dict)
    absent: frozenset[str] = frozenset()
    readings: Mapping[str, Toleranced] = field(default_factory=dict)
    channels: Mapping[str, ChannelChoice] = field(default_factory=dict)
    probes: Mapping[str, Probe] = field(default_factory=dict)
    scope: Scope = Scope()
    record: Mapping[str, str] = field(default_factory=dict)
    captures: Mapping[int, CaptureChanges] = field(default_factory=dict)
    path: str = ""
    source: Mapping[str, Any] = field(default_factory=dict, repr=False)

    @classmethod
    def load(cls, path: str | Path | None, overrides: Sequence[str] = ()) -> Sheet:
        """The build sheet in a file; ``overrides`` are "dotted.key=value" each.

        Without a path the overrides stand in for the sheet.

        Raises
        ------
        SheetError
            Where the file cannot be read, or what it says cannot be used.
        """
        from benchfit.sheet.reading import read_sheet

        return read_sheet(path, overrides)

    @classmethod
    def parse(cls, text: str, overrides: Sequence[str] = (), path: str = "") -> Sheet:
        """The build sheet in a text (TOML); otherwise as :meth:`load`."""
        from benchfit.sheet.reading import parse_sheet

        return parse_sheet(text, overrides, path)

    def build(self) -> Build:
        """Every part of the circuit, defaults filled in.

        Raises
        ------
        SheetError
            Where the sheet names no circuit.
        """
        from benchfit.sheet.build import complete

        return complete(self)

    def dump(self) -> str:
        """The sheet as TOML text, overrides included, without its comments."""
        from benchfit.sheet.toml import dump

        return dump(self.source)

    @property
    def digest(self) -> str:
        """SHA-256 of what the sheet says; comments, layout and order do not count."""
        return hashlib.sha256(json.dumps(self.source, sort_keys=True, default=str).encode()).hexdigest()

    def __reduce__(self) -> tuple[Any, ...]:
        # A circuit holds functions that cannot be pickled: a worker process reads the sheet anew.
        return (Sheet.parse, (self.dump(), (), self.path))
