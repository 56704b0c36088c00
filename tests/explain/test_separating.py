"""What cannot be told apart, and what would tell it: readings, a known capacitor, a probe taken off."""

from __future__ import annotations

from functools import cache

import pytest

from benchfit.pipeline import explain
from benchfit.sheet.model import Sheet
from tests.explain.bench import codes, first, shot
from tests.explain.scenes import DESIGNS, SCENES, found
from tools.bench import simulate

OP_AMP = DESIGNS["op-amp"]
ADDED = 47e-9


@cache
def jointly(cause):
    """Two captures of one build, the second with a known capacitor across the timing one."""
    parts = {**OP_AMP.parts, **{"C": {"C": 130e-9}, "R": {"R": 13e3}}[cause]}
    more = {**parts, "C": parts["C"] + ADDED}
    captures = [shot("op-amp", p, OP_AMP.nodes, seed=s) for s, p in ((1, parts), (2, more))]
    sheet = Sheet.parse(OP_AMP.text + '[capture.2]\nadded_C = "47n 1%"\n')
    return explain(captures=captures, sheet=sheet)


def groups(seen):
    return [set(g) for g in seen.explanation.unseparated]


def test_one_resistor_sets_every_time_so_R_and_C_share_the_blame():
    """C is 30 % high, and the capture cannot know: both are named and nothing is settled."""
    seen = found("a capacitor")
    suspects = seen.explanation.suspects
    assert {s.causes for s in suspects[:2]} == {("R",), ("C",)}
    assert suspects[0].probability + suspects[1].probability == pytest.approx(1.0, abs=0.02)
    assert suspects[1].probability > 0.2
    assert seen.explanation.settled is False
    assert {"R", "C"} in groups(seen)
    assert "cannot tell" in suspects[0].says
    for s in suspects[:2]:
        assert s.change[s.causes[0]] == pytest.approx(0.3, abs=0.03)


def test_the_readings_offered_are_those_that_would_tell():
    offers = found("a capacitor").explanation.next_readings
    assert {o.node_or_part for o in offers} >= {"R", "C"}
    assert any("known capacitor" in o.reading for o in offers)
    rises = [o.would_settle for o in offers]
    assert all(0 < r <= 1 for r in rises)
    # The first probability can rise to 1 and no further.
    assert max(rises) <= 1 - found("a capacitor").explanation.suspects[0].probability + 1e-9


@pytest.mark.parametrize(("name", "cause"), [("a capacitor, R read", "C"), ("a resistor, R read", "R")])
def test_a_reading_of_R_settles_it(name, cause):
    seen = found(name)
    assert first(seen) == (cause,)
    assert seen.explanation.settled is True
    assert seen.explanation.suspects[0].probability > 0.97
    part = next(p for p in seen.explanation.parts if p.name == "R")
    assert part.known_from == "reading"
    assert seen.explanation.next_readings == ()
    # What the data say without their priors stays so: the capture still knows only the product.
    assert {"R", "C"} in groups(seen)


@pytest.mark.parametrize("cause", ["C", pytest.param("R", marks=pytest.mark.long)])
def test_a_known_capacitor_across_separates_them(cause):
    """T goes by R·(C + 47n): the slope of T against the added capacitance is R's alone."""
    seen = jointly(cause)
    assert first(seen) == (cause,)
    assert seen.explanation.settled is True
    assert {"R", "C"} not in groups(seen)
    assert seen.explanation.suspects[0].change[cause] == pytest.approx(0.3, abs=0.02)
    record = seen.record()
    assert isinstance(record["capture"], list)
    assert len(record["capture"]) == 2
    # What is measured and missed is the first capture's, without the added capacitor.
    true = {**OP_AMP.parts, cause: {"C": 130e-9, "R": 13e3}[cause]}
    f = 1 / simulate("op-amp", true).period
    assert record["measured"]["frequency"]["value"] == pytest.approx(f, rel=1e-3)
    assert record["miss"]["frequency"]["built"] == pytest.approx(f, rel=1e-3)


def test_one_capture_alone_does_not():
    assert {"R", "C"} in groups(found("a resistor"))
    assert found("a resistor").explanation.settled is False


def test_the_probe_is_counted_in_and_then_taken_off():
    """A ×10 probe slows a lamp by a fifth: the bench's frequency with the probe lifted comes out."""
    scene = SCENES["the lamp behind a probe"]
    seen = found("the lamp behind a probe").explanation
    lifted = simulate("gas-lamp", DESIGNS["gas-lamp"].parts)
    on = simulate("gas-lamp", DESIGNS["gas-lamp"].parts, probe=scene.more["probe"])
    assert 1 / on.period < 0.85 / lifted.period
    assert seen.without_probe is not None
    f, duty = seen.without_probe["frequency"], seen.without_probe["duty"]
    assert f.u is not None
    assert abs(f.value - 1 / lifted.period) < 2.5 * f.u
    assert f.u < 0.03 * f.value
    assert duty.value == pytest.approx(lifted.high_share, abs=1e-3)
    built = seen.measured["frequency"]
    assert built is not None
    assert built.value == pytest.approx(1 / on.period, rel=1e-3)


def test_a_probe_that_matters_is_warned_of_and_has_its_share():
    seen = found("the lamp behind a probe")
    assert "probe-loads" in codes(seen)
    assert first(seen) == ()
    miss = seen.explanation.miss
    assert miss is not None
    shares = {s.cause: s.share for s in miss["frequency"].shares}
    assert max(shares, key=lambda c: abs(shares[c])) == "probe"
    lifted, on = seen.explanation.without_probe, seen.explanation.measured["frequency"]
    assert lifted is not None
    assert on is not None
    assert shares["probe"] == pytest.approx((on.value - lifted["frequency"].value) / 14.2, rel=0.05)


def test_the_verdict_is_that_of_the_build_without_the_probe():
    """With the probe on it misses 14.2 Hz ± 5 % by far; lifted it is on target."""
    seen = found("the lamp behind a probe").explanation
    miss = seen.miss
    assert miss is not None
    assert miss["frequency"].miss is not None
    assert miss["frequency"].miss < -0.1
    assert seen.verdict == "pass"


def test_without_a_probe_there_is_no_word_of_one():
    seen = found("healthy gas-lamp")
    assert seen.explanation.without_probe is None
    assert seen.record()["without_probe"] is None
    assert seen.explanation.miss is not None
    assert all(s.cause != "probe" for s in seen.explanation.miss["frequency"].shares)


def test_a_probe_on_an_output_loads_nothing():
    """The contract gives the output no impedance worth computing."""
    text = OP_AMP.text + '[probe.output]\nresistance = "1M"\ncapacitance = "110p"\n'
    seen = explain(shot("op-amp", OP_AMP.parts, ("output",)), Sheet.parse(text))
    assert seen.explanation.without_probe is None
    assert "probe-loads" not in codes(seen)
