"""What one exponential says of a phase that is none: against a least-squares fit of the waveform itself."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.optimize import least_squares

from benchfit import circuits
from benchfit.circuits.solve import constants
from tests.circuits.builds import BENCH, VALUES, parts_of, scale_of
from tests.circuits.kirchhoff import TIGHT, Half, Leg, node_of
from tests.circuits.test_phases import integrated


def waveform(leg: Leg, half: Half, start: float, duration: float, points: int = 1500):
    """Times (s) and node voltages (V) of one half, densely."""
    t = np.linspace(0.0, duration, points)

    def rates(time, y):
        c = leg.c * (1 + leg.slope * y[0]) + leg.aside
        return [half.inflow(half.foot + y[0], time) / c]

    assert leg.esr == 0
    done = solve_ivp(rates, (0, duration), [start - half.foot], t_eval=t, **TIGHT)
    return t, np.array([node_of(leg, half, q, s) for q, s in zip(done.y[0], t, strict=True)])


def one_exponential(t, v):
    """Start, end (V), κ·T, and the third Legendre coefficient of the rest (V), by scipy's least squares."""
    u = t / t[-1]
    weights = np.full(u.size, 1.0)
    weights[[0, -1]] = 0.5

    def model(x):
        start, end, bend = x
        shape = np.expm1(-bend * u) / np.expm1(-bend) if abs(bend) > 1e-9 else u
        return start + (end - start) * shape

    fit = least_squares(
        lambda x: (model(x) - v) * np.sqrt(weights), [v[0], v[-1], 0.5], xtol=1e-14, ftol=1e-14
    )
    left = v - model(fit.x)
    x = 2 * u - 1
    third = (5 * x**3 - 3 * x) / 2
    return (*fit.x, 7 * float(np.sum(weights * left * third) / np.sum(weights)))


BENT = {
    "op-amp, rising capacitance": ("op-amp", {"C_slope": 0.03}),
    "op-amp, falling capacitance": ("op-amp", {"C_slope": -0.05}),
    "timer": ("timer-555", {"C_slope": -0.06}),
    "lamp": ("gas-lamp", {"C_slope": -0.003}),
    "unijunction": ("unijunction", {"C_slope": -0.04}),
    "ramp": ("current-ramp", {"C_slope": -0.06}),
    "clamped gate": ("gate-pair", {}),
    "clamped gate, hard": ("gate-pair", {"R_series": 2.5e5}),
    "clamped gate, bent": ("gate-pair", {"C_slope": 0.02}),
}


@pytest.mark.parametrize("case", BENT)
def test_one_exponential_of_a_bent_phase_is_what_least_squares_finds(case):
    circuit, more = BENT[case]
    p = {**VALUES[circuit], **more}
    leg, halves = BENCH[circuit](p)
    truth = integrated(circuit, p)
    found = constants(circuits.get(circuit).cycle(parts_of(circuit, p)), "capacitor")
    for i, half in enumerate(halves):
        word = "charge" if half.rising else "discharge"
        t, v = waveform(leg, half, truth.starts[i], truth.durations[i])
        start, end, bend, bow = one_exponential(t, v)
        swing = abs(v[-1] - v[0])
        assert float(found[f"{word}_start"]) == pytest.approx(start, abs=3e-4 * swing)
        assert float(found[f"{word}_end"]) == pytest.approx(end, abs=3e-4 * swing)
        mine = float(found[f"{word}_curvature"]) * truth.durations[i]
        assert mine == pytest.approx(bend, abs=5e-4, rel=5e-4)
        assert float(found[f"{word}_bow"]) == pytest.approx(bow, abs=2e-4 * swing)
        assert abs(bow) > 3e-5 * swing


@pytest.mark.parametrize("circuit", sorted(BENCH))
def test_a_plain_phase_has_no_bow_and_its_own_constants(circuit):
    ohms, _, _, _ = scale_of(circuit)
    p = {**VALUES[circuit], "R_leak": 20 * ohms}
    if circuit == "gate-pair":
        del p["R_series"]
    leg, halves = BENCH[circuit](p)
    truth = integrated(circuit, p)
    found = constants(circuits.get(circuit).cycle(parts_of(circuit, p)), "capacitor")
    assert float(found["period"]) == pytest.approx(truth.period, rel=1e-6)
    for i, half in enumerate(halves):
        word = "charge" if half.rising else "discharge"
        # κ is −d(inflow)/dv over the capacitance.
        kappa = (half.inflow(0.0, 0.0) - half.inflow(1.0, 0.0)) / leg.c
        assert float(found[f"{word}_curvature"]) == pytest.approx(kappa, rel=1e-9)
        assert float(found[f"{word}_bow"]) == 0
        assert float(found[f"{word}_share"]) == pytest.approx(truth.durations[i] / truth.period, rel=1e-6)


def test_the_output_alone_gives_shares_and_levels():
    found = constants(
        circuits.get("schmitt-inverter").cycle(parts_of("schmitt-inverter", VALUES["schmitt-inverter"])), ""
    )
    assert set(found) == {"period", "high_share", "high", "low"}
    assert float(found["high"]) == 5.0


def test_bent_and_plain_builds_side_by_side():
    """Rows with and without a bend in one batch: each as by itself."""
    made = circuits.get("op-amp")
    p = parts_of("op-amp", VALUES["op-amp"])
    slopes = np.array([0.0, 0.03, -0.02])
    together = constants(made.cycle({**p, "C_slope": slopes}), "capacitor")
    for i, slope in enumerate(slopes):
        alone = constants(made.cycle({**p, "C_slope": np.float64(slope)}), "capacitor")
        for name, value in alone.items():
            assert np.broadcast_to(together[name], (3,))[i] == pytest.approx(
                float(value), rel=1e-9, abs=1e-12
            )
