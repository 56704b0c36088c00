"""Limits as they are written, and alarms that noise does not make chatter."""

from __future__ import annotations

import numpy as np
import pytest

from benchfit.burnin.alarms import MEASURED, Cleared, Limit, Raised, Watch, parse_limit
from benchfit.errors import UsageError

UNITS = {**MEASURED, "R": "Ω"}
TWO = Limit("frequency", -0.02, 0.02, True, "2 %")


@pytest.mark.parametrize(
    ("text", "about", "limits"),
    [
        ("frequency=2%", 10.0, (9.8, 10.2)),
        ("frequency = ±2 %", 10.0, (9.8, 10.2)),
        ("frequency=50ppm", 10.0, (9.9995, 10.0005)),
        ("frequency=-1%/+3%", 10.0, (9.9, 10.3)),
        ("frequency=11.5..12.5Hz", None, (11.5, 12.5)),
        ("frequency=12 Hz ± 0.5 Hz", None, (11.5, 12.5)),
        ("duty=48 %..52 %", None, (0.48, 0.52)),
        ("upper=-2%/+2%", -5.0, (-5.1, -4.9)),
        ("R=9k9..10k1", None, (9900.0, 10100.0)),
    ],
)
def test_limits_as_they_are_written(text, about, limits):
    """Relative to the first record, or in the quantity's unit."""
    assert parse_limit(text, UNITS).about(about) == pytest.approx(limits, rel=1e-12)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("frequency", "NAME=LIMITS"),
        ("freqency=2%", "did you mean frequency"),
        ("frequency=lots", "lots"),
        ("frequency=12Hz", "two limits"),
        ("frequency=1..2V", "V"),
    ],
)
def test_limits_that_cannot_be_read(text, says):
    """One sentence that names what was given."""
    with pytest.raises(UsageError, match=says):
        parse_limit(text, UNITS)


def test_a_relative_limit_without_a_first_record():
    """Nothing to compare with yet."""
    assert TWO.about(None) is None


def test_an_alarm_comes_with_the_first_record_clearly_outside():
    """And says the value and the limit that was passed."""
    watch = Watch(TWO)
    events = [watch.step(v, 0.001) for v in (10.0, 10.05, 10.1, 10.3, 10.31)]
    assert events[:3] == [None] * 3
    assert isinstance(events[3], Raised)
    assert (events[3].value, events[3].limit) == (10.3, 10.2)
    assert events[4] is None


def test_noise_alone_does_not_raise_one():
    """A single record just outside, by less than its own noise, waits for a second one."""
    watch = Watch(TWO)
    assert [watch.step(v, 0.05) for v in (10.0, 10.21, 10.1, 10.21, 10.1)] == [None] * 5
    assert isinstance([watch.step(v, 0.05) for v in (10.21, 10.22)][-1], Raised)


def test_a_missing_value_is_neither():
    """Failed records do not count as inside or outside."""
    watch = Watch(TWO)
    watch.step(10.0)
    assert watch.step(float("nan")) is None
    assert isinstance(watch.step(10.5), Raised)
    assert watch.step(float("nan")) is None
    assert watch.standing


@pytest.mark.parametrize("scatter", [0.01, 0.05, 0.1, 0.2])
def test_noise_at_the_limit_does_not_chatter(scatter):
    """A value on the limit for 5 000 records, noise up to the limit's own width: few alarms."""
    rng = np.random.default_rng(5)
    watch = Watch(TWO)
    watch.step(10.0)
    values = 10.2 + scatter * rng.normal(size=5000)
    raised = sum(isinstance(watch.step(v, scatter), Raised) for v in values)
    crossings = int(np.count_nonzero(np.diff(values > 10.2)))
    assert 1 <= raised <= max(1, crossings // 40)


def test_it_is_cleared_when_it_is_well_inside_for_good():
    """Three records in a row inside by the margin, not one."""
    watch = Watch(TWO)
    for value in (10.0, 10.3, 10.3):
        watch.step(value)
    events = [watch.step(v) for v in (10.19, 10.19, 10.19, 10.05, 10.19, 10.05, 10.05, 10.05)]
    assert events[:-1] == [None] * 7
    assert events[-1] == Cleared("frequency")
    assert isinstance(watch.step(9.0), Raised)


def test_a_watch_goes_on_where_another_was_interrupted():
    """With the first value, the standing alarm and the scatter of the records before."""
    watch = Watch(TWO, first=10.0, standing=True)
    watch.prime(10.3 + 0.01 * np.random.default_rng(1).normal(size=50))
    assert watch.step(10.3) is None
    assert watch.scatter == pytest.approx(0.01, rel=0.4)
