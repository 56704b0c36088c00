"""The measuring chain and the CSV writers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import benchfit
from tools.bench import simulate
from tools.bench.chain import Input, Record, measure, screen
from tools.bench.write import LAYOUTS, write

SCHMITT = {"R": 10e3, "C": 100e-9, "V_upper": 3.5, "V_lower": 1.5, "V_high": 5.0}


def _record(**setting) -> Record:
    waves = simulate("schmitt-inverter", SCHMITT)
    return measure(waves, {"capacitor": Input(**setting)}, waves.period / 500, 3000, begin=0.0, seed=1)


def test_shown_is_gain_times_volts_plus_offset():
    plain = _record(bits=None).channels["capacitor"]
    shown = _record(bits=None, gain=0.02, offset=0.1).channels["capacitor"]
    assert np.max(np.abs(shown - (1.02 * plain + 0.1))) < 1e-12


def test_eight_bits_give_steps_of_one_code():
    volts = _record(noise=0.05).channels["capacitor"]
    steps = np.unique(np.round(np.diff(np.unique(volts)), 9))
    low, high = screen(_record(bits=None).channels["capacitor"])
    assert steps.min() == pytest.approx((high - low) / 256, rel=1e-6)


def test_noise_and_quantisation_have_the_stated_size():
    """IEEE Std 1057: an ideal quantiser adds Q/sqrt(12) rms."""
    plain = _record(bits=None).channels["capacitor"]
    low, high = screen(plain)
    noisy = _record(noise=0.02).channels["capacitor"]
    assert np.std(noisy - plain) == pytest.approx(np.hypot(0.02, (high - low) / 256 / np.sqrt(12)), rel=0.05)


def test_a_screen_too_small_clips():
    volts = _record(range=(2.0, 3.0)).channels["capacitor"]
    assert volts.min() >= 2.0
    assert volts.max() <= 3.0
    assert np.mean(volts == volts.max()) > 0.1


def test_the_clock_runs_fast_by_the_stated_error():
    """A clock that gains shows every period longer by as much."""
    waves = simulate("schmitt-inverter", SCHMITT)
    error = 1e-2
    record = measure(
        waves, {"output": Input(bits=None)}, waves.period / 1000, 60_000, timebase=error, begin=0.0
    )
    high = record.channels["output"] > 2.5
    rises = np.flatnonzero(high[1:] & ~high[:-1])
    shown = (rises[-1] - rises[0]) / (rises.size - 1) * record.interval
    assert shown == pytest.approx((1 + error) * waves.period, rel=1e-4)


def test_alternating_coupling_droops():
    """A square wave behind a high-pass droops by 1 − exp(−pi·fc/f) per half period (first-order high-pass
    law)."""
    waves = simulate(
        "op-amp", {"R": 10e3, "C": 1e-6, "R_top": 1e4, "R_bottom": 1e4, "V_high": 10.0, "V_low": -10.0}
    )
    corner = 0.05 / waves.period
    record = measure(
        waves, {"output": Input(bits=None, coupling="ac", corner=corner)}, waves.period / 4000, 12_000
    )
    volts = record.channels["output"]
    assert abs(volts[:8000].mean()) < 0.01 * np.ptp(volts)
    jump = np.flatnonzero(np.diff(volts) > 10)
    top, end = volts[jump[0] + 1], volts[jump[0] + 1990]
    assert end / top == pytest.approx(np.exp(-np.pi * 0.05), rel=0.01)


def test_nothing_before_the_switch_is_thrown():
    waves = simulate("schmitt-inverter", SCHMITT, start="from rest", cycles=5)
    record = measure(waves, {"output": Input(bits=None)}, waves.period / 100, 300, begin=-waves.period)
    assert np.all(record.channels["output"][:99] == 0.0)
    assert record.channels["output"][101] == pytest.approx(5.0)


@pytest.mark.parametrize("layout", sorted(LAYOUTS))
def test_what_is_written_is_read(layout: str, tmp_path: Path):
    """Every layout comes back through the package's reader: names, interval, start and values."""
    waves = simulate("schmitt-inverter", SCHMITT)
    nodes = {"capacitor": Input(noise=0.02), "output": Input(noise=0.01)}
    record = measure(
        waves, nodes, 2e-6, 2500, start=-1e-3 if layout != "start and increment" else 0.0, seed=4
    )
    write(tmp_path / "shot.csv", record, {"capacitor": "CH1", "output": "CH2"}, layout)
    capture = benchfit.read(str(tmp_path / "shot.csv"))
    assert [c.name for c in capture.channels] == ["CH1", "CH2"]
    assert capture.interval == pytest.approx(2e-6, rel=1e-9)
    assert capture.start == pytest.approx(record.start, abs=1e-12)
    for node, name in (("capacitor", "CH1"), ("output", "CH2")):
        assert np.max(np.abs(capture[name].values - record.channels[node])) < 1e-4
