"""When: no drift, no pile-up, gaps told from the usual interval, clocks that are set."""

from __future__ import annotations

import math

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from benchfit.burnin.clock import Reading, iso, spoken, stepped, unix
from benchfit.burnin.schedule import Backoff, Cadence, next_slot
from benchfit.burnin.timeline import stretches, timeline

TIMES = st.floats(0.0, 1e6)


@given(TIMES, st.floats(1e-3, 1e4), st.integers(0, 10**6), st.floats(0.0, 100.0))
def test_slots_stay_on_the_grid_and_are_never_made_up_for(start, every, last, late):
    """However late, the next slot is a multiple of the interval, hardly past at most, and counted."""
    now = start + (last + late) * every
    slot = next_slot(start, every, last, now)
    assert math.isclose(slot.due, start + slot.number * every)
    assert slot.number > last
    assert slot.skipped == slot.number - last - 1
    assert slot.due >= now - 0.051 * every - 1e-6, "a slot long past is taken"
    assert slot.due <= max(now, start + (last + 1) * every) + every, "a slot is waited for that could be sooner"


def test_a_punctual_schedule_does_not_drift():
    """A thousand acquisitions that take a while begin on the second, every one."""
    now, last, begun = 5.0, -1, []
    for _ in range(1000):
        slot = next_slot(5.0, 1.0, last, now)
        begun.append(max(now, slot.due))
        now, last = begun[-1] + 0.3 + 0.001 * (last % 7), slot.number
    assert begun == [5.0 + i for i in range(1000)]


def test_acquisitions_longer_than_the_interval_keep_an_even_pace():
    """1.4 intervals each: every second slot, not a growing heap of late ones."""
    now, last, begun = 0.0, -1, []
    for _ in range(50):
        slot = next_slot(0.0, 1.0, last, now)
        begun.append(slot.number)
        now, last = max(now, slot.due) + 1.4, slot.number
    assert begun == list(range(0, 100, 2))


def test_full_speed():
    """An interval of 0: at once, every time."""
    assert next_slot(0.0, 0.0, 7, 123.4) == next_slot(5.0, 0.0, 7, 123.4)
    assert next_slot(0.0, 0.0, 7, 123.4).due == 123.4


def test_gaps():
    """An instrument's: a missed slot or two is none, three are; a folder's own pace decides for it."""
    cadence = Cadence(60.0)
    assert [cadence.gap(t) for t in (0, 60, 120, 240, 300, 600)] == [None, None, None, None, None, 300]
    folder = Cadence(None)
    times = [*range(0, 1000, 100), 1500, *range(1600, 2000, 100)]
    assert [t for t in times if folder.gap(t) is not None] == [1500]
    quick = Cadence(None)
    assert all(quick.gap(t) is None for t in (0, 1, 2, 3, 4, 7)), "seconds are no gap"


def test_a_clock_that_is_set_is_noticed_and_slewing_is_not():
    """NTP's 500 ppm for a day is no step; two minutes are."""
    assert stepped(Reading(1000.0, 5.0), Reading(1000.0 + 86400 * (1 + 5e-4), 5.0 + 86400)) == 0.0
    assert stepped(Reading(1000.0, 5.0), Reading(1180.0, 65.0)) == 120.0
    assert stepped(Reading(1000.0, 5.0), Reading(940.0, 65.0)) == -120.0


def test_growing_pauses():
    """1, 2, 4 … 60 s, from the start again after a success."""
    backoff = Backoff()
    assert [backoff.pause(failed=True) for _ in range(8)] == [1, 2, 4, 8, 16, 32, 60, 60]
    assert backoff.pause(failed=False) == 0
    assert backoff.pause(failed=True) == 1


@given(st.floats(0, 4e9))
def test_time_stamps_come_back(at):
    """UTC, ISO 8601, to a microsecond."""
    assert abs(unix(iso(at)) - at) <= 2e-6
    assert iso(at).endswith("Z")


def test_spoken_durations():
    """As people say them."""
    found = [spoken(s) for s in (0.3, 12, 250, 7500, 187200, -30, math.inf)]
    assert found == ["0.3 s", "12 s", "4 min 10 s", "2 h 05 min", "2 d 4 h", "−30 s", "an unknown time"]


def test_one_time_axis_through_a_set_clock():
    """A machine that starts in 1970 and is set right after ten records keeps even steps."""
    steady = 50.0 + 60.0 * np.arange(20)
    wall = np.where(np.arange(20) < 10, 100.0, 1.75e9) + 60.0 * np.arange(20)
    time = timeline(np.ones(20, int), wall, steady)
    np.testing.assert_allclose(np.diff(time), 60.0)


def test_one_time_axis_through_a_restart():
    """A new process has a new steady clock; the wall clock places it. One set back does not overlap."""
    session = np.repeat([1, 2, 3], 5)
    steady = np.tile(10.0 * np.arange(5), 3)
    wall = np.concatenate([1000 + 10.0 * np.arange(5), 2000 + 10.0 * np.arange(5), 500 + 10.0 * np.arange(5)])
    time = timeline(session, wall, steady)
    np.testing.assert_allclose(time[5:10], 1000 + 10.0 * np.arange(5))
    assert np.all(np.diff(time) >= 0)
    assert time[10] == time[9]


def test_stretches_end_at_gaps_and_missing_values():
    """Nothing is averaged over either; irregular sampling has no interval at all."""
    time = np.concatenate([np.arange(10.0), 20 + np.arange(5.0)])
    values = np.arange(15.0)
    values[3] = np.nan
    parts, interval = stretches(time, values)
    assert interval == 1.0
    assert [part.tolist() for part in parts] == [[0, 1, 2], [4, 5, 6, 7, 8, 9], [10, 11, 12, 13, 14]]
    assert stretches(np.cumsum(np.exp(np.random.default_rng(0).normal(0, 2, 200))), np.ones(200)) == (
        [],
        None,
    )
