"""Prior odds: how often each sort of part is the one that is off, before anything was measured.

The numbers are relative weights. They come from a reading of bench reports (three stars: many independent reports,
two: several, one: few or a data sheet alone), set down as judgement, not as a statistic; a tie in the data is ranked
by them and is never settled by them (see :mod:`benchfit.explain.suspects`).
"""

from __future__ import annotations

# A build chosen at random from those brought to a bench: this share has nothing off beyond its tolerances.
HEALTHY = 0.6
# One cause, and two causes at once, among the others.
SINGLE = 0.37
PAIR = 0.03

BY_KIND = {
    "capacitor": 6.0,  # wrong decade, tolerance, ageing, bias: three stars each
    "resistor": 3.0,  # wrong decade or band, drift: two stars
    "threshold": 3.0,  # spread between makes and units: three stars (Schmitt), two (lamp, trigger diode)
    "ratio": 3.0,  # stand-off ratio of unijunctions: two stars
    "supply": 2.0,  # supply not what was assumed: three stars, but a meter stands on every bench
    "level": 2.0,  # high level below the rail, unequal saturation: three and two stars
    "current": 2.0,  # as a resistor that sets it: two stars
    "device": 0.7,  # on-resistance, diode drops, offsets: one or two stars
}

BY_NAME = {
    "R_leak": 3.0,  # leaky electrolytic, board, probe: three stars
    "delay": 2.0,  # propagation, storage, saturation recovery: three stars, above 10 kHz
    "C_stray": 1.5,  # three stars, with small capacitors only
    "slew": 1.5,  # two stars
    "I_leak": 1.0,  # two stars, with large resistors only
    "C_slope": 1.0,  # two stars, class-2 ceramics only
    "ESR": 0.7,  # one star
    "R_leak_supply": 0.5,  # as a leak, seldom met
    "V_breakdown": 0.7,
}

SWAP = 1.0  # two stars: wiring slips dominate beginners' reports

# One cause moves two: a chip of another make, an aged lamp (three stars for thresholds); the rails of an
# output.
FAMILY = 1.5

# How a resistor, a capacitor or a current is off, if it is: shares of its weight.
SLIP_DECADE = 0.25  # a wrong decade, up or down
SLIP_NEIGHBOUR = 0.15  # the value beside it in the drawer
SLIP_HALF = 0.06  # two in series where one was meant, one of two missing
ANY_VALUE = 0.54  # anything else: half within a factor of two, half log-uniform over the range


def weight(name: str, kind: str) -> float:
    """Relative prior weight of one cause."""
    return BY_NAME.get(name, BY_KIND.get(kind, 0.5))
