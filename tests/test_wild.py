"""Real recordings that people made in laboratories and courses: what the program says of them.

The files stay where they are, in a folder ``shared`` beside the repository; without it the tests skip.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import pytest

import benchfit
from benchfit.pipeline import Found, explain
from benchfit.sheet.model import Sheet

WILD = Path(__file__).resolve().parents[1].parent / "shared" / "wild"
pytestmark = pytest.mark.skipif(not WILD.is_dir(), reason="no folder shared/wild beside the repository")

# A 741-class astable; parts and their tolerances as its writer states them. Its output's levels are read off
# the record, for none are stated; they take no part in what is found of R·C.
OP_AMP = """
circuit = "op-amp"
[target]
period = "1.87 ms"
[parts]
R = "9.99k 0.1%"
C = "85n {tolerance}"
R_top = "9.96k 0.1%"
R_bottom = "9.98k 0.1%"
V_high = "14 V 5%"
V_low = "-13 V 5%"
[channels]
capacitor = "1"
output = "2"
"""
# A 555-type astable; RA from its file's name, the others near 1 MΩ and 1 µF by its writer's account.
TIMER = """
circuit = "timer-555"
[parts]
supply = "5.06 V 3%"
RA = "1M 5%"
RB = "1M 5%"
C = "1u 20%"
[channels]
output = "CH1"
capacitor = "CH2"
"""


@cache
def op_amp(reading: bool) -> Found:
    text = OP_AMP.format(tolerance="10%" if reading else "0.6%")
    if reading:
        text += '[readings]\nR = "9.99k 0.1%"\n'
    return explain(benchfit.read(WILD / "real01.csv"), Sheet.parse(text))


@cache
def timer() -> Found:
    return explain(benchfit.read(WILD / "real02.csv", interval=1e-3), Sheet.parse(TIMER))


def value(found: Found, name: str) -> float:
    quantity = found.explanation.measured[name]
    assert quantity is not None
    return quantity.value


def test_the_op_amp_s_period_and_duty():
    """T = 2.222 ms (its writer's instrument: 2.2229 ms), duty 0.487."""
    found = op_amp(False)
    assert value(found, "period") == pytest.approx(2.222e-3, rel=5e-4)
    assert value(found, "duty") == pytest.approx(0.487, abs=1e-3)
    assert value(found, "upper") == pytest.approx(6.96, abs=0.1)
    assert value(found, "lower") == pytest.approx(-6.62, abs=0.1)


def test_the_op_amp_s_R_times_C_is_15_to_19_per_cent_above_what_was_stated():
    found = op_amp(False)
    parts = {p.name: p.value for p in found.explanation.parts}
    assert parts["R"] is not None
    assert parts["C"] is not None
    assert 1.15 < parts["R"] * parts["C"] / (9.99e3 * 85e-9) < 1.19
    blamed = sum(s.probability for s in found.explanation.suspects if {"R", "C"} & set(s.causes))
    assert blamed > 0.95
    assert any({"R", "C"} <= set(g) for g in found.explanation.unseparated)


def test_with_R_read_it_is_the_capacitor():
    found = op_amp(True)
    with_c = [s for s in found.explanation.suspects if "C" in s.causes]
    assert sum(s.probability for s in with_c) > 0.9
    assert found.explanation.suspects[0].causes.count("C") == 1
    assert 0.14 < found.explanation.suspects[0].change["C"] < 0.19
    assert not any("R" in s.causes for s in found.explanation.suspects[:3])


def test_the_op_amp_s_two_smaller_effects_are_looked_for():
    """Edges that slew, an asymptote a little below the output's level: named, or among the live suspects."""
    found = op_amp(False)
    # 10 % to 90 % of 26.8 V in the record's edges: between 0.8 and 1 V/µs.
    rise = value(found, "rise_time")
    assert 0.8e6 < 0.8 * (value(found, "high") - value(found, "low")) / rise < 1.0e6
    live = {c for s in found.explanation.suspects for c in s.causes}
    assert "slew" in live
    assert "R_leak" in live
    assert value(found, "charge_asymptote") < value(found, "high")
    assert found.explanation.settled is False


def test_the_timer_s_period_and_duty():
    """T = 2.271 s over seven periods, output high for 0.651 of it."""
    found = timer()
    assert value(found, "period") == pytest.approx(2.271, rel=5e-4)
    assert value(found, "duty") == pytest.approx(0.651, abs=1e-3)
    assert value(found, "upper") == pytest.approx(3.37, abs=0.03)
    assert value(found, "lower") == pytest.approx(1.55, abs=0.03)


def test_the_timer_s_megohms_make_leakage_a_live_suspect():
    """Its charge heads for 4.8 V from a supply of 5.06 V; the program says so, and is not sure."""
    found = timer()
    assert value(found, "charge_asymptote") < 5.0
    live = {c for s in found.explanation.suspects for c in s.causes}
    assert live & {"R_leak", "I_leak"}
    leak = next((s for s in found.explanation.suspects if s.causes == ("R_leak",)), None)
    if leak is not None:
        assert leak.change["R_leak"] > 5e6


def test_an_unknown_astable_s_output_has_candidates():
    """T = 48.5 µs, duty 0.51."""
    found = explain(benchfit.read(WILD / "real14.csv"), None)
    assert value(found, "period") == pytest.approx(48.5e-6, rel=1e-3)
    assert value(found, "duty") == pytest.approx(0.512, abs=2e-3)
    record = found.record()
    assert record["circuit"] is None
    assert len(record["candidates"]) >= 2
    scores = [c["score"] for c in record["candidates"]]
    assert scores == sorted(scores, reverse=True)
    assert sum(scores) <= 1 + 1e-9
    # An output alone that is high for half the time tells no circuit from another.
    assert scores[0] < 0.9
