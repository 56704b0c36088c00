"""Outputs that slew, collectors that recover, legs with resistance beside a stray: integrated, compared."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from benchfit import circuits
from benchfit.circuits.solve import after, constants, settle
from tests.circuits.builds import VALUES, leg_of, loads, parts_of, plus_input
from tests.circuits.kirchhoff import TIGHT, Half, Leg, run, through
from tests.circuits.test_phases import halves_of, integrated


def slewing_op_amp(p):
    """The output starts on its ramp when the delay is over, and drives the node meanwhile."""
    high, low, slew = p["V_high"], p["V_low"], p["slew"]
    arms, current = loads(p, high)
    rest = through(*arms, current=current)

    def up(v, t):
        return (min(low + slew * t, high) - v) / p["R"] + rest(v, t)

    def down(v, t):
        return (max(high - slew * t, low) - v) / p["R"] + rest(v, t)

    trips = plus_input(p, high), plus_input(p, low)
    return leg_of(p), [Half(up, trips[0], True, p["delay"]), Half(down, trips[1], False, p["delay"])]


SLEWS = [0.003, 0.03, 0.1, 0.25]


@pytest.mark.parametrize("share", SLEWS)
@pytest.mark.parametrize("loaded", [{}, {"R_leak": 2e5, "I_leak": 4e-6, "C_stray": 2e-9}])
def test_a_slewing_output_is_a_dead_time_exactly(share, loaded):
    """Period, share and everything after the ramp: a step at t_e = ln[(e^κT − 1)/(κT)]/κ does the same."""
    p = {**VALUES["op-amp"], "delay": 4e-6, **loaded}
    ramp = share * p["R"] * p["C"]
    p["slew"] = (p["V_high"] - p["V_low"]) / ramp
    leg, halves = slewing_op_amp(p)
    truth = run(leg, halves, halves[1].level, cycles=12)
    cycle = circuits.get("op-amp").cycle(parts_of("op-amp", p))
    settled = settle(cycle)
    # From the start of one ramp to that of the next is also from its middle to the next one's.
    assert settled.durations.sum() == pytest.approx(truth.period, rel=1e-7)
    assert settled.durations[0] / settled.period == pytest.approx(truth.durations[0] / truth.period, rel=1e-7)
    dead = float(cycle.phases[0].delay) - p["delay"]
    done = solve_ivp(
        lambda t, y: [halves[1].inflow(y[0], t) / (leg.c + leg.aside)], (0, ramp), truth.starts[1:], **TIGHT
    )
    folded = after(cycle.phases[1], settled.starts[1], ramp - dead)
    assert float(folded) == pytest.approx(done.y[0, -1], abs=1e-8)
    # The corner is where the two phases' continuations meet; the waveform itself turns short of it.
    top = done.y[0].max()
    assert cycle.phases[0].threshold < top < settled.ends[0]


@pytest.mark.parametrize("share", SLEWS)
def test_a_triangle_that_slews_is_late_by_half_its_ramp(share):
    p = {**VALUES["triangle"], "delay": 7e-6}
    high, low, reference = p["V_high"], p["V_low"], p["V_reference"]
    ramp = share * p["R"] * p["C"]
    p["slew"] = (high - low) / ramp

    def trip(out):
        # Kirchhoff at the comparator's input, which is at the reference when it trips.
        return reference + (reference - out) * p["R_in"] / p["R_feedback"]

    def up(v, t):
        return (reference - max(high - p["slew"] * t, low)) / p["R"]

    def down(v, t):
        return (reference - min(low + p["slew"] * t, high)) / p["R"]

    halves = [Half(up, trip(low), True, p["delay"]), Half(down, trip(high), False, p["delay"])]
    truth = run(Leg(p["C"]), halves, trip(high))
    durations, _, _ = halves_of("triangle", p)
    assert durations == pytest.approx(truth.durations, rel=1e-7)


@pytest.mark.parametrize("more", [{}, {"delay": 2e-5}, {"V_reference": -1.0}])
def test_a_triangle_at_once_is_that_of_its_node_equations(more):
    p = {**VALUES["triangle"], "delay": 0.0, **more}
    high, low, reference = p["V_high"], p["V_low"], p["V_reference"]
    trips = [reference + (reference - out) * p["R_in"] / p["R_feedback"] for out in (low, high)]
    halves = [
        Half(lambda v, t: (reference - low) / p["R"], trips[0], True, p["delay"]),
        Half(lambda v, t: (reference - high) / p["R"], trips[1], False, p["delay"]),
    ]
    truth = run(Leg(p["C"]), halves, trips[1])
    durations, starts, ends = halves_of("triangle", p)
    assert durations == pytest.approx(truth.durations, rel=1e-9)
    assert starts == pytest.approx(truth.starts, abs=1e-9)
    assert ends == pytest.approx(truth.ends, abs=1e-9)


def crossed(p, turns=40):
    """Two transistors: charge on both capacitors, base 1 off then base 2 off, until a cycle repeats.

    Returns the two half-cycles (s), where each base starts and ends (V), and what each collector rises to.
    """
    hard, low, esr = p["V_BE"], p["V_CE"], p.get("ESR", 0.0)
    arms, current = loads(p, p["supply"])
    q = {1: hard - p["supply"], 2: hard - low - (p["supply"] - low)}  # plates: base minus the other collector
    found: dict = {}
    for _ in range(turns):
        before = dict(found)
        for off, on in ((1, 2), (2, 1)):
            mine, other = p[f"C{off}"], p[f"C{on}"]
            aside = p.get("C_stray", 0.0) + p.get(f"C_probe:base{off}", 0.0)
            feed = [(p[f"R{off}"], p["supply"]), *arms]
            if p.get(f"G_probe:base{off}"):
                feed.append((1 / p[f"G_probe:base{off}"], 0.0))
            g = sum(1 / r for r, _ in feed)
            short = sum(v / r for r, v in feed) + current
            # The other collector falls to V_CE; what sits beside the leg shares the charge of the step.
            step = (hard - q[off]) - low
            w = hard - step * mine / (mine + aside)
            w = max(w, -p["V_breakdown"])
            z = esr * mine / (mine + aside)

            def base(w, z=z, g=g, short=short):
                return (w + z * short) / (1 + z * g)

            def rates(t, y, on=on, off=off, mine=mine, aside=aside, other=other, g=g, short=short, base=base):
                into = (short - g * base(y[0])) / (mine + aside)
                collector = (
                    hard - y[1]
                )  # plates of the other capacitor: base `on` (held) minus collector `off`
                return [into, -(p["supply"] - collector) / ((p[f"RC{off}"] + esr) * other)]

            def trip(t, y, base=base):
                return base(y[0]) - p["V_on"]

            trip.terminal, trip.direction = True, 1.0
            y0 = [w, q[on]]
            done = solve_ivp(rates, (0, 50.0), y0, events=trip, first_step=1e-9, **TIGHT)
            time, y = float(done.t_events[0][0]), done.y_events[0][0]
            if p.get("delay"):
                late = solve_ivp(rates, (0, p["delay"]), y, **TIGHT)
                time, y = time + p["delay"], late.y[:, -1]
            found[off] = (time, base(w), base(y[0]), hard - y[1])
            # The base is pulled up to V_BE as its transistor turns on; its plates keep their charge.
            q[off] = min(y[0], hard) - low
            q[on] = y[1]
        if before and all(abs(found[k][0] - before[k][0]) < 1e-10 * found[k][0] for k in found):
            break
    return found


CROSSED = {
    "as it is": {},
    "slow collectors": {"RC1": 8.2e3, "RC2": 7.5e3},
    "very slow collectors": {"RC1": 15e3, "RC2": 9.1e3},
    "leaks": {"R_leak": 4e5, "R_leak_supply": 9e5, "I_leak": 3e-6},
    "stray and probe": {"C_stray": 3e-9, "G_probe:base1": 1e-6, "C_probe:base1": 2e-9},
    "late": {"delay": 6e-5},
    "series resistance": {"ESR": 900.0},
    "breakdown": {"supply": 12.0},
    "all": {"RC1": 8.2e3, "R_leak": 4e5, "C_stray": 3e-9, "delay": 3e-5, "I_leak": 2e-6},
}


@pytest.mark.parametrize("case", CROSSED)
def test_two_transistors_are_those_of_their_node_equations(case):
    p = {**VALUES["two-transistor"], **CROSSED[case]}
    truth = crossed(p)
    settled = settle(circuits.get("two-transistor").cycle(parts_of("two-transistor", p)))
    for i, off in enumerate((1, 2)):
        time, start, end, _ = truth[off]
        assert float(settled.durations[i]) == pytest.approx(time, rel=1e-6)
        assert float(settled.starts[i]) == pytest.approx(start, abs=1e-6 * p["supply"])
        assert float(settled.ends[i]) == pytest.approx(end, abs=1e-6 * p["supply"])


@pytest.mark.parametrize("case", ["as it is", "slow collectors", "series resistance", "late"])
def test_the_output_is_high_from_the_middle_of_its_slow_rise(case):
    """Duty by 50 % crossings (IEEE 181): the collector crosses its middle late, and falls at once."""
    p = {**VALUES["two-transistor"], **CROSSED[case]}
    truth = crossed(p)
    (time_1, _, _, top), (time_2, _, end, _) = truth[1], truth[2]
    esr = p.get("ESR", 0.0)
    g, short = 1 / p["R2"], p["supply"] / p["R2"]
    plates = end * (1 + esr * g) - esr * short
    y0 = p["V_CE"] + max(p["V_BE"] - plates, 0.0)

    def collector(y):
        return y + esr * (p["supply"] - y) / (p["RC1"] + esr)

    def middle(t, y):
        return collector(y[0]) - 0.5 * (p["V_CE"] + top)

    middle.terminal = True
    tau = (p["RC1"] + esr) * p["C2"]
    done = solve_ivp(lambda t, y: [(p["supply"] - y[0]) / tau], (0, 1), [y0], events=middle, **TIGHT)
    late = float(done.t_events[0][0])
    found = constants(circuits.get("two-transistor").cycle(parts_of("two-transistor", p)), "")
    assert float(found["high_share"]) == pytest.approx((time_1 - late) / (time_1 + time_2), rel=1e-6)


def test_the_output_s_high_level_is_what_the_collector_reached():
    p = {**VALUES["two-transistor"], "RC1": 33e3}
    levels = circuits.get("two-transistor").cycle(parts_of("two-transistor", p)).levels
    assert float(levels["high"]) == pytest.approx(crossed(p)[1][3], rel=1e-6)
    assert float(levels["high"]) < 0.99 * p["supply"]


@pytest.mark.parametrize("kick", ["breakdown of one base", "neither"])
def test_breakdown_is_said_where_one_base_breaks_down(kick):
    p = {**VALUES["two-transistor"], "supply": 9.0 if kick == "breakdown of one base" else 5.0}
    if kick == "breakdown of one base":
        p["RC2"] = 56e3  # collector 2 recovers so little that base 1 is spared
    cycle = circuits.get("two-transistor").cycle(parts_of("two-transistor", p))
    masks = {code: bool(np.all(mask)) for code, mask, _ in cycle.remarks}
    assert masks["breakdown"] is (kick == "breakdown of one base")


@pytest.mark.parametrize("circuit", ["op-amp", "schmitt-inverter", "gas-lamp"])
@pytest.mark.parametrize("aside", [0.01, 0.1])
def test_a_resistive_leg_beside_a_stray_is_right_to_their_product(circuit, aside):
    """Two time constants in truth; taken for one, an error of the order of (ESR/R)·(C_stray/C)."""
    values = VALUES[circuit]
    esr = 0.02 * values["R"] if circuit != "gas-lamp" else 1e3
    p = {**values, "ESR": esr, "C_stray": aside * values["C"]}
    truth = integrated(circuit, p)
    durations, _, _ = halves_of(circuit, p)
    fast = max(esr / values["R"], esr / values.get("r_lamp", np.inf) * 0.02) * aside
    assert durations.sum() == pytest.approx(truth.period, rel=5 * fast)


def test_a_device_that_goes_out_as_it_fires_makes_no_cycle():
    """With far more series resistance than the lamp's own the node drops at once to where it goes out."""
    p = {**VALUES["gas-lamp"], "ESR": 2e6}
    assert np.isnan(settle(circuits.get("gas-lamp").cycle(parts_of("gas-lamp", p))).period)


