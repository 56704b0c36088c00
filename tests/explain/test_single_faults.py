"""One thing wrong at a time, on integrated builds: what is named, how surely, and what may not be said."""

from __future__ import annotations

import pytest

from tests.explain.bench import codes, first
from tests.explain.scenes import DESIGNS, SCENES, found

# Scene → the causes of which one must come first, and whether the capture must settle it.
NAMED: dict[str, tuple[set[tuple[str, ...]], bool]] = {
    "the high level": ({("V_high",)}, True),
    "a leak at the op-amp": ({("R_leak",)}, True),
    "a leak to the supply": ({("R_leak_supply",)}, True),
    "bias at the op-amp": ({("I_leak",)}, True),
    "a slow op-amp": ({("slew",)}, True),
    "a dry capacitor": ({("ESR",)}, True),
    "a bending capacitor": ({("C_slope",)}, True),
    "the timer's C": ({("C",)}, True),
    "the timer's RA": ({("RA",)}, True),
    "the timer's RB": ({("RB",)}, True),
    "the timer's swap": ({("RA", "RB")}, True),
    "the timer's upper threshold": ({("k_upper",)}, True),
    "the timer's lower threshold": ({("k_lower",)}, True),
    "the timer's supply": ({("supply",)}, True),
    "the timer's leak": ({("R_leak",)}, True),
    "the timer's decade": ({("C",)}, True),
    "the lamp's strike": ({("V_strike",)}, True),
    "the lamp's end": ({("V_extinguish",)}, True),
    "the lamp's leak": ({("R_leak",)}, False),
    "the lamp's decade": ({("C",)}, True),
    "the stand-off ratio": ({("eta",)}, True),
    "the unijunction's R by ten": ({("R",)}, True),
    "the gate's leak": ({("R_leak",)}, True),
    "the programming resistors": ({("RG1", "RG2")}, True),
    "the trigger diode": ({("V_breakover",)}, True),
    "the pair's trip point": ({("V_threshold",)}, True),
    "the pair's leak": ({("R_leak",)}, True),
    "the triangle's level": ({("V_high",)}, True),
    "the triangle's slew": ({("slew",)}, False),
    "the ramp's foot": ({("V_lower",)}, True),
    "the ramp's leak": ({("R_leak",)}, False),
    "a decade of C": ({("C",)}, True),
    "a capacitor, R read": ({("C",)}, True),
    "a resistor, R read": ({("R",)}, True),
    # Look-alikes: any of them, and never as settled.
    "a capacitor": ({("C",), ("R",)}, False),
    "a resistor": ({("C",), ("R",)}, False),
    "the divider": ({("R_top",), ("R_bottom",)}, False),
    "a late op-amp": ({("delay",), ("slew",), ("R_bottom",), ("R_top",)}, False),
}
SIZES = {
    "a leak at the op-amp": ("R_leak", 80e3),
    "a leak to the supply": ("R_leak_supply", 60e3),
    "bias at the op-amp": ("I_leak", 1.2e-4),
    "a slow op-amp": ("slew", 0.2e6),
    "a dry capacitor": ("ESR", 800.0),
    "a bending capacitor": ("C_slope", -0.04),
    "the timer's leak": ("R_leak", 200e3),
    "the pair's leak": ("R_leak", 1.2e6),
    "the timer's C": ("C", 0.3),
    "the timer's RA": ("RA", 0.3),
    "the timer's RB": ("RB", 43 / 33 - 1),
    "the timer's decade": ("C", -0.9),
    "the lamp's strike": ("V_strike", 105 / 90 - 1),
    "the stand-off ratio": ("eta", 0.8 / 0.65 - 1),
    "the trigger diode": ("V_breakover", 0.25),
    "the triangle's level": ("V_high", -0.2),
}


