"""Op-amp or comparator astable: an inverting hysteresis switch that charges its own capacitor through R."""

from __future__ import annotations

import numpy as np

from benchfit.circuits.lag import lag, parasitics, phase, slewing
from benchfit.circuits.likeness import close, over, ratio, yes
from benchfit.circuits.model import Array, Circuit, Condition, Cycle, Features, Node, Part, Parts

_NONE = np.float64(np.inf)


def _divider(p: Parts) -> tuple[Array, Array]:
    """(a, b): the + input is at a + b·output (V; Millman's theorem over three arms)."""
    bias = 1 / p.get("R_bias", _NONE)
    top, bottom = 1 / p["R_top"], 1 / p["R_bottom"]
    total = top + bottom + bias
    return (p["V_reference"] * bottom + p.get("supply", np.float64(0.0)) * bias) / total, top / total


def _high(p: Parts, r: Array, drop: Array) -> tuple[tuple[Array, Array], Array]:
    """What drives the timing node while the output is high (conductance S, voltage V), and the upper threshold.

    An open-collector output is at α + γ·v, for its pull-up feeds the timing resistor and the divider at once
    (Kirchhoff at the output's node); the node meets the + input where v = a + b·(α + γ·v).
    """
    a, b = _divider(p)
    if "R_pull" not in p:
        return (1 / r, p["V_high"] - drop), a + b * p["V_high"]
    pull, timing, top = 1 / p["R_pull"], 1 / r, 1 / p["R_top"]
    whole = pull + timing + top * (1 - b)
    alpha = (p["V_high"] * pull + drop * timing + a * top) / whole
    gamma = timing / whole
    return (timing * (1 - gamma), (alpha - drop) / (1 - gamma)), (a + b * alpha) / (1 - b * gamma)


def _cycle(p: Parts) -> Cycle:
    high, low = p["V_high"], p["V_low"]
    if "R" in p:
        r_charge = r_discharge = p["R"]
        drop = 0.0 * p["R"]
    else:
        r_charge, r_discharge, drop = p["R_charge"], p["R_discharge"], p["V_diode"]
    drive, upper = _high(p, r_charge, drop)
    a, b = _divider(p)
    lower = a + b * low
    up = lag(p, drive)
    down = lag(p, (1 / r_discharge, low + drop))
    swing = high - low
    # The drive of a phase is late by the slewing of the edge that begins it: the phase before runs on
    # meanwhile.
    falling = p["delay"] + slewing(swing, p["slew"], down.curvature)
    rising = p["delay"] + slewing(swing, p["slew"], up.curvature)
    resistor = "R" if "R" in p else "R_charge"
    levels = {} if "R_pull" in p else {"high": high, "low": low}
    levels["rise_time"] = levels["fall_time"] = 0.8 * swing / p["slew"]
    return Cycle(
        phases=(
            phase(up, upper, rising=True, before=down, delay=falling, output="high"),
            phase(down, lower, rising=False, before=up, delay=rising, output="low"),
        ),
        conditions=(
            Condition(
                "never-reaches",
                up.asymptote - upper,
                "the capacitor stops charging below the upper threshold; the output stays high",
                resistor,
                up.asymptote,
            ),
            Condition(
                "never-reaches",
                lower - down.asymptote,
                "the capacitor stops discharging above the lower threshold; the output stays low",
                resistor if "R" in p else "R_discharge",
                down.asymptote,
            ),
            Condition(
                "stuck",
                upper - lower,
                "there is no hysteresis: the output rests near the reference",
                "R_top",
                0.5 * (upper + lower),
            ),
        ),
        levels=levels,
    )


def _likeness(seen: Features) -> float:
    """Bipolar output, node between its levels, one time constant both ways, asymptotes at the output's levels."""
    bipolar = None if seen.low is None or seen.high is None else seen.low < -0.3 * seen.high
    about_zero = None if seen.lower is None or seen.upper is None else seen.lower < 0 < seen.upper
    return (
        0.5
        * yes(bipolar)
        * yes(about_zero)
        * close(ratio(seen.charge_tau, seen.discharge_tau), 1.0, 0.1)
        * over(seen.charge_bend, 0.3, 0.1)
        * over(seen.charge_share, 0.2, 0.05)
        * close(seen.high_share, 0.5, 0.15)
        * yes(not seen.jumps)
    )


CIRCUIT = Circuit(
    name="op-amp",
    title="op-amp or comparator astable (hysteresis on the + input, R from output to − input, C to ground)",
    parts=(
        Part("R", "Ω", "timing resistor, output to − input"),
        Part("C", "F", "timing capacitor, − input to ground", tolerance="10 %", kind="capacitor"),
        Part("R_top", "Ω", "hysteresis divider, output to + input", tolerance="5 %"),
        Part("R_bottom", "Ω", "hysteresis divider, + input to the reference", tolerance="5 %"),
        Part(
            "V_reference",
            "V",
            "reference at the divider's foot",
            "linear",
            "0 V ± 0 V",
            None,
            "5 %",
            "supply",
        ),
        Part("V_high", "V", "output high level", "linear", None, None, "5 %", "level"),
        Part("V_low", "V", "output low level", "linear", None, None, "5 %", "level"),
        Part("R_bias", "Ω", "from the + input to the supply", optional=True),
        Part("supply", "V", "supply that R_bias goes to", "log", None, None, "5 %", "supply", True),
        Part("R_pull", "Ω", "pull-up of an open-collector output; V_high is then the supply", optional=True),
        Part("R_charge", "Ω", "timing resistor of the charge, with steering diodes"),
        Part("R_discharge", "Ω", "timing resistor of the discharge, with steering diodes"),
        Part(
            "V_diode",
            "V",
            "drop of a steering diode",
            "linear",
            "0.6 V ± 0.1 V",
            None,
            "15 %",
            "device",
            True,
        ),
        *parasitics("R", "R_charge", slew=True),
    ),
    nodes=(
        Node("capacitor", "timing", "the − input, where the capacitor sits", True),
        Node("output", "square", "the output"),
    ),
    cycle=_cycle,
    families=(("V_high", "V_low"),),
    likeness=_likeness,
    swaps=(("R_top", "R_bottom"), ("R_charge", "R_discharge"), ("R", "R_top"), ("R", "R_bottom")),
    alternatives=((("R",), ("R_charge", "R_discharge", "V_diode")),),
    equations=(
        "charge:    A = V_high, τ = R·C, until E_up = (V_high/R_top + "
        "V_reference/R_bottom)/(1/R_top + 1/R_bottom)",
        "discharge: A = V_low,  τ = R·C, until E_down, likewise with V_low",
        "T = R·C·{ln[(V_high − E_down)/(V_high − E_up)] + ln[(E_up − V_low)/(E_down − V_low)]}",
    ),
    drawing="""\
            ┌────── R ───────┐
            │    ┌─────┐     │
       C ───┴────┤−    │     │
       │         │     ├─────┼── output
      ───    ┌───┤+    │     │
      gnd    │   └─────┘     │
             ├──── R_top ────┘
             R_bottom
             │
             V_reference""",
    example={
        "R": "10k 1%",
        "C": "100n 5%",
        "R_top": "10k 1%",
        "R_bottom": "10k 1%",
        "V_high": "13.5 V 5%",
        "V_low": "-13.5 V 5%",
    },
)
