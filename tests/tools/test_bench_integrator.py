"""The bench's integrator against scipy's, and against what must be conserved."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from tools.bench import simulate
from tools.bench.simulate import Waves

TIGHT = {"rtol": 1e-11, "atol": 1e-13, "method": "DOP853"}


def _until(rate, start, level, rising, horizon):
    """Time and value at which a single state reaches a level, by scipy's own event location."""

    def event(_, y):
        return y[0] - level

    event.terminal, event.direction = True, 1.0 if rising else -1.0
    done = solve_ivp(lambda t, y: [rate(t, y[0])], (0.0, horizon), [start], events=event, **TIGHT)
    assert done.t_events[0].size == 1
    return float(done.t_events[0][0])


def _value(rate, start, duration):
    return float(solve_ivp(lambda t, y: [rate(t, y[0])], (0.0, duration), [start], **TIGHT).y[0, -1])


def test_gas_lamp_with_every_leak_agrees_with_scipy():
    """A loaded lamp circuit whose lit resistance depends on the current."""
    p = {
        "supply": 150.0,
        "R": 1.2e6,
        "C": 47e-9,
        "V_strike": 95.0,
        "V_extinguish": 60.0,
        "V_maintain": 54.0,
        "r_lamp": 6e3,
    }
    waves = simulate(
        "gas-lamp",
        {**p, "R_leak": 9e6, "I_leak": 2e-6, "C_stray": 40e-12, "delay": 2e-4},
        probe={"capacitor": (10e6, 12e-12)},
        current_bend=0.2,
    )
    c = p["C"] + 52e-12

    def feed(v):
        return (p["supply"] - v) / p["R"] - v / 9e6 - v / 10e6 - 2e-6

    middle = np.sqrt((95.0 - 54.0) * (60.0 - 54.0))

    def lit(_, v):
        return (feed(v) - (v - 54.0) / (6e3 * ((v - 54.0) / middle) ** -0.2)) / c

    t = _until(lambda _, v: feed(v) / c, 60.0, 95.0, True, 10.0)
    top = _value(lambda _, v: feed(v) / c, 95.0, 2e-4)
    t += 2e-4 + _until(lit, top, 60.0, False, 1.0)
    assert waves.period == pytest.approx(t, rel=1e-8)


def test_op_amp_that_slews_agrees_with_scipy():
    """Two states at once: the output on its ramp, the capacitor behind it."""
    r, c, slew, high, low = 10e3, 10e-9, 0.5e6, 12.0, -11.0
    waves = simulate(
        "op-amp",
        {
            "R": r,
            "C": c,
            "R_top": 20e3,
            "R_bottom": 10e3,
            "V_high": high,
            "V_low": low,
            "slew": slew,
            "delay": 2e-6,
        },
    )
    v, total = low / 3, 0.0
    for _ in range(8):
        total = 0.0
        for level, other, rising in ((high, low, True), (low, high, False)):
            t = _until(lambda _, u, a=level: (a - u) / (r * c), v, level / 3, rising, 1.0)
            v = _value(lambda _, u, a=level: (a - u) / (r * c), level / 3, 2e-6)
            ramp = (high - low) / slew
            sign = -1.0 if rising else 1.0
            v = _value(lambda s, u, a=level, g=sign: (a + g * slew * s - u) / (r * c), v, ramp)
            total += t + 2e-6 + ramp
            level = other
    assert waves.period == pytest.approx(total, rel=1e-8)


def test_gate_pair_behind_its_clamp_agrees_with_scipy():
    supply, r, c, series = 9.0, 100e3, 4.7e-9, 680e3
    waves = simulate(
        "gate-pair",
        {
            "supply": supply,
            "R": r,
            "C": c,
            "R_series": series,
            "V_threshold": 4.1,
            "R_gate": 0.0,
            "C_stray": 30e-12,
            "R_leak": 5e6,
        },
    )
    whole = c + 30e-12
    kick = supply * c / whole

    def rate(source, v):
        clamp = max(v - supply - 0.6, 0.0) - max(-0.6 - v, 0.0)
        return ((source - v) / r - v / 5e6 - clamp / series) / whole

    fall = _until(lambda _, v: rate(0.0, v), 4.1 + kick, 4.1, False, 1.0)
    rise = _until(lambda _, v: rate(supply, v), 4.1 - kick, 4.1, True, 1.0)
    assert waves.period == pytest.approx(fall + rise, rel=1e-8)
    assert waves.high_share == pytest.approx(fall / (fall + rise), rel=1e-8)


