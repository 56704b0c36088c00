"""Whose drift it is, on builds whose closed forms stand in tools/study_drift.py, not in the package."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from benchfit import pipeline
from benchfit.burnin import causes
from benchfit.burnin.result import Cause
from benchfit.burnin.trend import unit_trend
from benchfit.sheet import Sheet
from tools import study_drift


def drifted(build, part, size=0.015, law="linear", n=120, seed=1):
    """What is found of a build of which one part drifts."""
    head, form, parts, nodes, _ = study_drift.BUILDS[build]
    known = {k: v for k, v in parts.items() if k != "R_leak"}
    sheet = Sheet.parse(head + "\n[parts]\n" + "\n".join(f"{k} = {v!r}" for k, v in known.items()))
    series, time = study_drift.series_of(form, parts, part, size, law, n, np.random.default_rng(seed))
    return unit_trend(series, time, {}, pipeline.expected(sheet, nodes))


TOLD = [("timer", "RA"), ("timer", "RB"), ("timer", "C"), ("timer", "k_upper")]
TOLD += [("lamp", "C"), ("lamp", "V_strike"), ("lamp", "V_extinguish")]


@pytest.mark.parametrize(("build", "part"), TOLD)
def test_the_part_is_named(build, part):
    """Where the captures can tell it: alone, with nearly all of the drift, and by how much it moved."""
    found = drifted(build, part)
    assert found.quantities["frequency"].law == "linear"
    first = found.causes[0]
    assert first.cause == part
    assert not first.either
    assert first.share == pytest.approx(1.0, abs=max(0.05, 3 * first.u))
    assert first.change == pytest.approx(0.015, rel=0.1)
    assert found.unexplained == pytest.approx(0.0, abs=0.08)
    assert sum(c.share for c in found.causes) + found.unexplained == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(("build", "part", "alike"), [("op-amp", "C", "R"), ("schmitt, output only", "R", "C")])
def test_what_cannot_be_told_apart_is_said(build, part, alike):
    """R or C of one time constant: both are named, and each says that the other would do as well."""
    found = drifted(build, part)
    by_name = {c.cause: c for c in found.causes}
    assert {part, alike} <= by_name.keys()
    assert alike in by_name[part].either
    assert part in by_name[alike].either
    assert by_name["C"].share > by_name["R"].share, "the commoner is listed first"
    assert by_name["C"].share + by_name["R"].share == pytest.approx(1.0, abs=0.1)


def test_a_leak_is_told_from_everything_else():
    """A leak across the capacitor that grows: charge longer, discharge shorter."""
    found = drifted("leaky timer", "R_leak", size=-0.15)
    assert found.causes[0].cause == "R_leak"
    assert found.causes[0].unit == "S"
    assert found.causes[0].change > 0


def test_two_parts_share():
    """C and RB of a timer together: each with about its own share of the drift."""
    _, form, parts, nodes, _ = study_drift.BUILDS["timer"]

    def both(p):
        return form({**p, "RB": p["RB"] * (p["C"] / parts["C"]) ** 0.5})

    series, time = study_drift.series_of(both, parts, "C", 0.02, "linear", 200, np.random.default_rng(3))
    sheet = Sheet.parse(
        study_drift.BUILDS["timer"][0] + "\n[parts]\n" + "\n".join(f"{k} = {v!r}" for k, v in parts.items())
    )
    found = unit_trend(series, time, {}, pipeline.expected(sheet, nodes))
    shares = {c.cause: c.share for c in found.causes}
    # d ln T/d ln RB = (t_charge·RB/(RA + RB) + t_discharge)/T = 0.90; RB moves by half of what C moves by.
    assert shares["C"] == pytest.approx(1 / 1.45, abs=0.05)
    assert shares["RB"] == pytest.approx(0.45 / 1.45, abs=0.05)


def test_a_steady_run_has_no_cause():
    """Nothing drifts, so nothing is blamed."""
    found = drifted("timer", "C", size=0.0)
    assert found.quantities["frequency"].law == "none"
    assert found.causes == ()


def test_without_a_build_there_is_no_cause():
    """And the reason is given."""
    _, form, parts, _, _ = study_drift.BUILDS["timer"]
    series, time = study_drift.series_of(form, parts, "C", 0.02, "linear", 60, np.random.default_rng(0))
    found = unit_trend(series, time, {}, "the log has no build sheet")
    assert found.causes == ()
    assert found.why_no_cause == "the log has no build sheet"


def test_a_build_that_does_not_run():
    """A sheet whose parts do not oscillate: said, not raised."""

    class Dead:
        names, units, coordinates, weights, sizes = ("R",), ("Ω",), ("log",), (1.0,), (np.inf,)

        def state(self, _):
            return np.zeros(1)

        def values(self, states):
            return {"R": np.exp(states[:, 0])}

        def measured(self, states):
            return {"frequency": np.full(len(states), np.nan)}

    seen = causes.Fingerprint(("charge_time",), np.array([0.1]), np.eye(1) * 1e-6, np.ones(1), -0.1, 1.0)
    assert "does not run" in causes.blame(Dead(), seen, {}).why


def test_a_cause_is_data():
    """Frozen, comparable."""
    assert Cause("C", 1.0, 0.1, -0.01, 0.01, "1") == Cause("C", 1.0, 0.1, -0.01, 0.01, "1")
