"""The covariance arithmetic against JCGM 100:2008 (GUM), examples H.2 and H.3 of its Annex H."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from benchfit.cycle.phase import fit_exponentials
from benchfit.cycle.propagation import propagate

DATA = Path(__file__).parent / "data"


def test_h2_resistance_and_reactance() -> None:
    """H.2: R = V·cos φ/I, X = V·sin φ/I, Z = V/I from five simultaneous readings (GUM, tables H.2 to H.4)."""
    v, i, phi = np.loadtxt(DATA / "gum_h2.csv", delimiter=",", skiprows=1).T
    readings = np.stack([v, i * 1e-3, phi])
    mean, covariance = readings.mean(axis=1), np.cov(readings) / readings.shape[1]

    def impedance(x: np.ndarray) -> np.ndarray:
        return x[0] / x[1] * np.array([np.cos(x[2]), np.sin(x[2]), 1.0])

    values, spread = propagate(impedance, mean, covariance)
    u = np.sqrt(np.diag(spread))
    r = spread / np.outer(u, u)
    assert values == pytest.approx([127.732, 219.847, 254.260], abs=6e-4)
    assert u == pytest.approx([0.071, 0.295, 0.236], abs=6e-4)
    assert [r[0, 1], r[0, 2], r[1, 2]] == pytest.approx([-0.588, -0.485, 0.993], abs=6e-4)


def test_h3_calibration_line() -> None:
    """H.3: a thermometer's correction as a straight line about 20 °C (GUM, table H.6 and H.3.3 to H.3.5)."""
    t, b = np.loadtxt(DATA / "gum_h3.csv", delimiter=",", skiprows=1).T
    fit = fit_exponentials(t - 20.0, b, hold=True)
    slope_variance = fit.variance * fit.shared[0, 0]
    shared = fit.coupling[0, 0] * slope_variance
    level_variance = fit.variance / fit.information[0] + fit.coupling[0, 0] ** 2 * slope_variance
    assert fit.levels[0] == pytest.approx(-0.1712, abs=5e-5)
    assert fit.model.slope == pytest.approx(0.00218, abs=5e-6)
    assert np.sqrt(level_variance) == pytest.approx(0.0029, abs=5e-5)
    assert np.sqrt(slope_variance) == pytest.approx(0.00067, abs=5e-6)
    assert shared / np.sqrt(level_variance * slope_variance) == pytest.approx(-0.930, abs=5e-4)
    assert np.sqrt(fit.variance) == pytest.approx(0.0035, abs=5e-5)
    at_30 = np.sqrt(level_variance + 100.0 * slope_variance + 20.0 * shared)
    assert float(fit.model.value(np.array(10.0), fit.levels)[0]) == pytest.approx(-0.1494, abs=5e-5)
    assert at_30 == pytest.approx(0.0041, abs=5e-5)
