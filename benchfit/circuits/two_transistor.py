"""Two-transistor (collector-coupled) astable: each half is timed by the base resistor and its coupling
capacitor."""

from __future__ import annotations

import numpy as np

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.likeness import close, yes
from benchfit.circuits.model import Array, Circuit, Condition, Cycle, Features, Node, Part, Parts, Phase


def _kick(p: Parts, time: Array, load: str, capacitor: str) -> Array:
    """How far the collector falls when its transistor turns on, after it had ``time`` (s) to recover."""
    full = p["supply"] - p["V_CE"]
    if load not in p:
        return full + 0 * time
    return full * -np.expm1(-time / (p[load] * p[capacitor]))


def _half(
    p: Parts, kick: Array, base: str, resistor: str, capacitor: str, output: str
) -> tuple[Phase, Array]:
    """The phase in which ``base`` is off, and its margin (V): the base starts below V_BE by the kick.

    Capacitance from the base to ground divides the kick by C/(C + C_stray + C_probe).
    """
    now = lag(p, (1 / p[resistor], p["supply"]), node=base, capacitor=capacitor)
    start = p["V_BE"] - kick * p[capacitor] / now.capacitance
    start = np.maximum(start, -p["V_breakdown"])
    return (
        phase(now, p["V_on"], rising=True, node=base, start=start, delay=p["delay"], output=output),
        now.asymptote - p["V_on"],
    )


def _time(one: Phase) -> Array:
    asymptote = one.drive / one.curvature
    start = np.asarray(one.start)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.log((asymptote - start) / (asymptote - one.threshold)) / one.curvature + one.delay


def _cycle(p: Parts) -> Cycle:
    full = p["supply"] - p["V_CE"]
    kick_1 = kick_2 = full
    # Each half's kick depends on how long the other collector had to recover: a contraction, settled in a few
    # turns.
    for _ in range(6 if "RC1" in p or "RC2" in p else 1):
        one, margin_1 = _half(p, kick_1, "base1", "R1", "C1", "high")
        two, margin_2 = _half(p, kick_2, "base2", "R2", "C2", "low")
        kick_1 = _kick(p, _time(two), "RC2", "C1")
        kick_2 = _kick(p, _time(one), "RC1", "C2")
    one, margin_1 = _half(p, kick_1, "base1", "R1", "C1", "high")
    two, margin_2 = _half(p, kick_2, "base2", "R2", "C2", "low")
    broke = p["V_BE"] - np.minimum(kick_1, kick_2) < -p["V_breakdown"]
    short = (kick_1 < 0.97 * full) | (kick_2 < 0.97 * full)
    return Cycle(
        phases=(one, two),
        conditions=(
            Condition(
                "stuck",
                margin_1,
                "base 1 never rises to where its transistor conducts",
                "R1",
                one.drive / one.curvature,
            ),
            Condition(
                "stuck",
                margin_2,
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
