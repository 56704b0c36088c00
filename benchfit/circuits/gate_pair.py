"""Two CMOS inverters: the junction of R and C is kicked by the second gate and decays through R."""

from __future__ import annotations

import numpy as np

from benchfit.circuits.lag import Lag, lag, parasitics
from benchfit.circuits.likeness import close, yes
from benchfit.circuits.model import Array, Circuit, Condition, Cycle, Features, Node, Part, Parts, Phase


def _phase(now: Lag, threshold: Array, rising: bool, output: str, **more: Array) -> Phase:
    return Phase(
        "capacitor", rising, now.drive, now.curvature, threshold, output=output, slope=now.slope, **more
    )  # type: ignore[arg-type]


def _cycle(p: Parts) -> Cycle:
    supply, threshold = p["supply"], p["V_threshold"]
    feed = 1 / (p["R"] + p["R_gate"])
    falling, rising = lag(p, (feed, np.float64(0.0))), lag(p, (feed, supply))
    over, under = supply + p["V_clamp"], -p["V_clamp"]
    kick = supply * p["C"] / falling.capacitance
    if "R_series" in p:
        clamp = 1 / p["R_series"]
        held_down = lag(p, (feed, np.float64(0.0)), (clamp, over))
        held_up = lag(p, (feed, supply), (clamp, under))
        phases = (
            _phase(held_down, over, False, "high", jump=kick),
            _phase(falling, threshold, False, "high", delay=p["delay"]),
            _phase(held_up, under, True, "low", jump=-kick),
            _phase(rising, threshold, True, "low", delay=p["delay"]),
        )
    else:
        phases = (
            _phase(
                falling, threshold, False, "high", delay=p["delay"], start=np.minimum(threshold + kick, over)
            ),
            _phase(
                rising, threshold, True, "low", delay=p["delay"], start=np.maximum(threshold - kick, under)
            ),
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
