"""Two-transistor (collector-coupled) astable: each half is timed by the base resistor and its coupling capacitor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.circuits.lag import Lag, lag, parasitics, phase
from benchfit.circuits.likeness import close, yes
from benchfit.circuits.model import (
    Array,
    Circuit,
    Condition,
    Cycle,
    Features,
    Node,
    Output,
    Part,
    Parts,
    Phase,
)
from benchfit.circuits.solve import after, time_to


@dataclass(frozen=True, eq=False)
class _Side:
    """A base with its resistor and capacitor.

    ``collector`` names what recovers while it is off: the load, and the capacitor that hangs on it. ``plates``: the
    base less its capacitor's resistive drop, as its transistor turns on (V).
    """

    base: str
    now: Lag
    capacitor: str
    collector: tuple[str, str]
    output: Output
    plates: Array


def _side(p: Parts, number: int) -> _Side:
    other = 3 - number
    base, capacitor = f"base{number}", f"C{number}"
    now = lag(p, (1 / p[f"R{number}"], p["supply"]), node=base, capacitor=capacitor, foot=p["V_CE"])
    end = after(phase(now, p["V_on"], rising=True), p["V_on"], p["delay"])
    plates = end * (1 + now.conductance * now.esr) - now.esr * now.current
    output: Output = "high" if number == 1 else "low"
    return _Side(base, now, capacitor, (f"RC{number}", f"C{other}"), output, plates)


def _half(p: Parts, side: _Side, kick: Array) -> tuple[Phase, Array]:
    """The phase in which a base is off, and its duration (s): it starts below V_BE by the kick it is given.

    Capacitance from the base to ground divides the kick by C/(C + C_stray + C_probe); a series resistance of
    the capacitor drops what the base resistor drives through it.
    """
    now = side.now
    aside = p["C_stray"] + p.get(f"C_probe:{side.base}", np.float64(0.0))
    bent = p[side.capacitor] * (1 + p["C_slope"] * (p["V_BE"] - p["V_CE"] - kick))
    plates = np.maximum(p["V_BE"] - kick * bent / (bent + aside), -p["V_breakdown"])
    start = (plates + now.esr * now.current) / (1 + now.conductance * now.esr)
    one = phase(
        now, p["V_on"], rising=True, node=side.base, start=start, delay=p["delay"], output=side.output
    )
    return one, np.where(start < p["V_on"], time_to(one, start, p["V_on"]), 0.0) + p["delay"]


def _head_start(p: Parts, other: _Side) -> Array:
    """How far a collector is up as soon as its transistor turns off (V).

    Its capacitor's other plate is held at V_BE by the base that has just turned on, which it pulled up there from
    where that base began to conduct.
    """
    return np.maximum(p["V_BE"] - other.plates, 0.0)


def _recovered(p: Parts, side: _Side, other: _Side, time: Array) -> Array:
    """How far a collector has recovered after ``time`` (s), and so falls when its transistor turns on (V)."""
    load, capacitor = side.collector
    full = p["supply"] - p["V_CE"]
    if load not in p:
        return full + 0 * time
    return full - (full - _head_start(p, other)) * np.exp(-time / ((p[load] + p["ESR"]) * p[capacitor]))


def _half_way(p: Parts, side: _Side, other: _Side, reached: Array) -> Array:
    """Time (s) until a recovering collector crosses the middle of what it will have ``reached`` (V)."""
    load, capacitor = side.collector
    full = p["supply"] - p["V_CE"]
    if load not in p:
        return 0 * reached
    # A leg's resistance lifts the collector by its share of the recovering current.
    left = (full - _head_start(p, other)) * p[load] / (p[load] + p["ESR"])
    return (p[load] + p["ESR"]) * p[capacitor] * np.log(np.maximum(left / (full - 0.5 * reached), 1.0))


def _round(p: Parts, one: _Side, two: _Side, kick: Array) -> tuple[Phase, Phase, Array, Array]:
    """Both phases of the cycle that ``kick`` (V) at base 1 begins, the kick at base 2, the next at base 1."""
    first, time_1 = _half(p, one, kick)
    kick_2 = _recovered(p, one, two, time_1)
    second, time_2 = _half(p, two, kick_2)
    return first, second, kick_2, _recovered(p, two, one, time_2)


def _settled_kick(p: Parts, one: _Side, two: _Side, full: Array) -> Array:
    """The kick at base 1 that a whole cycle reproduces: each depends on how long the other collector had.

    A fixed point in one number, found by Aitken's extrapolation (Steffensen's method).
    """
    kick = full + 0.0 * p["V_BE"]
    if "RC1" not in p and "RC2" not in p:
        return kick
    for _ in range(2):
        once = _round(p, one, two, kick)[3]
        twice = _round(p, one, two, once)[3]
        bend = twice - 2 * once + kick
        moves = np.abs(bend) > 1e-9 * full
        jump = np.where(moves, (once - kick) ** 2 / np.where(moves, bend, 1.0), 0.0)
        kick = np.where(moves, np.clip(kick - jump, 0.0, full), twice)
    return kick


def _cycle(p: Parts) -> Cycle:
    full = p["supply"] - p["V_CE"]
    side_1, side_2 = _side(p, 1), _side(p, 2)
    kick_1 = _settled_kick(p, side_1, side_2, full)
    one, two, kick_2, _ = _round(p, side_1, side_2, kick_1)
    broke = p["V_BE"] - np.maximum(kick_1, kick_2) < -p["V_breakdown"]
    short = (kick_1 < 0.97 * full) | (kick_2 < 0.97 * full)
    return Cycle(
        phases=(one, two),
        conditions=(
            Condition(
                "stuck",
                side_1.now.asymptote - p["V_on"],
                "base 1 never rises to where its transistor conducts",
                "R1",
                side_1.now.asymptote,
            ),
            Condition(
                "stuck",
                side_2.now.asymptote - p["V_on"],
                "base 2 never rises to where its transistor conducts",
                "R2",
                side_2.now.asymptote,
            ),
        ),
        levels={
            "high": p["V_CE"] + kick_2,
            "low": p["V_CE"] + 0 * kick_2,
            "rise_lag": _half_way(p, side_1, side_2, kick_2),
        },
        rests={"base1": p["V_BE"], "base2": p["V_BE"]},
        remarks=(
            (
                "breakdown",
                np.asarray(broke),
                "the bases are driven beyond their reverse breakdown: the frequency rises with the "
                "supply, and the transistors suffer; diodes in the base or emitter leads prevent it",
            ),
            (
                "unrecovered",
                np.asarray(short),
                "a collector has not recovered when its transistor turns on again: the half-cycle "
                "it times is shortened",
            ),
        ),
    )


def _likeness(seen: Features) -> float:
    """A base driven far below zero and held near +0.7 V; or a unipolar output of any duty."""
    unipolar = (
        None if seen.low is None or seen.high is None else -0.1 * seen.high < seen.low < 0.3 * seen.high
    )
    top = close(seen.upper, 0.6, 0.25) if seen.upper is not None else 0.5
    below = yes(seen.lower < -1.0) if seen.lower is not None else 0.5
    return 0.4 * top * below * yes(unipolar) * close(seen.high_share, 0.5, 0.25)


CIRCUIT = Circuit(
    name="two-transistor",
    title="two-transistor (collector-coupled) astable",
    parts=(
        Part("supply", "V", "supply", tolerance="5 %", kind="supply"),
        Part("R1", "Ω", "base resistor of transistor 1"),
        Part("C1", "F", "capacitor from collector 2 to base 1", tolerance="10 %", kind="capacitor"),
        Part("R2", "Ω", "base resistor of transistor 2"),
        Part("C2", "F", "capacitor from collector 1 to base 2", tolerance="10 %", kind="capacitor"),
        Part("RC1", "Ω", "collector resistor of transistor 1", optional=True),
        Part("RC2", "Ω", "collector resistor of transistor 2", optional=True),
        Part("V_BE", "V", "base–emitter voltage hard on", "linear", "0.68 V ± 0.05 V", None, "8 %", "device"),
        Part(
            "V_on",
            "V",
            "base–emitter voltage at which it begins to conduct",
            "linear",
            "± 0.05 V",
            lambda p: p["V_BE"] - 0.12,
            "8 %",
            "device",
        ),
        Part(
            "V_CE", "V", "collector voltage hard on", "linear", "0.1 V -100 %/+150 %", None, "100 %", "device"
        ),
        Part(
            "V_breakdown",
            "V",
            "reverse breakdown of the base–emitter junction",
            "log",
            "7 V ± 1.5 V",
            None,
            "20 %",
            "device",
        ),
        *parasitics("R1"),
    ),
    nodes=(
        Node("base1", "holding", "base of transistor 1", True),
        Node("base2", "holding", "base of transistor 2", True),
        Node("collector1", "square", "collector of transistor 1, the output"),
        Node("collector2", "square", "collector of transistor 2"),
    ),
    cycle=_cycle,
    likeness=_likeness,
    swaps=(("R1", "R2"), ("C1", "C2"), ("R1", "RC1"), ("R2", "RC2")),
    aliases={"capacitor": "base1", "output": "collector1"},
    equations=(
        "t1 = R1·C1·ln[(2·supply − V_BE − V_CE)/(supply − V_on)], likewise t2; T = t1 + t2",
        "near ln 2·(R1·C1 + R2·C2) where the supply is large against V_BE and the bases do not break down",
    ),
    drawing="""\
  supply ──┬─────┬──────┬─────┬──
          RC1    R2     R1   RC2
           ├──C2─┤      ├──C1─┤
        coll 1  base 2 base 1 coll 2
           └── emitters to gnd ──┘""",
    example={
        "supply": "5 V 2%",
        "R1": "47k 5%",
        "C1": "100n 10%",
        "R2": "47k 5%",
        "C2": "100n 10%",
        "RC1": "1k 5%",
        "RC2": "1k 5%",
    },
)
