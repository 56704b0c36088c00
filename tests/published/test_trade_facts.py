"""Facts that every bench knows, marked common practice: no book is quoted for them."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchfit.pipeline import predict
from benchfit.sheet.model import Sheet
from tools.bench import simulate


def record_of(text):
    return predict(Sheet.parse(text))


def value(record, name):
    return record["predicted"][name]["value"]


def test_a_small_lamp_strikes_near_90_volts_and_runs_from_125_through_a_megohm():
    """Common practice: a small lamp on 125 V through 1 MΩ with 0.1 µF flashes several times a second."""
    record = record_of(
        'circuit = "gas-lamp"\n[parts]\nsupply = "125 V"\nR = "1M"\nC = "100n"\nV_strike = "90 V"\n'
        'V_extinguish = "60 V"\n'
    )
    assert record["oscillates"] is True
    assert value(record, "upper") == pytest.approx(90.0)
    assert value(record, "charge_time") == pytest.approx(0.1 * math.log(65 / 35), rel=1e-9)
    assert 5 < value(record, "frequency") < 50
    assert any(w["code"] == "hazard" for w in record["warnings"])
    # From a supply that does not reach the striking voltage it never runs.
    stopped = record_of(
        'circuit = "gas-lamp"\n[parts]\nsupply = "85 V"\nR = "1M"\nC = "100n"\nV_strike = "90 V"\n'
        'V_extinguish = "60 V"\n'
    )
    assert stopped["oscillates"] is False


def test_an_op_amp_at_ten_volts_with_equal_divider_resistors_turns_at_five():
    """Common practice."""
    record = record_of(
        'circuit = "op-amp"\n[parts]\nR = "10k"\nC = "100n"\nR_top = "10k"\nR_bottom = "10k"\n'
        'V_high = "10 V"\nV_low = "-10 V"\n'
    )
    assert value(record, "upper") == pytest.approx(5.0, rel=1e-12)
    assert value(record, "lower") == pytest.approx(-5.0, rel=1e-12)
    assert value(record, "duty") == pytest.approx(0.5, rel=1e-12)


@pytest.mark.parametrize("supply", [5.0, 9.0, 15.0])
def test_a_timer_turns_at_thirds_of_its_supply(supply):
    """Common practice, whatever the supply; the frequency hardly depends on it."""
    record = record_of(
        f'circuit = "timer-555"\n[parts]\nsupply = {supply}\nRA = "10k"\nRB = "33k"\nC = "100n"\n'
        'V_discharge = "0 V"\n'
    )
    assert value(record, "upper") == pytest.approx(2 * supply / 3, rel=1e-12)
    assert value(record, "lower") == pytest.approx(supply / 3, rel=1e-12)
    assert value(record, "frequency") == pytest.approx(1 / (math.log(2) * 76e3 * 100e-9), rel=1e-9)


def test_the_first_charge_from_0_volts_takes_ln_3_over_ln_2_of_the_later_ones():
    """Common practice; seen on the integrated build from power-on, against the prediction's charge."""
    parts = {"supply": 9.0, "RA": 10e3, "RB": 33e3, "C": 100e-9, "V_discharge": 0.0}
    waves = simulate("timer-555", parts, start="from rest", cycles=3)
    record = record_of(
        'circuit = "timer-555"\n[parts]\nsupply = "9 V"\nRA = "10k"\nRB = "33k"\nC = "100n"\n'
        'V_discharge = "0 V"\n'
    )
    t = np.linspace(0.0, waves.starts[0], 200_001)
    capacitor = waves.at(t)["capacitor"]
    first = float(t[np.argmax(capacitor)])
    assert first / value(record, "charge_time") == pytest.approx(math.log(3) / math.log(2), rel=1e-4)
