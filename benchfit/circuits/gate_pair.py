"""Two CMOS inverters: the junction of R and C is kicked by the second gate and decays through R."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.likeness import close, yes
from benchfit.circuits.model import Array, Circuit, Condition, Cycle, Features, Node, Part, Parts, Phase
from benchfit.circuits.solve import after


def _kick(p: Parts, foot: Array) -> Array:
    """How far the junction jumps with the output, which leaves ``foot`` (V): capacitance to ground divides it
    by C/(C + C_stray + C_probe)."""
    capacitance = p["C"] * (1 + p["C_slope"] * (p["V_threshold"] - foot))
    aside = p["C_stray"] + p.get("C_probe:capacitor", np.float64(0.0))
    return p["supply"] * capacitance / (capacitance + aside)


def _cycle(p: Parts) -> Cycle:
    supply, threshold, delay = p["supply"], p["V_threshold"], p["delay"]
    ground = 0.0 * supply
    feed = 1 / (p["R"] + p["R_gate"])
    # The first gate's output drives R, the second one's, its opposite, the other plate of C.
    falling, rising = lag(p, (feed, ground), foot=supply), lag(p, (feed, supply))
    over, under = supply + p["V_clamp"], -p["V_clamp"]
    up, down = _kick(p, ground), -_kick(p, supply)
    phases: tuple[Phase, ...]
    if "R_series" in p:
        clamp = 1 / p["R_series"]
        held_down = lag(p, (feed, ground), (clamp, over), foot=supply)
        held_up = lag(p, (feed, supply), (clamp, under))
        phases = (
            phase(held_down, over, rising=False, before=rising, jump=up, output="high"),
            phase(falling, threshold, rising=False, before=held_down, delay=delay, output="high"),
            phase(held_up, under, rising=True, before=falling, jump=down, output="low"),
            phase(rising, threshold, rising=True, before=held_up, delay=delay, output="low"),
        )
    else:
        free = (
            phase(falling, threshold, rising=False, before=rising, jump=up, delay=delay, output="high"),
            phase(rising, threshold, rising=True, before=falling, jump=down, delay=delay, output="low"),
        )
        top = np.minimum(free[0].gain * after(free[1], threshold, delay) + free[0].jump, over)
        bottom = np.maximum(free[1].gain * after(free[0], threshold, delay) + free[1].jump, under)
        phases = (
            replace(free[0], start=top, gain=1.0, jump=0.0),
            replace(free[1], start=bottom, gain=1.0, jump=0.0),
        )
    return Cycle(
        phases=phases,
        conditions=(
            Condition(
                "never-reaches",
                threshold - falling.asymptote,
                "the junction stops falling above the gate's trip point",
                "R",
                falling.asymptote,
            ),
            Condition(
                "never-reaches",
                rising.asymptote - threshold,
                "the junction stops rising below the gate's trip point",
                "R",
                rising.asymptote,
            ),
        ),
        levels={"high": supply, "low": 0 * supply},
    )


def _likeness(seen: Features) -> float:
    """The node jumps at every transition; the output goes from rail to rail with a duty near a half."""
    unipolar = None if seen.low is None or seen.high is None else seen.low > -0.2 * seen.high
    node = yes(seen.jumps) if seen.upper is not None else 0.5
    return 0.4 * node * yes(unipolar) * close(seen.high_share, 0.5, 0.08)


CIRCUIT = Circuit(
    name="gate-pair",
    title="two CMOS inverters (R from the first gate's output, C from the second's, to one junction)",
    parts=(
        Part("supply", "V", "supply", tolerance="5 %", kind="supply"),
        Part("R", "Ω", "timing resistor"),
        Part("C", "F", "timing capacitor", tolerance="10 %", kind="capacitor"),
        Part(
            "R_series",
            "Ω",
            "from the junction to the first gate's input",
            "log",
            "± 5 %",
            lambda p: 10 * p["R"],
            "5 %",
            "resistor",
            True,
        ),
        Part(
            "V_threshold",
            "V",
            "trip point of the first gate",
            "log",
            "± 10 %",
            lambda p: p["supply"] / 2,
            "10 %",
            "threshold",
        ),
        Part("V_clamp", "V", "drop of the input's clamp", "linear", "0.6 V ± 0.1 V", None, "15 %", "device"),
        Part(
            "R_gate",
            "Ω",
            "the gate's own output resistance",
            "linear",
            "250 Ω ± 100 %",
            None,
            "100 %",
            "device",
        ),
        *parasitics("R"),
    ),
    nodes=(
        Node("capacitor", "jumping", "the junction of R, C and R_series", True),
        Node("output", "square", "output of the gate that drives C"),
    ),
    cycle=_cycle,
    likeness=_likeness,
    swaps=(("R", "R_series"),),
    equations=(
        "the junction jumps to V_threshold ± supply and decays through R to 0 or the supply, until "
        "V_threshold",
        "T = R·C·{ln[(supply + V_threshold)/V_threshold] "
        "+ ln[(2·supply − V_threshold)/(supply − V_threshold)]} without the clamp",
        "beyond supply + V_clamp or below −V_clamp the input's clamp conducts through R_series",
    ),
    drawing="""\
       ┌─R_series──┬────────────┐
       │  ┌────┐   R   ┌────┐   C
       └──┤ 1  ├o──┴───┤ 2  ├o─┴── output
          └────┘       └────┘""",
    example={"supply": "5 V 2%", "R": "100k 1%", "C": "10n 5%"},
)
