"""Triangle generator: an integrator and a comparator with hysteresis that reverses it."""

from __future__ import annotations

from benchfit.circuits.lag import parasitics, slewing
from benchfit.circuits.likeness import close, under, yes
from benchfit.circuits.model import Circuit, Condition, Cycle, Features, Node, Part, Parts, Phase


def _cycle(p: Parts) -> Cycle:
    high, low, reference = p["V_high"], p["V_low"], p["V_reference"]
    ratio = p["R_in"] / p["R_feedback"]
    upper = reference * (1 + ratio) - low * ratio
    lower = reference * (1 + ratio) - high * ratio
    scale = p["R"] * p["C"]
    up, down = (reference - low) / scale, (reference - high) / scale
    straight = 0.0 * scale
    late = p["delay"] + slewing(high - low, p["slew"], straight)
    levels = {"high": high, "low": low}
    levels["rise_time"] = levels["fall_time"] = 0.8 * (high - low) / p["slew"]
    return Cycle(
        phases=(
            Phase("capacitor", True, up, straight, upper, delay=late, output="low"),
            Phase("capacitor", False, down, straight, lower, delay=late, output="high"),
        ),
        conditions=(
            Condition(
                "stuck",
                reference - low,
                "the integrator cannot rise: the comparator's low level is not below the reference",
                "V_low",
                reference,
            ),
            Condition(
                "stuck",
                high - reference,
                "the integrator cannot fall: the comparator's high level is not above the reference",
                "V_high",
                reference,
            ),
        ),
        levels=levels,
    )


def _likeness(seen: Features) -> float:
    """Straight both ways, the output low while the node rises, levels about zero."""
    straight = under(seen.charge_bend, 0.06, 0.02) * under(seen.discharge_bend, 0.06, 0.02)
    about_zero = None if seen.lower is None or seen.upper is None else seen.lower < 0 < seen.upper
    return 0.7 * straight * yes(about_zero) * close(seen.charge_share, 0.5, 0.15) * yes(not seen.jumps)


CIRCUIT = Circuit(
    name="triangle",
    title="triangle generator (integrator R, C; comparator with R_in and R_feedback)",
    parts=(
        Part("R", "Ω", "integrator's input resistor, from the comparator's output"),
        Part("C", "F", "integrator's capacitor", tolerance="10 %", kind="capacitor"),
        Part("R_in", "Ω", "integrator's output to the comparator's input"),
        Part("R_feedback", "Ω", "comparator's output to the same input"),
        Part("V_high", "V", "comparator's high level", "linear", None, None, "5 %", "level"),
        Part("V_low", "V", "comparator's low level", "linear", None, None, "5 %", "level"),
        Part(
            "V_reference", "V", "reference of both amplifiers", "linear", "0 V ± 0 V", None, "5 %", "supply"
        ),
        *parasitics("R", leaks=False, slew=True),
    ),
    nodes=(
        Node("capacitor", "timing", "the integrator's output", False),
        Node("output", "square", "the comparator's output"),
    ),
    cycle=_cycle,
    families=(("V_high", "V_low"),),
    likeness=_likeness,
    swaps=(("R_in", "R_feedback"), ("R", "R_in")),
    equations=(
        "slopes −(V − V_reference)/(R·C), V the comparator's level",
        "E_up = V_reference·(1 + R_in/R_feedback) − V_low·R_in/R_feedback; E_down with V_high",
        "f = R_feedback/(4·R_in·R·C) for levels symmetric about the reference",
    ),
    drawing="""\
   ┌─ R ─┬──C──┐
   │     │ ┌──┐│    ┌──┐
   │     └─┤∫ ├┴R_in┤+ ├──┬── output
   │       └──┘  ┌──┤  │  │
   │             └─R_feedback
   └──────────────────────┘""",
    example={
        "R": "12k 1%",
        "C": "100n 5%",
        "R_in": "120k 1%",
        "R_feedback": "1M 1%",
        "V_high": "10 V 5%",
        "V_low": "-10 V 5%",
    },
)
