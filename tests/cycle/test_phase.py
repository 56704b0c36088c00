"""The variable-projection fit of exponential phases."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit.cycle.phase import PhaseModel, basis, fit_exponentials, fit_levels


@pytest.mark.parametrize("curvature", [-2.0, -0.05, 0.0, 1e-9, 0.05, 0.3, 2.0, 8.0])
def test_derivatives_of_the_basis(curvature: float) -> None:
    t, spread, h = np.linspace(-0.5, 0.5, 21), np.full(21, 1e-4), 1e-5
    above, below, here = (basis(t, spread, curvature + d) for d in (h, -h, 0.0))
    assert (above[1] - below[1]) / (2 * h) == pytest.approx(here[2], abs=1e-8)


@pytest.mark.parametrize("curvature", [-1.0, 0.0, 0.3, 2.0, 6.0])
@pytest.mark.parametrize("size", [1, 2, 5, 40])
def test_bin_means_are_exact(curvature: float, size: int) -> None:
    """Means over the samples of a bin, not the value at its middle."""
    # A bin of a fifth of the time constant, wider than any that is used.
    centre, step = np.linspace(-0.5, 0.5, 7), min(0.1, 0.2 / max(abs(curvature), 1e-3)) / max(size, 40)
    inner = (np.arange(size) - (size - 1) / 2) * step
    samples = centre[:, None] + inner
    decay, ramp, _ = basis(centre, np.full(7, np.var(inner)), curvature)
    exact = np.exp(-curvature * samples)
    assert decay == pytest.approx(exact.mean(axis=1), rel=1e-9)
    phi = samples if curvature == 0 else (1 - exact) / curvature
    assert ramp == pytest.approx(phi.mean(axis=1), abs=1e-8 * float(np.ptp(phi)))


@pytest.mark.parametrize("curvature", [-0.7, 0.0, 1e-6, 0.4, 3.0])
def test_finds_what_was_there_without_noise(curvature: float) -> None:
    model = PhaseModel(0.3, 1.7, curvature)
    t = np.tile(np.linspace(-0.5, 0.5, 50), 4)
    cycle = np.repeat(np.arange(4), 50)
    level = np.array([0.1, 0.12, 0.09, 0.11])
    fit = fit_exponentials(t, model.value(t, level[cycle]), cycle)
    assert fit.model.curvature == pytest.approx(curvature, abs=1e-7)
    assert fit.levels == pytest.approx(level, abs=1e-9)
    assert float(fit.model.rate(np.array(0.3))) == pytest.approx(1.7, abs=1e-8)


def test_time_to_undoes_value() -> None:
    for curvature in (-1.0, 0.0, 1e-10, 0.8):
        model = PhaseModel(0.0, 2.0, curvature)
        v = model.value(np.array([0.3, 0.7]), np.array(0.5))
        assert model.time_to(v, np.array([0.5, 0.5])) == pytest.approx([0.3, 0.7], rel=1e-9)
    assert np.isnan(PhaseModel(0.0, 2.0, 2.0).time_to(1.5, np.array([0.0])))[0]


def test_many_bins_cost_next_to_no_information() -> None:
    """200 bins of a phase lose under 1 % (in u) against every sample on its own."""
    t = np.linspace(0, 1, 4000)
    v = 3.0 * (1 - np.exp(-1.1 * t))
    every = fit_exponentials(t - 0.5, v)
    step = t[1] - t[0]
    binned = fit_exponentials(
        (t - 0.5).reshape(200, 20).mean(axis=1), v.reshape(200, 20).mean(axis=1),
        weight=np.full(200, 20.0), spread=np.full(200, (20**2 - 1) / 12 * step**2),
    )
    assert np.sqrt(np.diag(binned.shared) / np.diag(every.shared)) == pytest.approx([1, 1], abs=0.01)


def test_levels_held_agree_with_the_full_fit() -> None:
    rng = np.random.default_rng(3)
    t, cycle = np.tile(np.linspace(-0.5, 0.5, 30), 5), np.repeat(np.arange(5), 30)
    v = PhaseModel(0.0, 2.0, 1.5).value(t, rng.normal(0, 0.1, 5)[cycle]) + 0.01 * rng.standard_normal(t.size)
    fit = fit_exponentials(t, v, cycle)
    held = fit_levels(fit.model, t, v, cycle, np.ones(t.size), np.zeros(t.size))
    assert held.levels == pytest.approx(fit.levels, abs=1e-10)
    assert np.linalg.inv(held.bare @ held.bare.T) == pytest.approx(fit.shared, rel=1e-6)
    assert held.bare @ held.residual == pytest.approx([0, 0], abs=1e-6)


@given(
    scale=st.floats(1e-3, 1e3), offset=st.floats(-50, 50), speed=st.floats(1e-6, 1e6), curvature=st.floats(-1.5, 4)
)
def test_units_do_not_matter(scale: float, offset: float, speed: float, curvature: float) -> None:
    rng = np.random.default_rng(1)
    t = np.linspace(-0.5, 0.5, 60)
    v = PhaseModel(0.0, 1.0, curvature).value(t, np.array(0.0)) + 0.01 * rng.standard_normal(60)
    plain = fit_exponentials(t, v)
    other = fit_exponentials(t / speed, scale * v + offset)
    assert other.model.curvature == pytest.approx(plain.model.curvature * speed, rel=1e-4, abs=1e-5 * speed)
    assert other.shared[1, 1] * scale**2 == pytest.approx(plain.shared[1, 1] * speed**2, rel=1e-3)


def test_covariance_holds_the_scatter() -> None:
    """κ's errors over many draws are as large as its covariance says, and so are those of the levels."""
    rng = np.random.default_rng(11)
    model, t, cycle = PhaseModel(0.0, 1.0, 0.9), np.tile(np.linspace(-0.5, 0.5, 40), 3), np.repeat(np.arange(3), 40)
    clean = model.value(t, np.zeros(t.size))
    z = []
    for _ in range(400):
        fit = fit_exponentials(t, clean + 0.02 * rng.standard_normal(t.size), cycle)
        own = np.sqrt(fit.variance * (1 / fit.information[0] + fit.coupling[0] @ fit.shared @ fit.coupling[0]))
        z.append([(fit.model.curvature - 0.9) / np.sqrt(fit.variance * fit.shared[1, 1]), fit.levels[0] / own])
    # The variance of 400 squares is known to ± 7 %; four of these.
    assert np.mean(np.square(z), axis=0) == pytest.approx([1, 1], abs=0.3)
