"""The whole stage on clean captures: at the bound, honest about it, blind to units and order."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchfit.capture.model import Capture, Channel
from benchfit.cycle import Assignment, CycleConstants, guess, measure
from benchfit.errors import CaptureError
from tests.cycle.makers import CAPACITOR, capture_of, train
from tools.cycle_families import clean_both, clean_lamp, clean_output
from tools.study_cycle import Train, bound, derived

NAMES = ("period", "charge_share", "upper", "lower", "charge_curvature", "discharge_curvature")


def deviations(found: CycleConstants, truth: dict[str, float]) -> np.ndarray:
    return np.array([(found.value(n) - truth[n]) / found.u(n) for n in NAMES])


@pytest.mark.parametrize(
    ("cycles", "noise", "x_up", "x_down"),
    [(2.3, 0.01, 3.0, 2.0), (5.3, 0.03, 1.3, 1.3), (20.7, 0.002, 5.0, 1.5), (80.2, 0.01, 2.0, 3.0)],
)
def test_intervals_hold_the_truth(cycles: float, noise: float, x_up: float, x_down: float) -> None:
    z = []
    for seed in range(20):
        phase = float(np.random.default_rng(seed).random())
        capture, truth = train(cycles, noise, seed, phase, x_up, x_down, per_cycle=150.3)
        z.append(deviations(measure(capture, CAPACITOR), truth))
    z = np.abs(z)
    assert np.mean(z < 1.96) > 0.9
    assert np.max(z) < 5.0


def test_errors_are_at_the_bound() -> None:
    """Root-mean-square errors over the Cramér–Rao bound; 60 captures fix the ratio to ± 9 %."""
    made = Train(3.0, 2.0, 8.4, 120.3, 0.01)
    squares = []
    for seed in range(60):
        phase = float(np.random.default_rng(seed).random())
        limit, truth = bound(made, phase), made.truth()
        values = derived(measure(made.capture(phase, seed), CAPACITOR))
        squares.append([((values[n] - truth[n]) / limit[n]) ** 2 for n in (
            "charge_curvature", "discharge_curvature", "charge_slope", "discharge_slope", "charge_asymptote", "upper",
            "lower", "period",
        )])
    ratio = np.sqrt(np.mean(squares, axis=0))
    assert np.all(ratio < 1.25), ratio
    assert np.mean(ratio) < 1.07, ratio


def test_stated_uncertainty_is_the_bound() -> None:
    made = Train(2.5, 2.5, 12.4, 200.3, 0.01)
    found = measure(made.capture(0.2, 1), CAPACITOR)
    limit = bound(made, 0.2)
    for name in ("charge_curvature", "discharge_curvature", "upper", "lower"):
        assert found.u(name) == pytest.approx(limit[name], rel=0.1)


def test_asymptote_and_curvature_are_one_in_a_nearly_straight_phase() -> None:
    """The covariance must carry that only the slope is well known."""
    made = Train(1.2, 1.2, 6.3, 300.0, 0.01)
    found = measure(made.capture(0.3, 2), CAPACITOR)
    limit = bound(made, 0.3)

    def slope(values: np.ndarray) -> float:
        return derived(replace(found, values=values))["charge_slope"]

    gradient = np.array([
        (slope(found.values + d) - slope(found.values - d)) / (2 * d.sum())
        for d in np.diag(1e-3 * np.sqrt(np.diag(found.covariance)))
    ])
    u = float(np.sqrt(gradient @ found.covariance @ gradient))
    assert u == pytest.approx(limit["charge_slope"], rel=0.15)
    assert u / slope(found.values) < 0.1 * found.u("charge_curvature") / found.value("charge_curvature")


def test_covariance_is_a_covariance() -> None:
    capture, _ = train()
    found = measure(capture, CAPACITOR)
    assert found.covariance == pytest.approx(found.covariance.T)
    scale = np.sqrt(np.diag(found.covariance))
    assert np.linalg.eigvalsh(found.covariance / np.outer(scale, scale))[0] > -1e-9


@pytest.mark.parametrize(("scale", "offset"), [(10.0, 0.0), (1.0, 40.0), (1e-3, -0.2)])
def test_volts_shift_and_scale(scale: float, offset: float) -> None:
    capture, _ = train()
    plain = measure(capture, CAPACITOR)
    moved = measure(capture_of(capture.channels[0].values * scale + offset, capture.interval), CAPACITOR)
    for name in NAMES:
        wanted = plain.value(name)
        if name in ("upper", "lower"):
            wanted = wanted * scale + offset
        assert moved.value(name) == pytest.approx(wanted, rel=1e-5, abs=1e-5 * scale)


def test_scale_of_the_assignment_is_that_of_the_values() -> None:
    capture, _ = train()
    tenth = capture_of(capture.channels[0].values / 10, capture.interval, 0.01)
    found = measure(tenth, [Assignment("CH1", "capacitor", scale=10.0)])
    assert found.value("upper") == pytest.approx(1.0, abs=0.02)
    assert found.resolutions["capacitor"] == pytest.approx(0.1)
    assert found.spans["capacitor"][1] == pytest.approx(float(capture.channels[0].values.max()))


def test_turns_are_on_the_captures_own_time_axis() -> None:
    capture, truth = train(phase=0.0)
    later = Capture(capture.path, capture.interval, 7.5, capture.channels)
    found = measure(later, CAPACITOR)
    whole = (found.turns - 7.5) / truth["period"]
    assert whole == pytest.approx(np.round(whole), abs=0.01)


def test_both_channels_in_any_order_and_named_anything() -> None:
    case = clean_both(3)
    first, second = case.capture.channels
    swapped = replace(case.capture, channels=(replace(second, name="capacitor?"), replace(first, name="out")))
    assigned = guess(swapped)
    assert {(a.channel, a.node, a.shape) for a in assigned} == {
        ("capacitor?", "output", "square"), ("out", "capacitor", "timing")
    }
    one, other = measure(case.capture, case.assignments), measure(swapped, assigned)
    for name in one.names:
        assert other.value(name) == pytest.approx(one.value(name), rel=1e-9)


def test_guess_of_one_channel() -> None:
    assert guess(clean_output(1).capture)[0].node == "output"
    assert guess(clean_lamp(1).capture)[0].node == "capacitor"
    assert guess(train()[0])[0].node == "capacitor"


def test_empty_cells_are_left_out() -> None:
    capture, truth = train(cycles=6.3)
    values = capture.channels[0].values.copy()
    values[:20] = np.nan
    values[500:510] = np.nan
    found = measure(capture_of(values, capture.interval), CAPACITOR)
    assert np.all(np.abs(deviations(found, truth)) < 4)


@pytest.mark.parametrize("values", [np.full(100, np.nan), np.empty(0)])
def test_a_channel_without_numbers_is_one_sentence(values: np.ndarray) -> None:
    with pytest.raises(CaptureError, match="holds no number"):
        measure(capture_of(values), CAPACITOR)


def test_a_channel_that_is_not_there_is_one_sentence() -> None:
    with pytest.raises(CaptureError, match=r"no channel 'CH7'.*has CH1"):
        measure(train()[0], [Assignment("CH7", "capacitor")])
    with pytest.raises(CaptureError, match="no channel is assigned"):
        measure(train()[0], [])


@pytest.mark.parametrize("size", [1, 2, 3, 5, 8, 20])
@pytest.mark.parametrize("shape", ["timing", "jumping", "holding", "square"])
def test_short_records_raise_nothing(size: int, shape: str) -> None:
    rng = np.random.default_rng(size)
    for values in (np.zeros(size), np.arange(size) % 2.0, rng.standard_normal(size), np.arange(size) * 1.0):
        found = measure(capture_of(values), [Assignment("CH1", "capacitor", shape)])  # type: ignore[arg-type]
        assert np.all(np.isfinite(found.values))
        assert np.all(np.isfinite(found.covariance))


def test_output_levels_and_edges() -> None:
    """A trapezoid of known corners: 10 % to 90 % durations and 50 % crossings (IEEE Std 181)."""
    rng = np.random.default_rng(1)
    t = np.arange(6000) * 1.0
    u = np.mod(t + 37.3, 500.0)
    wave = np.interp(u, [0, 40, 240, 260, 500], [0, 5, 5, 0, 0]) + 0.01 * rng.standard_normal(t.size)
    capture = Capture("trapezoid", 1e-6, 0.0, (Channel("X", "V", wave),))
    found = measure(capture, [Assignment("X", "output", "square")])
    truth = {"period": 500e-6, "high_share": (250 - 20) / 500, "high": 5.0, "low": 0.0, "rise_time": 32e-6,
             "fall_time": 16e-6}
    for name, wanted in truth.items():
        assert found.value(name) == pytest.approx(wanted, abs=4 * found.u(name) + 1e-9), name
    assert found.u("rise_time") < 1e-6


def test_fast_edges_have_no_duration() -> None:
    case = clean_output(2)
    found = measure(case.capture, case.assignments)
    assert "rise_time" not in found
    assert "fall_time" not in found


@pytest.mark.parametrize("cycles", [20_000.4])
def test_very_many_cycles(cycles: float) -> None:
    made = Train(2.0, 2.0, cycles, 20.21, 0.01)
    found = measure(made.capture(0.3, 1), CAPACITOR)
    truth = made.truth()
    assert np.all(np.abs(deviations(found, truth)) < 4)
    assert found.u("period") / truth["period"] < 1e-7
    assert found.cycles == pytest.approx(cycles, rel=1e-3)
