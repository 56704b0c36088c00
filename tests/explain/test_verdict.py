"""Verdicts with their guard band, cautions at their limits, and set-ups that lie about the voltage."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit.explain.result import Quantity
from benchfit.explain.verdict import judge, worst
from benchfit.pipeline import predict
from benchfit.quantity import parse
from benchfit.sheet.model import Sheet
from tests.explain.bench import codes, explained, first
from tests.explain.scenes import DESIGNS, found

TIMER, OP_AMP = DESIGNS["timer-555"], DESIGNS["op-amp"]


# --- JCGM 106:2012, 8.3.2 and 8.3.3: guarded acceptance and guarded rejection with w = U = 2u


@pytest.mark.parametrize(
    ("value", "u", "limits", "verdict"),
    [
        (12.0, 0.1, "12 Hz 5%", "pass"),
        (12.39, 0.1, "12 Hz 5%", "pass"),  # 12.39 + 0.2 <= 12.60
        (12.41, 0.1, "12 Hz 5%", "conditional"),
        (12.79, 0.1, "12 Hz 5%", "conditional"),  # 12.79 − 0.2 < 12.60
        (12.81, 0.1, "12 Hz 5%", "fail"),
        (11.61, 0.1, "12 Hz 5%", "pass"),
        (11.59, 0.1, "12 Hz 5%", "conditional"),
        (11.19, 0.1, "12 Hz 5%", "fail"),
        # Limits that are not alike on both sides.
        (13.1, 0.04, "12 Hz -2%/+10%", "pass"),
        (11.80, 0.04, "12 Hz -2%/+10%", "conditional"),
        (11.67, 0.04, "12 Hz -2%/+10%", "fail"),
        (13.1, 0.2, "12 Hz -2%/+10%", "conditional"),
        # Narrower than the uncertainty: nothing can pass.
        (12.0, 0.1, "12 Hz 1%", "conditional"),
    ],
)
def test_pass_and_fail_keep_their_distance_from_the_limits(value, u, limits, verdict):
    assert judge(Quantity(value, u, "Hz"), parse(limits, "Hz")) == verdict


def test_without_acceptance_limits_there_is_no_verdict():
    assert judge(Quantity(12.0, 0.1, "Hz"), parse("12 Hz", "Hz")) is None
    text = TIMER.text.replace('"190 Hz 3%"', '"190 Hz"')
    seen = explained("timer-555", {**TIMER.parts, "C": 130e-9}, text, ("output",))
    assert seen.explanation.verdict is None
    assert seen.record()["verdict"] is None


@given(st.floats(1, 100), st.floats(0, 5), st.floats(0.5, 40))
def test_a_verdict_is_what_the_interval_says(value, u, per_cent):
    limits = parse(f"50 Hz {per_cent}%", "Hz")
    low, high = value - 2 * u, value + 2 * u
    inside = low >= 50 * (1 - per_cent / 100) and high <= 50 * (1 + per_cent / 100)
    outside = high < 50 * (1 - per_cent / 100) or low > 50 * (1 + per_cent / 100)
    expected = "pass" if inside else "fail" if outside else "conditional"
    edges = [abs(x - 50 * (1 + s * per_cent / 100)) for x in (low, high) for s in (-1, 1)]
    if min(edges) > 1e-9:
        assert judge(Quantity(value, u, "Hz"), limits) == expected


def test_two_targets_have_the_worse_of_two_verdicts():
    assert worst(["pass", "conditional"]) == "conditional"
    assert worst(["fail", "pass"]) == "fail"
    assert worst([None, "pass"]) == "pass"
    assert worst([None]) is None


@pytest.mark.parametrize(("name", "verdict"), [("healthy timer-555", "pass"), ("the timer's C", "fail")])
def test_a_capture_is_judged(name, verdict):
    assert found(name).explanation.verdict == verdict


# --- contract, section 6: more than 30 V rms, 42.4 V peak or 60 V d.c.; more than 45 µC above 60 V


def hazards(text: str) -> list[str]:
    return [w["says"] for w in predict(Sheet.parse(text))["warnings"] if w["code"] == "hazard"]


def lamp(supply: str, c: str = "100n") -> str:
    return (
        f'circuit = "gas-lamp"\n[parts]\nsupply = "{supply}"\nR = "1M"\nC = "{c}"\nV_strike = "50 V"\n'
        'V_extinguish = "35 V"\n'
    )


def test_a_supply_above_60_volts_is_cautioned_and_one_at_60_is_not():
    assert hazards(lamp("60.1 V"))
    assert not hazards(lamp("60 V"))


def test_the_caution_says_what_and_what_to_do_and_defers():
    says = hazards(lamp("125 V"))[0]
    for words in ("125 V", "discharge the capacitor", "one hand", "isolation", "local codes", "qualified"):
        assert words in says


def test_harmless_builds_are_not_cautioned():
    for name in ("op-amp", "timer-555", "schmitt-inverter", "triangle", "unijunction"):
        assert "hazard" not in codes(found(f"healthy {name}"))


def op_amp(level: float) -> str:
    return (
        f'circuit = "op-amp"\n[parts]\nR = "10k"\nC = "100n"\nR_top = "10k"\nR_bottom = "10k"\n'
        f'V_high = "{level} V"\nV_low = "-{level} V"\n'
    )


def test_an_output_of_more_than_30_volts_rms_is_cautioned_from_its_capture():
    """A square wave of ±31 V has 31 V r.m.s., one of ±28 V has 28 V."""
    for level, dangerous in ((31.0, True), (28.0, False)):
        parts = {**OP_AMP.parts, "V_high": level, "V_low": -level}
        seen = explained("op-amp", parts, op_amp(level), ("output",))
        assert ("hazard" in codes(seen)) is dangerous


def test_an_output_of_more_than_30_volts_rms_is_cautioned_from_its_sheet():
    assert not hazards(op_amp(29.0))
    assert hazards(op_amp(35.0))


# --- set-ups that lie


@pytest.mark.parametrize("name", ["probed ten times too small", "probed ten times too large"])
def test_a_wrong_attenuation_is_named_and_no_part_is_blamed_for_it(name):
    seen = found(name)
    assert "wrong-attenuation" in codes(seen)
    assert first(seen) == ()
    assert seen.explanation.verdict == "pass"


@pytest.mark.long
def test_two_channels_of_the_wrong_attenuation_are_both_set_right():
    inputs = {"capacitor": {"ratio": 10.0}, "output": {"ratio": 10.0}}
    seen = explained("op-amp", OP_AMP.parts, OP_AMP.text, OP_AMP.nodes, inputs=inputs)
    assert "wrong-attenuation" in codes(seen)
    assert first(seen) == ()


def test_a_decade_in_the_divider_is_not_taken_for_an_attenuation():
    design = DESIGNS["triangle"]
    seen = explained("triangle", {**design.parts, "R_in": 12e3}, design.text, design.nodes)
    assert "wrong-attenuation" not in codes(seen)
    assert set(first(seen)) <= {"R_in", "R_feedback"}


def test_undeclared_coupling_is_noticed_and_no_threshold_is_blamed():
    """C is 30 % high; the node's mean lies at 0 V, where a timer cannot put it."""
    seen = found("coupled for alternating")
    assert "ac-coupled" in codes(seen)
    assert not {"k_upper", "k_lower", "supply"} & set(first(seen))
    assert first(seen) == ("C",)


