"""What a circuit is: a map from parts to the phases of one cycle.

While a phase lasts, the timing node obeys dv/dt = drive − curvature·v: a first-order lag with asymptote
drive/curvature, or a constant-current ramp where the curvature is 0. It ends when the node crosses the
phase's threshold, plus a dead time in which it goes on. Everything else in the program knows phases and
parts, and no circuit by name.

All numbers are arrays of one common (broadcast) shape: a circuit is evaluated for many sets of parts at once.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Parts = Mapping[str, Array]
Output = Literal["high", "low", ""]


@dataclass(frozen=True)
class Part:
    """Anything the build sheet gives a nominal for.

    Attributes
    ----------
    name, unit, says : str
        Name as in the sheet, base unit, one line of description.
    coordinate : "log", "linear" or "inverse"
        The scale in which it is fitted: ln x; x where zero or a sign is possible; 1/x for parts that are
        absent at infinity (a leak resistance, a slew rate).
    nominal : str or None
        Default nominal with tolerance as text, None where the sheet must give one. ``"absent"`` for parasitics.
    base : callable or None
        For a default that follows other parts (V_maintain = V_extinguish − 5 V): parts → value. ``nominal`` then
        holds the spread about it ("± 3 V" or "± 10 %") alone.
    tolerance : str
        Tolerance taken when the sheet gives a nominal without one.
    kind : str
        "resistor", "capacitor", "supply", "level", "threshold", "ratio", "device", "time", "current" or "parasitic":
        what sort of thing it is at the bench. Prior odds and next readings go by it.
    optional : bool
        The sheet may say "none", or leave it out without a default taking its place.
    reach : callable or None
        Range (low, high) in which a fault of this part is looked for, from the nominal parts and
        ``p["period"]``; None: the usual range of its kind.
    """

    name: str
    unit: str
    says: str
    coordinate: Literal["log", "linear", "inverse"] = "log"
    nominal: str | None = None
    base: Callable[[Parts], Array] | None = None
    tolerance: str = "5 %"
    kind: str = "resistor"
    optional: bool = False
    reach: Callable[[Parts], tuple[float, float]] | None = None


@dataclass(frozen=True, eq=False)
class Phase:
    """One stretch of the cycle: dv/dt = drive − curvature·v until ``threshold``, then on for ``delay``.

    Attributes
    ----------
    node : str
        The node that times this phase.
    rising : bool
    drive : Array
        dv/dt at v = 0 (V/s), that is asymptote/τ.
    curvature : Array
        κ = 1/τ (1/s); 0 for a constant-current ramp.
    threshold : Array
        Where it ends (V), before the dead time.
    delay : Array
        Dead time (s).
    start : Array or None
        Voltage at which the circuit makes this phase start; None: where the phase before it ended.
    gain, jump : Array
        The phase starts at gain·v + jump (V), v being where the phase before it ended: a step at the corner.
    slope : Array
        Relative change of the capacitance per volt (1/V): C = C_0·(1 + slope·v), κ and drive being those of C_0.
    output : "high", "low" or ""
        State of the output meanwhile; "" where the circuit has none.
    """

    node: str
    rising: bool
    drive: Array
    curvature: Array
    threshold: Array
    delay: Array | float = 0.0
    start: Array | None = None
    gain: Array | float = 1.0
    jump: Array | float = 0.0
    slope: Array | float = 0.0
    output: Output = ""


@dataclass(frozen=True, eq=False)
class Condition:
    """Something that must hold for the circuit to oscillate: ``margin`` > 0 (in volts or amperes).

    ``says`` is what the built circuit is seen to do where it fails; ``code`` is "never-reaches", "never-fires",
    "latched" or "stuck"; ``part`` the part whose change most simply makes it run; ``rests`` the voltage at which the
    timing node is then found.
    """

    code: str
    margin: Array
    says: str
    part: str = ""
    rests: Array | None = None


@dataclass(frozen=True, eq=False)
class Cycle:
    """The phases of one cycle in order, the output's levels, and the conditions under which it runs.

    ``levels`` maps "high", "low" (V) and "rise_time", "fall_time" (s, 10 % to 90 %) to what the parts say of the
    output; what they do not say is left out. "rise_lag" (s) is how much later the output crosses its middle rising
    than it is driven, where that is slow (a collector that charges a capacitor). ``rests`` maps a node to the level
    at which it is held while another node's phase lasts. ``remarks`` are sentences (code, mask, says) about a regime
    that the closed form enters, shown where the mask holds.
    """

    phases: tuple[Phase, ...]
    conditions: tuple[Condition, ...] = ()
    levels: Mapping[str, Array] = field(default_factory=dict)
    rests: Mapping[str, Array] = field(default_factory=dict)
    remarks: tuple[tuple[str, NDArray[np.bool_], str], ...] = ()


@dataclass(frozen=True)
class Features:
    """What a waveform tells of its circuit, None where it does not: voltages (V), shares of the period, bends κ·t of
    each phase (0: straight), asymptotes (V), time constants (s), and whether the node jumps or is held."""

    upper: float | None = None
    lower: float | None = None
    charge_share: float | None = None
    high_share: float | None = None
    high: float | None = None
    low: float | None = None
    charge_bend: float | None = None
    discharge_bend: float | None = None
    charge_asymptote: float | None = None
    discharge_asymptote: float | None = None
    charge_tau: float | None = None
    discharge_tau: float | None = None
    jumps: bool = False
    holds: bool = False


@dataclass(frozen=True)
class Node:
    """A place where a probe can be clipped.

    ``shape`` as in the cycle stage's Assignment: "timing", "jumping", "holding" or "square". ``loads`` is true where
    a probe there loads the circuit (a timing node that is not a low-impedance one).
    """

    name: str
    shape: Literal["timing", "jumping", "holding", "square"]
    says: str
    loads: bool = False


@dataclass(frozen=True)
class Circuit:
    """A relaxation-oscillator topology.

    Attributes
    ----------
    name, title : str
        As in the sheet; one line for people.
    parts : tuple of Part
        Parasitics included. The names that ``cycle`` receives are those that the build has; an optional part that it
        has not is missing from the mapping, a parasitic never is.
    nodes : tuple of Node
    cycle : callable
        parts → Cycle. Besides the parts it receives the probe's ``G_probe:NODE`` (S) and ``C_probe:NODE`` (F) for
        each node that a probe can load (left out where there is none).
    swaps : tuple of pairs
        Parts that are easily exchanged for each other when a board is stuffed.
    families : tuple of pairs
        Parts that one cause moves together: both thresholds of a chip of another make.
    equations : tuple of str
        For ``benchfit circuits NAME``.
    drawing : str
        A small drawing in text.
    alternatives : tuple of tuples
        Sets of parts of which the sheet gives one: (("R",), ("R_charge", "R_discharge")).
    example : mapping
        Part name → text of a starter build that runs as it stands.
    hazards : tuple of str
        Cautions that belong to this circuit.
    aliases : mapping
        Other names for nodes: {"output": "collector1"}.
    likeness : callable
        Features → how well this circuit could have made them, 0 to about 1, from the waveform alone.
    """

    name: str
    title: str
    parts: tuple[Part, ...]
    nodes: tuple[Node, ...]
    cycle: Callable[[Parts], Cycle]
    swaps: tuple[tuple[str, str], ...] = ()
    families: tuple[tuple[str, str], ...] = ()
    equations: tuple[str, ...] = ()
    drawing: str = ""
    alternatives: tuple[tuple[tuple[str, ...], ...], ...] = ()
    example: Mapping[str, str] = field(default_factory=dict)
    hazards: tuple[str, ...] = ()
    aliases: Mapping[str, str] = field(default_factory=dict)
    likeness: Callable[[Features], float] = lambda seen: 0.0

    def part(self, name: str) -> Part:
        """The part of that name; KeyError where the circuit has none."""
        for part in self.parts:
            if part.name == name:
                return part
        raise KeyError(name)

    def node(self, name: str) -> Node:
        """The node of that name; KeyError where the circuit has none."""
        name = self.aliases.get(name, name)
        for node in self.nodes:
            if node.name == name:
                return node
        raise KeyError(name)
