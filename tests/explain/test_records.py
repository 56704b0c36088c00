"""Every explanation as a record: plain numbers, the same for the same input, true to the contract's words."""

from __future__ import annotations

import json
import math

import pytest

from benchfit.pipeline import explain
from benchfit.sheet.model import Sheet
from benchfit.show.record import dumps
from tests.explain.bench import shot
from tests.explain.scenes import DESIGNS, SCENES, found

# Those that other tests ask for by default anyhow; the rest with -m long.
QUICK = [
    "healthy op-amp", "healthy gate-pair", "healthy two-transistor", "healthy current-ramp", "a capacitor",
    "a capacitor, R read", "the timer's decade", "the lamp behind a probe", "a timer that a leak stops",
    "a unijunction that latches", "a lamp on too little", "another maker's gate",
    "probed ten times too small", "coupled for alternating",
]  # fmt: skip
EVERY = [n if n in QUICK else pytest.param(n, marks=pytest.mark.long) for n in SCENES]
KINDS = {"pass", "conditional", "fail", None}


def numbers(value, path=""):
    if isinstance(value, dict):
        for k, v in value.items():
            yield from numbers(v, f"{path}.{k}")
    elif isinstance(value, list):
        for i, v in enumerate(value):
            yield from numbers(v, f"{path}[{i}]")
    else:
        yield path, value


@pytest.mark.parametrize("name", EVERY)
def test_numbers_are_numbers(name):
    """No NaN, no infinity, no numpy type, no number as text; and it goes through JSON unchanged."""
    record = found(name).record()
    for path, value in numbers(record):
        assert value is None or type(value) in (str, bool, int, float), path
        if isinstance(value, float):
            assert math.isfinite(value), path
    assert json.loads(dumps(record)) == record


@pytest.mark.parametrize("name", EVERY)
def test_the_record_keeps_to_the_contract(name):
    record = found(name).record()
    assert record["schema"] == 1
    assert record["circuit"] == SCENES[name].design
    assert sum(s["probability"] for s in record["suspects"]) == pytest.approx(1.0, abs=1e-9)
    assert record["verdict"] in KINDS
    assert isinstance(record["settled"], bool)
    if record["settled"]:
        assert record["suspects"][0]["probability"] >= 0.9
        assert record["next_readings"] == []
    for suspect in record["suspects"]:
        assert set(suspect["change"]) <= set(suspect["causes"])
        assert suspect["says"]
        if not suspect["causes"]:
            assert suspect["change"] == {}
    for part in record["parts"].values():
        assert part["known_from"] in ("capture", "reading", "build sheet")
        assert part["u"] is None or part["u"] >= 0
        if part["nominal"]:
            assert part["deviation"] == pytest.approx(part["value"] / part["nominal"] - 1, abs=1e-12)
        if part["limits"] is not None and part["within"] is not None:
            low, high = part["limits"]
            slack = 1e-9 * max(abs(low), abs(high))
            assert part["within"] == (low - slack <= part["value"] <= high + slack)
    for quantity in record["measured"].values():
        if isinstance(quantity, dict):
            assert quantity["u"] >= quantity.get("u_noise", 0.0) >= 0
    for offer in record["next_readings"]:
        assert 0 < offer["would_settle"] <= 1
    for remedy in record["remedies"]:
        assert remedy["from"] > 0
        assert remedy["to"] > 0
        assert remedy["predicts"]["frequency"]["value"] > 0


@pytest.mark.parametrize("name", ["a capacitor", "a timer that a leak stops"])
def test_the_same_input_gives_the_same_record(name):
    """To the last bit: nothing is drawn anew from one run to the next."""
    scene = SCENES[name]
    design = DESIGNS[scene.design]
    text = design.text + scene.sheet
    capture = shot(design.circuit, {**design.parts, **scene.off}, design.nodes, **dict(scene.more))
    again = explain(capture, Sheet.parse(text))
    assert dumps(again.record()) == dumps(found(name).record())


@pytest.mark.parametrize(("name", "series"), [("the timer's C", "E24"), ("a resistor, R read", "E96")])
def test_a_remedy_is_a_standard_value_that_brings_it_onto_its_target(name, series):
    """IEC 60063; the bench with the new part in place is on target within the prediction's u and a step."""
    from tools.bench import simulate

    scene = SCENES[name]
    design = DESIGNS[scene.design]
    seen = found(name).explanation
    assert seen.remedies
    best = seen.remedies[0]
    mended = simulate(design.circuit, {**design.parts, **scene.off, best.part: best.after})
    predicted = best.predicts["frequency"]
    assert predicted.u is not None
    assert abs(1 / mended.period - predicted.value) < 3 * predicted.u + 1e-3 * predicted.value
    assert seen.miss is not None
    assert 1 / mended.period == pytest.approx(seen.miss["frequency"].target, rel=0.04)
    assert best.series.startswith("E")


def test_without_a_sheet_there_are_candidates_and_no_part_is_blamed():
    design = DESIGNS["timer-555"]
    seen = explain(shot("timer-555", design.parts, design.nodes), None)
    record = seen.record()
    assert record["circuit"] is None
    assert record["candidates"][0]["circuit"] == "timer-555"
    assert sum(c["score"] for c in record["candidates"]) <= 1 + 1e-9
    assert record["parts"] == {}
    assert record["suspects"] == []
    assert record["miss"] is None
    assert record["measured"]["frequency"]["value"] == pytest.approx(188.8, rel=0.01)


def test_without_a_target_there_is_no_miss_no_verdict_and_no_remedy():
    design = DESIGNS["op-amp"]
    text = design.text.replace('[target]\nfrequency = "455 Hz 3%"\nduty = "50 %"\n', "")
    record = explain(shot("op-amp", {**design.parts, "C": 130e-9}, design.nodes), Sheet.parse(text)).record()
    assert record["miss"] is None
    assert record["verdict"] is None
    assert record["remedies"] == []
    assert record["suspects"][0]["causes"] in (["C"], ["R"])


def test_tables_and_text_say_the_same():
    seen = found("the timer's leak")
    assert seen.parts.loc["R_leak", "value"] == pytest.approx(200e3, rel=0.05)
    assert seen.suspects.iloc[0]["causes"] == ("R_leak",)
    assert "R_leak" in str(seen)
