"""The mean period under white and accumulating jitter."""

from __future__ import annotations

import numpy as np
import pytest

from benchfit.cycle.period import fit_period
from benchfit.cycle.sharp import steady_share
from benchfit.cycle.spectrum import differences, sine_transform
from tests.cycle.makers import jittered


def fitted(instants: np.ndarray, known: float) -> tuple[float, float]:
    number = np.arange(instants.size)
    fit = fit_period(instants, number, np.zeros_like(number), np.full(instants.size, known**2))
    return fit.period - 1.0, fit.u


def test_sine_transform_is_orthonormal_and_its_own_inverse() -> None:
    x = np.random.default_rng(0).standard_normal(37)
    assert sine_transform(sine_transform(x)) == pytest.approx(x, abs=1e-12)
    assert np.sum(sine_transform(x) ** 2) == pytest.approx(np.sum(x**2))


def test_spectrum_gives_the_exact_likelihood() -> None:
    """Against the tridiagonal covariance written out."""
    rng = np.random.default_rng(2)
    steps = 1e-3 * rng.standard_normal(25)
    walk, white, known = 4e-7, 3e-7, 2e-7
    covariance = (walk + 2 * (white + known)) * np.eye(25) - (white + known) * (np.eye(25, k=1) + np.eye(25, k=-1))
    ones = np.ones(25)
    normal = ones @ np.linalg.solve(covariance, ones)
    mean = ones @ np.linalg.solve(covariance, steps) / normal
    rest = steps - mean
    log = -0.5 * (np.linalg.slogdet(covariance)[1] + np.log(normal) + rest @ np.linalg.solve(covariance, rest))
    found = differences(steps, known)
    got = [x[0] for x in found.evaluate(np.array([walk]), np.array([white]))]
    assert got[0] == pytest.approx(mean, rel=1e-9)
    assert got[1] == pytest.approx(1 / normal, rel=1e-9)
    assert got[2] == pytest.approx(log, rel=1e-9)
    weights = found.weights(walk, white)
    assert weights @ steps == pytest.approx(mean, rel=1e-9)


@pytest.mark.parametrize("cycles", [3, 6, 12, 300])
def test_walk_alone(cycles: int) -> None:
    """Accumulating jitter: the interval is Student's, and holds."""
    rng = np.random.default_rng(cycles)
    found = np.array([fitted(jittered(1e-3, 0.0, cycles, rng), 1e-6) for _ in range(60)])
    assert 0.85 <= np.mean(np.abs(found[:, 0]) < 1.96 * found[:, 1]) <= 1.0


@pytest.mark.parametrize("cycles", [3, 12, 300])
def test_white_alone_is_fitted_by_a_line(cycles: int) -> None:
    """Known white noise: as good as the least-squares line, and the interval not much wider than its own."""
    rng = np.random.default_rng(cycles)
    found = np.array([fitted(jittered(0.0, 1e-3, cycles, rng), 1e-3) for _ in range(60)])
    k = np.arange(cycles + 1)
    line = 1e-3 / np.sqrt(np.sum((k - k.mean()) ** 2))
    assert np.sqrt(np.mean(found[:, 0] ** 2)) < 1.3 * line
    assert np.mean(np.abs(found[:, 0]) < 1.96 * found[:, 1]) > 0.9
    assert np.median(found[:, 1]) < 2.0 * line


def test_last_minus_first_is_right_for_a_walk_and_the_line_for_white_noise() -> None:
    rng = np.random.default_rng(4)
    k = np.arange(101)
    walk = jittered(1e-3, 0.0, 100, rng)
    assert fitted(walk, 1e-7)[0] == pytest.approx((walk[-1] - walk[0]) / 100 - 1.0, abs=2e-5)
    white = jittered(0.0, 1e-3, 100, rng)
    assert fitted(white, 1e-3)[0] == pytest.approx(np.polyfit(k, white, 1)[0] - 1.0, abs=3e-6)


def test_jitter_is_that_of_single_periods() -> None:
    rng = np.random.default_rng(5)
    number = np.arange(401)
    instants = jittered(2e-3, 0.0, 400, rng)
    fit = fit_period(instants, number, np.zeros_like(number), np.full(401, 1e-10))
    value, u = fit.jitter
    assert value == pytest.approx(2e-3, abs=4 * u)
    assert u < 2e-4


def test_edges_in_step_with_the_samples_are_not_averaged() -> None:
    """A period of exactly 40 samples: the share stays unknown to a sample, however many cycles there are."""
    number = np.repeat(np.arange(50), 2)
    rising = np.tile([True, False], 50)
    before = np.where(rising, 40 * number + 3, 40 * number + 17)
    share, variance = steady_share(before, rising, number, 40.0, 0.01)  # type: ignore[misc]
    assert share == pytest.approx(14 / 40)
    # The period is not known to be exactly 40, which leaves a little less than the whole sample.
    assert 0.7 * np.sqrt(2 / 12) < np.sqrt(variance) * 40 < 1.05 * np.sqrt(2 / 12)
    # Out of step, the bounds close in on it.
    rise, fall = 40.37 * number + 3.2, 40.37 * number + 17.5
    before = np.floor(np.where(rising, rise, fall)).astype(np.int64)
    share, variance = steady_share(before, rising, number, 40.37, 0.01)  # type: ignore[misc]
    assert share == pytest.approx(14.3 / 40.37, abs=4 * np.sqrt(variance))
    assert np.sqrt(variance) * 40 < 0.08
    # Jitter that the bounds do not allow is not forced into them.
    before = before + np.random.default_rng(0).integers(-2, 3, before.size)
    assert steady_share(before, rising, number, 40.37, 0.01) is None