def test_two_transistors_with_slow_collectors_agree_with_scipy():
    p = {"supply": 5.0, "R1": 47e3, "C1": 100e-9, "R2": 33e3, "C2": 47e-9, "RC1": 4.7e3, "RC2": 3.3e3}
    waves = simulate("two-transistor", p)
    on, hard, low = 0.56, 0.68, 0.1
    s1 = s2 = p["supply"]
    for _ in range(30):
        lengths = []
        for resistor, capacitor, load, other in (("R1", "C1", "RC1", "C2"), ("R2", "C2", "RC2", "C1")):
            kick = (s2 if resistor == "R1" else s1) - low
            tau = p[resistor] * p[capacitor]
            t = _until(lambda _, v, tau=tau: (p["supply"] - v) / tau, hard - kick, on, True, 1.0)
            recover = p[load] * p[other]
            s = _value(lambda _, v, k=recover: (p["supply"] - v) / k, low + hard - on, t)
            if resistor == "R1":
                s1 = s
            else:
                s2 = s
            lengths.append(t)
    assert waves.period == pytest.approx(sum(lengths), rel=1e-8)
    assert waves.high_share == pytest.approx(lengths[0] / sum(lengths), rel=1e-8)


def test_samples_lie_on_the_solution():
    """Samples between the integrator's steps are as good as the steps."""
    p = {"R": 10e3, "C": 10e-9, "V_upper": 3.6, "V_lower": 1.4, "V_high": 5.0}
    waves = simulate("schmitt-inverter", p)
    times = np.linspace(0.0, waves.starts[0] + 0.49 * waves.period, 300)
    dense = solve_ivp(lambda _, y: (5.0 - y) / 1e-4, (0.0, times[-1]), [1.4], t_eval=times, **TIGHT)
    assert np.max(np.abs(waves.at(times)["capacitor"] - dense.y[0])) < 1e-8


def _charge_through(waves: Waves, resistor: float) -> float:
    """Mean current through the timing resistor, from samples (A)."""
    times = (np.arange(200_000) + 0.5) * waves.period / 200_000
    seen = waves.at(times)
    return float(np.mean((seen["output"] - seen["capacitor"]) / resistor))


@pytest.mark.parametrize("leak", [None, 400e3])
def test_no_charge_piles_up_over_a_cycle(leak):
    """Conservation: over a settled cycle, what R brings to the node is what the leak takes away."""
    p = {
        "R": 47e3,
        "C": 22e-9,
        "R_top": 10e3,
        "R_bottom": 12e3,
        "V_high": 9.0,
        "V_low": -6.0,
        "slew": 2e5,
        "delay": 3e-6,
    }
    waves = simulate("op-amp", p if leak is None else {**p, "R_leak": leak})
    times = (np.arange(200_000) + 0.5) * waves.period / 200_000
    lost = 0.0 if leak is None else float(np.mean(waves.at(times)["capacitor"])) / leak
    scale = 9.0 / p["R"]
    assert _charge_through(waves, p["R"]) - lost == pytest.approx(0.0, abs=1e-6 * scale)


def test_a_lamp_is_late_never_early():
    """The statistical lag is exponential (Laue's law): periods scatter upwards, with a skewness near 2."""
    p = {"supply": 125.0, "R": 1e6, "C": 100e-9, "V_strike": 90.0, "V_extinguish": 60.0}
    waves = simulate("gas-lamp", p, cycles=4000, lag=2e-3, seed=5)
    quiet = simulate("gas-lamp", p).period
    late = waves.periods - quiet
    assert late.min() > -0.1e-3
    skew = np.mean((late - late.mean()) ** 3) / late.std() ** 3
    assert skew == pytest.approx(2.0, abs=0.4)


def test_cycles_follow_from_one_another():
    """Cycles integrated side by side join up: the waveform has no step where one ends and the next begins."""
    p = {"R": 47e3, "C": 22e-9, "R_top": 10e3, "R_bottom": 12e3, "V_high": 9.0, "V_low": -6.0}
    waves = simulate("op-amp", p, cycles=20, threshold_noise=0.05, seed=3)
    joints = waves.starts[1:-1]
    before, after = waves.at(joints - 1e-12)["capacitor"], waves.at(joints + 1e-12)["capacitor"]
    assert np.max(np.abs(before - after)) < 1e-5
    assert waves.periods.std() > 1e-4 * waves.period


def test_the_same_seed_gives_the_same_waves():
    p = {"supply": 125.0, "R": 1e6, "C": 100e-9, "V_strike": 90.0, "V_extinguish": 60.0}
    one, two, three = (simulate("gas-lamp", p, cycles=5, lag=1e-3, seed=s) for s in (1, 1, 2))
    assert np.array_equal(one.periods, two.periods)
    assert not np.array_equal(one.periods, three.periods)
