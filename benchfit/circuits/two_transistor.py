"""Two-transistor (collector-coupled) astable: each half is timed by the base resistor and its coupling
capacitor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.circuits.lag import lag, parasitics, phase
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
class _Half:
    """The phase in which a base is off; how long it lasts (s), and the voltage on the capacitor's plates, as
    seen from the base, when its transistor turns on (V)."""

    phase: Phase
    margin: Array
    time: Array
    plates: Array


def _recovered(p: Parts, half: _Half, load: str, capacitor: str) -> Array:
    """How far the collector has recovered by the end of its half-cycle, and so falls when it turns on (V).

    Its capacitor's other plate is held at V_BE by the base that has just turned on, which it pulled up there
    from where that base began to conduct: by so much the collector is up at once.
    """
    full = p["supply"] - p["V_CE"]
    if load not in p:
        return full + 0 * half.time
    left = full - np.maximum(p["V_BE"] - half.plates, 0.0)
    return full - left * np.exp(-half.time / ((p[load] + p["ESR"]) * p[capacitor]))


def _half(p: Parts, kick: Array, base: str, resistor: str, capacitor: str, output: Output) -> _Half:
    """The half-cycle in which ``base`` is off: it starts below V_BE by the kick of the other collector.

    Capacitance from the base to ground divides the kick by C/(C + C_stray + C_probe); a series resistance of
    the capacitor drops what the base resistor drives through it.
    """
    now = lag(p, (1 / p[resistor], p["supply"]), node=base, capacitor=capacitor, foot=p["V_CE"])
    aside = p["C_stray"] + p.get(f"C_probe:{base}", np.float64(0.0))
    bent = p[capacitor] * (1 + p["C_slope"] * (p["V_BE"] - p["V_CE"] - kick))
    plates = np.maximum(p["V_BE"] - kick * bent / (bent + aside), -p["V_breakdown"])
    below = 1 + now.conductance * now.esr
    start = (plates + now.esr * now.current) / below
    one = phase(now, p["V_on"], rising=True, node=base, start=start, delay=p["delay"], output=output)
    time = np.where(start < p["V_on"], time_to(one, start, p["V_on"]), 0.0) + p["delay"]
    end = after(one, np.maximum(p["V_on"], start), p["delay"])
    return _Half(one, now.asymptote - p["V_on"], time, end * below - now.esr * now.current)


def _round(p: Parts, kick: Array) -> tuple[_Half, _Half]:
    """Both half-cycles, the first one begun by ``kick`` (V) at base 1."""
    first = _half(p, kick, "base1", "R1", "C1", "high")
    return first, _half(p, _recovered(p, first, "RC1", "C2"), "base2", "R2", "C2", "low")


def _settled_kick(p: Parts, full: Array) -> Array:
    """The kick at base 1 that a whole cycle reproduces: each depends on how long the other collector had.

    A fixed point in one number, found by Aitken's extrapolation (Steffensen's method).
    """
    kick = full + 0.0 * p["V_BE"]
    if "RC1" not in p and "RC2" not in p:
        return kick
    for _ in range(2):
        once = _recovered(p, _round(p, kick)[1], "RC2", "C1")
        twice = _recovered(p, _round(p, once)[1], "RC2", "C1")
        bend = twice - 2 * once + kick
        moves = np.abs(bend) > 1e-9 * full
        jump = np.where(moves, (once - kick) ** 2 / np.where(moves, bend, 1.0), 0.0)
        kick = np.where(moves, np.clip(kick - jump, 0.0, full), twice)
    return kick


def _cycle(p: Parts) -> Cycle:
    full = p["supply"] - p["V_CE"]
    kick_1 = _settled_kick(p, full)
    first, second = _round(p, kick_1)
    kick_2 = _recovered(p, first, "RC1", "C2")
    one, two = first.phase, second.phase
    broke = p["V_BE"] - np.maximum(kick_1, kick_2) < -p["V_breakdown"]
    short = (kick_1 < 0.97 * full) | (kick_2 < 0.97 * full)
    return Cycle(
        phases=(one, two),
        conditions=(
            Condition(
                "stuck",
                first.margin,
                "base 1 never rises to where its transistor conducts",
                "R1",
                one.drive / one.curvature,
            ),
            Condition(
                "stuck",
                second.margin,
                "base 2 never rises to where its transistor conducts",
                "R2",
                two.drive / two.curvature,
            ),
        ),
        levels={"high": p["V_CE"] + kick_2, "low": p["V_CE"] + 0 * kick_2},
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