def test_a_build_symmetric_about_0_volts_cannot_tell_and_nothing_is_said():
    inputs = {"capacitor": {"coupling": "ac", "corner": 0.1}}
    seen = explained("op-amp", OP_AMP.parts, OP_AMP.text, OP_AMP.nodes, inputs=inputs)
    assert "ac-coupled" not in codes(seen)
    assert first(seen) == ()


def test_declared_coupling_frees_the_offset():
    text = TIMER.text + '[channels]\ncapacitor = { name = "capacitor", coupling = "ac" }\noutput = "output"\n'
    inputs = {"capacitor": {"coupling": "ac", "corner": 0.1}}
    seen = explained("timer-555", {**TIMER.parts, "C": 130e-9}, text, TIMER.nodes, inputs=inputs)
    assert first(seen) == ("C",)
    assert "ac-coupled" in codes(seen)


@pytest.mark.parametrize("declared", [True, False])
def test_the_droop_of_an_input_is_not_a_leak(declared):
    """A 5 Hz corner (common on scopes) at 190 Hz: a healthy build must not be accused of a leak."""
    text = TIMER.text
    if declared:
        text += '[channels]\ncapacitor = { name = "capacitor", coupling = "ac" }\n'
    inputs = {"capacitor": {"coupling": "ac", "corner": 5.0}}
    seen = explained("timer-555", TIMER.parts, text, ("capacitor",), inputs=inputs)
    assert not (seen.explanation.settled and first(seen) != ())
    assert seen.explanation.suspects[0].causes != ("R_leak",)
