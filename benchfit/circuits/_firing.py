"""What the three firing devices share: charge to a firing voltage, empty through the device towards its floor."""

from __future__ import annotations

from benchfit.circuits.lag import lag, phase
from benchfit.circuits.model import Array, Condition, Cycle, Parts


def firing_cycle(p: Parts, peak: Array, valley: Array) -> Cycle:
    """Cycle of a device that fires at ``peak`` (V) and lets go at ``valley`` (V).

    The charge is R·C towards the supply; the discharge goes through r_discharge towards V_floor with R still feeding.
    With ``I_peak`` and ``I_valley`` given, it fires only if R can supply the one and lets go only if R cannot supply
    the other: (supply − valley)/I_valley < R < (supply − peak)/I_peak.
    """
    feed = (1 / p["R"], p["supply"])
    up = lag(p, feed)
    down = lag(p, feed, (1 / p["r_discharge"], p["V_floor"]))
    conditions = [
        Condition(
            "never-reaches",
            up.asymptote - peak,
            "it never fires: the capacitor stops below the firing voltage",
            "R",
            up.asymptote,
        ),
        Condition(
            "latched",
            valley - down.asymptote,
            "it stays on: the resistor feeds enough current to hold the device at its floor",
            "R",
            down.asymptote,
        ),
        Condition("stuck", peak - valley, "the firing voltage lies below the valley", "", valley),
    ]
    if "I_peak" in p:
        spare = up.current - up.conductance * peak
        conditions.append(
            Condition(
                "never-fires",
                spare - p["I_peak"],
                "it never fires: at the firing voltage the resistor gives less current than the device needs",
                "R",
                peak,
            )
        )
    if "I_valley" in p:
        fed = up.current - up.conductance * valley
        conditions.append(
            Condition(
                "latched",
                p["I_valley"] - fed,
                "it latches on: at the valley the resistor gives more current than the device can let go of",
                "R",
                valley,
            )
        )
    return Cycle(
        phases=(
            phase(up, peak, rising=True, before=down, delay=p["delay"]),
            phase(down, valley, rising=False, before=up),
        ),
        conditions=tuple(conditions),
    )
