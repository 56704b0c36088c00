"""Nodes that jump, nodes that are held, and nodes that rest."""

from __future__ import annotations

import numpy as np
import pytest

from benchfit.cycle import Assignment, measure
from tests.cycle.makers import CAPACITOR, capture_of
from tools.bench import simulate
from tools.bench.chain import Input
from tools.bench.chain import measure as record
from tools.cycle_families import to_capture


def seen(waves, node: str, noise: float, per_cycle: float = 420.3, samples: int = 2500, seed: int = 1):  # type: ignore[no-untyped-def]
    interval = waves.period / per_cycle
    return to_capture(record(waves, {node: Input(bits=None, noise=noise)}, interval, samples, seed=seed).channels, interval)


@pytest.mark.parametrize("noise", [0.002, 0.03])
def test_gate_pair_jumps(noise: float) -> None:
    """Node between R, C and R_series: each phase starts a supply away from the threshold."""
    waves = simulate("gate-pair", {"supply": 5.0, "R": 100e3, "C": 10e-9, "R_series": 1e9, "V_threshold": 2.4})
    found = measure(seen(waves, "capacitor", noise), [Assignment("capacitor", "capacitor", "jumping")])
    truth = {"period": waves.period, "upper": 2.4, "lower": 2.4, "charge_start": -2.6, "discharge_start": 7.4}
    for name, wanted in truth.items():
        assert found.value(name) == pytest.approx(wanted, abs=4 * found.u(name)), name
    # The gate has 250 Ω of its own.
    assert found.value("charge_curvature") == pytest.approx(997.5, abs=4 * found.u("charge_curvature"))
    assert found.u("upper") < 0.01


@pytest.mark.parametrize("noise", [0.002, 0.03])
def test_base_is_held(noise: float) -> None:
    """Two transistors: the base is kicked down, climbs to where it conducts, and is held."""
    parts = {"supply": 5.0, "R1": 47e3, "C1": 10e-9, "R2": 33e3, "C2": 10e-9, "RC1": 1e3, "RC2": 1e3}
    waves = simulate("two-transistor", parts)
    found = measure(seen(waves, "base1", noise), [Assignment("base1", "base1", "holding")])
    fine = waves.at(np.linspace(0, waves.period, 200_001)[:-1])["base1"]
    truth = {"period": waves.period, "charge_share": waves.high_share, "lower": float(fine.min()),
             "charge_curvature": 1 / (47e3 * 10e-9)}
    for name, wanted in truth.items():
        assert found.value(name) == pytest.approx(wanted, abs=4 * found.u(name)), name
    assert found.value("upper") == pytest.approx(0.56, abs=4 * found.u("upper"))
    assert "discharge_curvature" not in found


@pytest.mark.parametrize("esr", [200.0, 2000.0])
def test_series_resistance_makes_steps(esr: float) -> None:
    """A step at every turn is told from a corner and from ringing without being announced."""
    parts = {"R": 10e3, "C": 100e-9, "R_top": 10e3, "R_bottom": 10e3, "V_high": 10.0, "V_low": -10.0, "ESR": esr}
    waves = simulate("op-amp", parts)
    found = measure(seen(waves, "capacitor", 0.05), [Assignment("capacitor", "capacitor")])
    fine = waves.at(np.linspace(0, waves.period, 200_001)[:-1])["capacitor"]
    start = float(fine[np.argmin(fine) + 1])
    assert found.value("charge_start") == pytest.approx(start, abs=4 * found.u("charge_start") + 0.01)
    assert found.value("upper") == pytest.approx(5.0, abs=4 * found.u("upper"))
    assert found.value("charge_curvature") == pytest.approx(1 / ((10e3 + esr) * 100e-9), rel=0.02)


@pytest.mark.parametrize("seed", range(4))
def test_noise_alone_does_not_oscillate(seed: int) -> None:
    rng = np.random.default_rng(seed)
    for values in (3 + 0.01 * rng.standard_normal(5000), np.round(0.7 * rng.standard_normal(4000))):
        for shape in ("timing", "square"):
            found = measure(capture_of(values), [Assignment("CH1", "capacitor", shape)])  # type: ignore[arg-type]
            assert not found.oscillates
            assert "no-oscillation" in {r.code for r in found.remarks}


def test_one_charge_tells_its_asymptote() -> None:
    """Switched on, charged, and there it stays: start, asymptote, time constant, rest."""
    rng = np.random.default_rng(2)
    t = np.arange(6000) * 1e-3
    z = []
    for _ in range(20):
        v = np.where(t > 0.8, 5 - 5 * np.exp(-(t - 0.8) / 0.5), 0.0) + 0.02 * rng.standard_normal(t.size)
        found = measure(capture_of(v), CAPACITOR)
        assert not found.oscillates
        z.append([(found.value(n) - w) / found.u(n) for n, w in (
            ("ramp_start", 0.0), ("ramp_asymptote", 5.0), ("ramp_curvature", 2.0), ("rest", 5.0)
        )])
    assert np.mean(np.abs(z) < 3) > 0.95


def test_a_ramp_that_is_held_keeps_its_own_asymptote() -> None:
    """A starved unijunction: the ramp heads for the supply, and the device holds it on the way."""
    parts = {"supply": 14.95, "R": 4.68e6, "C": 214e-9, "eta": 0.643, "V_D": 0.61, "V_valley": 1.7, "I_peak": 3.4e-6}
    waves = simulate("unijunction", parts, start="from rest")
    shown = record(waves, {"capacitor": Input(bits=None, noise=0.05)}, 0.7e-3, 5000, begin=-0.35, seed=3)
    found = measure(to_capture(shown.channels, 0.7e-3), [Assignment("capacitor", "capacitor")])
    assert not found.oscillates
    assert found.value("ramp_asymptote") == pytest.approx(14.95, abs=4 * found.u("ramp_asymptote"))
    assert found.value("ramp_curvature") == pytest.approx(1 / (4.68e6 * 214e-9), abs=4 * found.u("ramp_curvature"))
    assert found.value("rest") < 11.0


def test_a_straight_ramp_has_no_asymptote() -> None:
    rng = np.random.default_rng(3)
    found = measure(capture_of(np.linspace(0, 4, 3000) + 0.02 * rng.standard_normal(3000)), CAPACITOR)
    assert not found.oscillates
    assert "ramp_asymptote" not in found
    assert abs(found.value("ramp_curvature")) < 3 * found.u("ramp_curvature")


def test_triangles_are_no_special_case() -> None:
    rng = np.random.default_rng(4)
    t = np.arange(4000) / 400.3
    v = 2 * np.abs(2 * np.mod(t, 1) - 1) - 1 + 0.01 * rng.standard_normal(t.size)
    found = measure(capture_of(v), CAPACITOR)
    assert abs(found.value("charge_curvature")) < 4 * found.u("charge_curvature")
    for name, wanted in (("upper", 1.0), ("lower", -1.0), ("charge_share", 0.5)):
        assert found.value(name) == pytest.approx(wanted, abs=4 * found.u(name))
