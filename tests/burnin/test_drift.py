"""Does it drift, and by which law: seeded series with a known answer, bounds on how often it is right."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchfit.burnin import drift
from benchfit.burnin.blocks import block, edges
from benchfit.burnin.leaving import leaving

EVERY = 60.0


def analysed(y, time=None):
    """Basis, block means and drift of a series."""
    time = EVERY * np.arange(y.size) if time is None else time
    blocks = block(time, y, edges(time))
    base = drift.basis(blocks, float(time[-1]))
    return base, blocks.mean, drift.analyse(base, blocks.mean)


def course(law, u):
    """A law's course over u = 0 … 1."""
    return {
        "linear": u,
        "logarithmic": np.log1p(u / 0.02) / math.log(51),
        "settling": 1 - np.exp(-u / 0.1),
        "step": (u > 0.6).astype(float),
        "none": 0 * u,
    }[law]


@pytest.mark.parametrize("law", [law for law in drift.LAWS if law != "none"])
@pytest.mark.parametrize("n", [80, 2000])
def test_the_right_law(law, n):
    """Twelve of twelve runs at 30 times the scatter of a record, up and down."""
    rng = np.random.default_rng(n)
    u = np.linspace(0, 1, n)
    for i in range(12):
        _, _, found = analysed(100 + (-1) ** i * 30 * course(law, u) + rng.normal(size=n))
        assert found.law == law
        assert math.isclose(sum(found.probability.values()), 1.0)


@pytest.mark.parametrize("kind", ["white", "walk"])
@pytest.mark.parametrize("n", [12, 60, 400])
def test_steady_runs_do_not_drift(kind, n):
    """At most one in twenty, also where the value wanders at random by ten times its noise."""
    rng = np.random.default_rng(n)
    wrong, runs = 0, 60 if n < 100 else 20
    for _ in range(runs):
        y = rng.normal(size=n)
        if kind == "walk":
            y = y + 10 * np.cumsum(rng.normal(size=n)) / math.sqrt(n)
        wrong += analysed(y)[2].law != "none"
    assert wrong <= 0.05 * runs


def test_the_drift_s_u_is_one():
    """Slopes of 200 noisy series: (found − true)/u is spread about as a unit normal.

    Without a walk u is somewhat too large, since that there is none cannot be known; with a walk that hardly
    shows it is somewhat too small.
    """
    for walk, least, most in ((0.0, 0.4, 1.05), (3.0, 0.8, 1.45)):
        rng = np.random.default_rng(4)
        z = []
        for _ in range(200):
            n = 60
            y = 20 * np.linspace(0, 1, n) + rng.normal(size=n) + walk * np.cumsum(rng.normal(size=n)) / math.sqrt(n)
            found = analysed(y)[2]
            z.append((found.rate - 20 / (EVERY * (n - 1))) / found.u_rate)
        assert least < np.std(z) < most
        assert abs(np.mean(z)) < 0.25


def test_its_parameters():
    """Time constant, age and moment of a step, within the grid's step and their own u."""
    rng = np.random.default_rng(1)
    n = 1000
    span = EVERY * (n - 1)
    u = np.linspace(0, 1, n)
    settling = analysed(50 * (1 - np.exp(-u / 0.12)) + rng.normal(size=n))[2]
    assert settling.shape.parameter == pytest.approx(0.12 * span, rel=0.12)
    ageing = analysed(50 * np.log1p(u / 0.03) + rng.normal(size=n))[2]
    assert ageing.shape.parameter == pytest.approx(0.03 * span, rel=0.3)
    assert ageing.change == pytest.approx(50 * np.log1p(1 / 0.03), rel=0.02)
    step = analysed(np.where(u > 0.4, 7.0, 0.0) + 0.1 * rng.normal(size=n))[2]
    assert step.shape.parameter == pytest.approx(0.4 * span, abs=0.004 * span)
    assert step.change == pytest.approx(7.0, abs=0.05)
    assert abs(step.rate) < 4 * step.u_rate, "nothing is left beside the step"


