"""Allan deviations against NIST Special Publication 1065 (Riley, 2008), and allantools on random series.

The 1 000-point set, its recipe and its table are those of SP 1065, section 12.4; the 9-point set is that of
the same section (after Riley's test suite). Both are carried by allantools' own tests (nbs14, 2024.6).
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchfit.burnin import stability


def thousand() -> np.ndarray:
    """SP 1065, 12.4: n_0 = 1234567890, n_(i+1) = 16807·n_i mod 2147483647, over 2147483647."""
    found = [1234567890]
    for _ in range(999):
        found.append(16807 * found[-1] % 2147483647)
    return np.array(found) / 2147483647


NINE = np.array([892.0, 809.0, 823.0, 798.0, 671.0, 644.0, 883.0, 903.0, 677.0])


def test_the_recipe():
    """n_1 … n_3 and the statistics of SP 1065, table 31 (as numbered from memory)."""
    y = thousand()
    assert [round(x * 2147483647) for x in y[1:4]] == [395529916, 1209410747, 633705974]
    assert y.max() == pytest.approx(9.957453e-01, abs=5e-7)
    assert y.min() == pytest.approx(1.371760e-03, abs=5e-9)
    assert y.mean() == pytest.approx(4.897745e-01, abs=5e-8)
    assert y.std(ddof=1) == pytest.approx(2.884664e-01, abs=5e-8)


@pytest.mark.parametrize(
    ("m", "plain", "overlapping"),
    [(1, 2.922319e-01, 2.922319e-01), (10, 9.965736e-02, 9.159953e-02), (100, 3.897804e-02, 3.241343e-02)],
)
def test_thousand_points(m, plain, overlapping):
    """Six digits."""
    y = thousand()
    assert stability.allan_deviation([y], m, overlapping=False)[0] == pytest.approx(plain, rel=5e-7)
    assert stability.allan_deviation([y], m)[0] == pytest.approx(overlapping, rel=5e-7)


@pytest.mark.parametrize(("m", "plain", "overlapping"), [(1, 91.22945, 91.22945), (2, 115.8082, 85.95287)])
def test_nine_points(m, plain, overlapping):
    """Six digits (the set is of frequencies as they stand, not fractional)."""
    assert stability.allan_deviation([NINE], m, overlapping=False)[0] == pytest.approx(plain, rel=1e-6)
    assert stability.allan_deviation([NINE], m)[0] == pytest.approx(overlapping, rel=1e-6)


@pytest.mark.parametrize("seed", range(5))
def test_random_series_against_allantools(seed):
    """allantools 2024.6 (A. Wallin and others) on white, walking and drifting frequency."""
    allantools = pytest.importorskip("allantools")
    rng = np.random.default_rng(seed)
    y = (
        rng.normal(size=700) * 1e-6
        + rng.choice([0, 1e-7]) * np.cumsum(rng.normal(size=700))
        + 1e-9 * np.arange(700)
    )
    taus = [1, 2, 5, 16, 64, 200]
    for function, overlapping in ((allantools.oadev, True), (allantools.adev, False)):
        _, expected, _, _ = function(y, rate=1.0, data_type="freq", taus=taus)
        found = [stability.allan_deviation([y], m, overlapping=overlapping)[0] for m in taus]
        np.testing.assert_allclose(found, expected, rtol=1e-9)


SIZES = [(1, 101), (7, 101), (33, 101), (100, 1001), (300, 1001), (1000, 100001)]
# allantools has no formula for white phase noise in short records, an approximation for flicker phase in
# long ones.
BEYOND = [(2, 33, 101), (2, 300, 1001), (1, 1000, 100001)]
CASES = [(a, m, n) for a in (2, 1, 0, -1, -2) for m, n in SIZES if (a, m, n) not in BEYOND]


@pytest.mark.parametrize(("alpha", "m", "points"), CASES)
def test_degrees_of_freedom_against_allantools(alpha, m, points):
    """Greenhall & Riley (2003), the combined algorithm; both routes to it agree to 1 %."""
    ci = pytest.importorskip("allantools").ci
    expected = ci.edf_greenhall(alpha=alpha, d=2, m=m, N=points, overlapping=True, modified=False)
    assert stability.degrees_of_freedom(alpha, m, points) == pytest.approx(expected, rel=0.01)


def power_law(alpha: int, n: int, rng: np.random.Generator) -> np.ndarray:
    """Frequency noise of spectrum f^alpha: shaped white noise, twice as long to be rid of its period."""
    f = np.fft.rfftfreq(2 * n)
    f[0] = f[1]
    return np.fft.irfft(np.fft.rfft(rng.normal(size=2 * n)) * f ** (alpha / 2))[:n]


@pytest.mark.parametrize("alpha", [0, -1, -2])
def test_intervals_hold_what_they_promise(alpha):
    """68 % intervals about overlapping Allan deviations hold the true one in 60 to 78 % of 300 series."""
    rng = np.random.default_rng(10 - alpha)
    n, m = 256, 8
    series = [power_law(alpha, n, rng) for _ in range(300)]
    true = math.sqrt(np.mean([stability.allan_deviation([y], m)[0] ** 2 for y in series]))
    found = [next(d for d in stability.overlapping_allan([y], 1.0) if d.averaging_time == m) for y in series]
    hits = np.mean([d.low <= true <= d.high for d in found])
    assert 0.60 <= hits <= 0.78
    # Flicker noise is told from its neighbours only by much longer records (Riley & Greenhall 2004).
    assert np.mean([abs(d.noise - alpha) <= (alpha == -1) for d in found]) > 0.9


def test_no_average_reaches_over_a_gap():
    """Two stretches of constant frequency, far apart from each other, have no instability at all."""
    found = stability.overlapping_allan([np.full(50, 0.0), np.full(70, 1.0)], 60.0)
    assert [d.averaging_time for d in found] == [60.0, 120.0, 240.0, 480.0, 960.0]
    assert all(d.adev == 0 for d in found)


def test_stretches_pool_as_one_would_expect():
    """Cutting a long white series in ten leaves the deviation where it was, with a larger u at long times."""
    y = np.random.default_rng(3).normal(size=5000)
    whole = {d.averaging_time: d for d in stability.overlapping_allan([y], 1.0)}
    cut = {d.averaging_time: d for d in stability.overlapping_allan(np.split(y, 10), 1.0)}
    for tau in (1.0, 8.0, 64.0):
        assert cut[tau].adev == pytest.approx(whole[tau].adev, abs=3 * whole[tau].u + 3 * cut[tau].u)
        assert cut[tau].u >= whole[tau].u * 0.99
    assert max(cut) < max(whole)
