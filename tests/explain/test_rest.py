"""Builds that do not run: which condition fails, by which cause, and the limits that would mend it."""

from __future__ import annotations

from itertools import pairwise

import pytest

from benchfit.pipeline import explain
from benchfit.sheet.model import Sheet
from tests.explain.bench import codes, shot
from tests.explain.scenes import DESIGNS, found

STOPPED = {
    "a lamp on too little": ("never strikes", {("supply",), ("R_leak",), ("V_strike",)}),
    "a timer that a leak stops": ("stops charging", {("R_leak",)}),
    "a unijunction that never fires": ("never fires", {("R",)}),
    "a unijunction that latches": ("latches", {("R",)}),
}


@pytest.mark.parametrize("name", STOPPED)
def test_it_is_a_finding_and_not_an_error(name):
    words, causes = STOPPED[name]
    seen = found(name)
    assert seen.explanation.oscillates is False
    assert words in seen.explanation.finding
    assert seen.explanation.suspects[0].causes in causes
    assert "no-oscillation" in codes(seen)
    record = seen.record()
    assert record["measured"]["oscillates"] is False
    assert record["measured"]["frequency"] is None
    assert sum(s["probability"] for s in record["suspects"]) == pytest.approx(1.0, abs=1e-9)


def test_a_leak_that_stops_a_timer_is_sized():
    """60 kΩ against 43 kΩ leaves 5.2 V of 9 V at the node; two thirds are 6 V."""
    seen = found("a timer that a leak stops").explanation
    assert seen.suspects[0].change["R_leak"] == pytest.approx(60e3, rel=0.15)
    assert seen.verdict == "fail"
    assert seen.miss is not None
    assert seen.miss["frequency"].built is None


@pytest.mark.parametrize(
    ("name", "code", "low", "high"),
    [
        # (12 V − 1.5 V)/6 mA = 1.75 kΩ < R < (12 V − 8.4 V)/2 µA = 1.8 MΩ, the currents known to 40 and 60 %.
        ("a unijunction that never fires", "no-oscillation", 1.75e3, 1.8e6),
        ("a unijunction that latches", "latch-up", 1.75e3, 1.8e6),
    ],
)
def test_the_limits_on_R_are_told(name, code, low, high):
    seen = found(name)
    assert code in codes(seen)
    says = seen.explanation.finding
    assert "between" in says
    numbers = [float(w) * {"kΩ": 1e3, "MΩ": 1e6}[u] for w, u in _pairs(says)]
    assert numbers[0] == pytest.approx(low, rel=0.7)
    assert numbers[1] == pytest.approx(high, rel=0.7)


def _pairs(text):
    return [(a, b) for a, b in pairwise(text.replace(";", " ").split()) if b in ("kΩ", "MΩ")]


def test_a_leak_that_never_lets_it_charge_gives_its_one_ramp():
    """A single charge still gives its asymptote and time constant."""
    seen = found("a timer that a leak stops").explanation
    asymptote, tau = seen.measured["charge_asymptote"], seen.measured["charge_time_constant"]
    assert asymptote is not None
    assert tau is not None
    assert asymptote.value == pytest.approx(9 * 60 / 103, rel=0.02)
    assert tau.value == pytest.approx(43e3 * 60 / 103 * 100e-9, rel=0.05)


@pytest.mark.long
def test_a_direct_probe_stops_it_and_lifting_it_would_not():
    """A 1 MΩ probe on a lamp fed through 1.1 MΩ: it never strikes, and the frequency without it is told."""
    design = DESIGNS["gas-lamp"]
    probe = {"capacitor": (1e6, 110e-12)}
    capture = shot(
        "gas-lamp", design.parts, design.nodes, probe=probe, start="from rest", length=0.8, begin=-0.05
    )
    text = design.text + '[probe.capacitor]\nresistance = "1M"\ncapacitance = "110p"\n'
    seen = explain(capture, Sheet.parse(text)).explanation
    assert seen.oscillates is False
    assert seen.suspects[0].causes == ()
    assert seen.without_probe is not None
    assert seen.without_probe["frequency"].value == pytest.approx(14.2, rel=0.15)