def test_a_delay_where_the_capacitance_bends_is_right_to_second_order():
    p = {**VALUES["op-amp"], "C_slope": 0.04, "delay": 0.05 * VALUES["op-amp"]["R"] * VALUES["op-amp"]["C"]}
    truth = integrated("op-amp", p)
    durations, _, ends = halves_of("op-amp", p)
    assert durations == pytest.approx(truth.durations, rel=3e-5)
    assert ends == pytest.approx(truth.ends, abs=1e-4)


def test_steering_diodes_and_a_slow_output_are_right_to_a_part_of_the_ramp():
    """While the output crosses the diodes' drops nothing drives the node: there is no exact fold."""
    p = {**VALUES["op-amp"], "R_charge": 15e3, "R_discharge": 39e3, "V_diode": 0.6, "delay": 0.0}
    del p["R"]
    high, low, drop = p["V_high"], p["V_low"], p["V_diode"]
    ramp = 0.05 * p["R_charge"] * p["C"]
    p["slew"] = (high - low) / ramp

    def current(out, v):
        if out - drop > v:
            return (out - drop - v) / p["R_charge"]
        return (out + drop - v) / p["R_discharge"] if out + drop < v else 0.0

    halves = [
        Half(lambda v, t: current(min(low + p["slew"] * t, high), v), plus_input(p, high), True),
        Half(lambda v, t: current(max(high - p["slew"] * t, low), v), plus_input(p, low), False),
    ]
    truth = run(Leg(p["C"]), halves, halves[1].level, cycles=10)
    durations, _, _ = halves_of("op-amp", p)
    assert abs(durations.sum() - truth.period) < 0.25 * ramp
    assert abs(durations.sum() - truth.period) > 1e-6 * truth.period


def test_the_helper_finds_a_clamped_kick():
    """The bench of these tests itself: a clamp on the node holds the jump, and the charge with it."""
    p = {k: v for k, v in VALUES["gate-pair"].items() if k != "R_series"}
    truth = integrated("gate-pair", p)
    assert truth.starts == pytest.approx([9.6, -0.6], abs=1e-9)
    tau = (p["R"] + p["R_gate"]) * p["C"]
    assert truth.durations[0] == pytest.approx(tau * np.log(9.6 / 4.2), rel=1e-9)