# Run by default: a few of each kind; the others with -m long.
QUICK = {
    "the high level", "a leak at the op-amp", "a slow op-amp", "the timer's C", "the timer's swap",
    "the timer's upper threshold", "the timer's leak", "the timer's decade", "the lamp's strike",
    "the stand-off ratio", "the ramp's foot", "a capacitor, R read", "a capacitor",
}  # fmt: skip


def scenes(names):
    return [n if n in QUICK else pytest.param(n, marks=pytest.mark.long) for n in names]


@pytest.mark.parametrize("name", scenes(NAMED))
def test_what_is_off_is_named(name):
    allowed, must_settle = NAMED[name]
    seen = found(name)
    assert first(seen) in allowed, [(s.causes, round(s.probability, 3)) for s in seen.explanation.suspects]
    if must_settle:
        assert seen.explanation.settled
    if len(allowed) > 1:
        assert not seen.explanation.settled
        assert {s.causes for s in seen.explanation.suspects[:4]} >= allowed


@pytest.mark.parametrize("name", scenes(SIZES))
def test_and_by_how_much(name):
    """change: effective/nominal − 1, for a parasitic its value; each part's u holds the truth within 4 u."""
    cause, size = SIZES[name]
    seen = found(name).explanation
    assert seen.suspects[0].change[cause] == pytest.approx(
        size, rel=0.08, abs=0.02 if abs(size) < 1 else None
    )
    part = next(p for p in seen.parts if p.name == cause)
    scene = SCENES[name]
    assert part.value is not None
    assert part.u is not None
    assert abs(part.value - scene.off[cause]) < 4 * part.u


@pytest.mark.parametrize("design", DESIGNS)
def test_a_healthy_build_is_not_accused(design):
    seen = found(f"healthy {design}")
    assert first(seen) == ()
    assert seen.explanation.suspects[0].probability > 0.5
    assert seen.explanation.suspects[0].change == {}
    for part in seen.explanation.parts:
        assert part.within is not False


@pytest.mark.parametrize("name", scenes(n for n in NAMED if n != "a late op-amp"))
def test_the_first_share_of_the_miss_is_that_of_the_first_suspect(name):
    """What is blamed for the miss is what is suspected, unless the cause hardly moves the frequency."""
    seen = found(name).explanation
    assert seen.miss is not None
    shares = {s.cause: abs(s.share) for s in seen.miss["frequency"].shares}
    causes = {c for s in seen.suspects if s.probability > 0.05 for c in s.causes}
    largest = max(shares, key=lambda c: shares[c])
    if shares[largest] > 0.05:
        assert largest in causes


def test_a_decade_is_called_a_decade():
    assert "ten times too small" in found("the timer's decade").explanation.suspects[0].says
    assert "exchanged" in found("the timer's swap").explanation.suspects[0].says


def test_what_was_looked_for_is_ruled_out_with_what_speaks_against_it():
    seen = found("the timer's leak").explanation
    ruled = {r.cause: r.by for r in seen.ruled_out}
    assert {"C", "RB"} <= set(ruled)
    assert all(len(by) > 15 for by in ruled.values())
    assert "R_leak" not in ruled


def test_no_warning_that_is_not_earned():
    """A clean capture of a healthy build carries no warning but that of its supply."""
    for design in ("op-amp", "timer-555", "schmitt-inverter", "triangle", "gate-pair"):
        assert codes(found(f"healthy {design}")) == set()
    assert codes(found("healthy gas-lamp")) == {"hazard"}


def test_slow_edges_raise_no_warning_of_numpy():
    """A comparator that takes a tenth of the period to cross, recorded clean: nothing else is said."""
    from benchfit import cycle
    from benchfit.pipeline import assign
    from benchfit.sheet.model import Sheet
    from tests.explain.bench import shot

    design = DESIGNS["triangle"]
    capture = shot("triangle", {**design.parts, "slew": 1e5}, design.nodes)
    cycle.measure(capture, assign(capture, Sheet.parse(design.text)))