def test_ageing_of_a_class_2_ceramic():
    """AGE-03 of the check values: 2.5 % a decade, 1 000 h to 10 years: 1.9425 decades, −4.86 %.

    Source of the law: makers' tutorials, after EIA-521 and IEC 60384-9: C = C_0·[1 − k·log10(t/t_0)].
    """
    hours = np.linspace(1000.0, 87600.0, 400)
    capacitance = 1 - 0.025 * np.log10(hours / 1000.0)
    assert capacitance[-1] - 1 == pytest.approx(-0.0486, abs=5e-5)
    time = 3600 * (hours - 1000.0)
    noisy = capacitance + 1e-4 * np.random.default_rng(0).normal(size=hours.size)
    _, _, found = analysed(noisy, time)
    assert found.law == "logarithmic"
    assert found.change == pytest.approx(-0.0486, abs=2e-4)
    assert found.shape.parameter / 3600 == pytest.approx(1000, rel=0.25), "its age at the start comes out"
    k = -found.amplitude * math.log(10)
    assert k == pytest.approx(0.025, rel=0.05)


def test_gaps_and_stray_records():
    """A gap of half the run and a handful of wild records change neither law nor size."""
    rng = np.random.default_rng(2)
    time = EVERY * np.concatenate([np.arange(200), 600 + np.arange(200)])
    y = 0.01 * time / EVERY + 0.2 * rng.normal(size=400)
    y[[5, 77, 230, 311]] += [50, -80, 40, 1e6]
    _, _, found = analysed(y, time)
    assert found.law == "linear"
    assert found.rate * EVERY == pytest.approx(0.01, abs=4 * found.u_rate * EVERY)
    blocks = block(time, y, edges(time))
    assert blocks.left_out == 4


def test_a_step_in_the_middle_of_a_block_of_many_records():
    """A hundred thousand records, a step that no block's edge meets: still a step, at its moment."""
    rng = np.random.default_rng(6)
    n = 100_000
    y = rng.normal(size=n) + 5.0 * (np.arange(n) > 54_321)
    _, _, found = analysed(y)
    assert found.law == "step"
    assert found.shape.parameter / EVERY == pytest.approx(54_321, abs=120)
    assert found.change == pytest.approx(5.0, abs=0.1)


def test_blocks_keep_what_they_are_made_of():
    """Counts add up, means are the records' own, nothing of a gap."""
    rng = np.random.default_rng(0)
    time = np.sort(rng.uniform(0, 1e5, 5000))
    time = time[(time < 3e4) | (time > 6e4)]
    y = rng.normal(size=time.size)
    y[::7] = np.nan
    found = block(time - time[0], y, edges(time - time[0]))
    assert found.count.sum() == np.isfinite(y).sum()
    assert float(found.count @ found.mean) == pytest.approx(np.nansum(y), abs=1e-6)
    assert np.all(np.diff(found.time) > 0)
    inside = (found.time + time[0] > 3.2e4) & (found.time + time[0] < 5.8e4)
    assert not inside.any()


# --- when it leaves its limits ------------------------------------------------------------------------


def test_the_time_to_the_limit():
    """Twenty linear runs: the true time lies in the 95 % interval in at least 17."""
    rng = np.random.default_rng(8)
    n, hits = 100, 0
    span = EVERY * (n - 1)
    for _ in range(20):
        base, mean, found = analysed(10 * np.linspace(0, 1, n) + 0.5 * rng.normal(size=n))
        gone = leaving(base, mean, found, -20.0, 20.0)
        assert gone.limit == 20.0
        assert gone.earliest < gone.at < gone.latest
        hits += gone.earliest <= 2 * span <= gone.latest
    assert hits >= 17


def test_what_is_not_extrapolated():
    """No drift, a step, a limit far off or passed, a wandering value: a reason is given, not a time."""
    rng = np.random.default_rng(9)
    u = np.linspace(0, 1, 100)
    noise = rng.normal(size=100)
    cases = {
        "does not drift": (noise, 20),
        "a step": (30 * (u > 0.5) + noise, 60),
        "further is not extrapolated": (30 * u + noise, 1e4),
        "outside of them now": (30 * u + noise, 20),
        "wanders": (30 * u + 0.1 * noise + 20 * np.cumsum(rng.normal(size=100)) / 10, 100),
    }
    for says, (y, limit) in cases.items():
        base, mean, found = analysed(y)
        gone = leaving(base, mean, found, -limit, limit)
        if says == "wanders":
            assert gone.at is None
        else:
            assert says in gone.why
            assert gone.at is None


def test_a_settling_value_may_never_get_there():
    """It heads for 10 and the limit is 12: never, and that is said."""
    rng = np.random.default_rng(3)
    u = np.linspace(0, 1, 200)
    base, mean, found = analysed(10 * (1 - np.exp(-u / 0.2)) + 0.1 * rng.normal(size=200))
    assert found.law == "settling"
    assert leaving(base, mean, found, -12.0, 12.0).at is None
