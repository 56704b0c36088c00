"""Shares of a miss: they add up, whatever the build; and where the answer is known they are it.

The cycle constants are computed from the circuit's own closed form here: this is the model's consistency with
itself, not a proof that it is right (for that, see the captures from the bench).
"""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from benchfit.circuits.solve import constants as closed_form
from benchfit.cycle.constants import CycleConstants
from benchfit.explain.assemble import assemble
from benchfit.explain.budget import path_shares
from benchfit.explain.explain import explain
from benchfit.explain.model import Model
from benchfit.sheet.model import Sheet
from tests.explain.scenes import DESIGNS, TIMES_TEN_PROBE, found


def synthetic(model: Model, state: np.ndarray) -> CycleConstants:
    """What an ideal capture of the timing node would give of a state; noise of a good 8-bit record."""
    cycle = model.circuit.cycle(model.parts_of(model.views[0], model.values(state)))
    node = next(n for n in model.circuit.nodes if n.shape != "square").name
    seen = {k: float(np.ravel(v)[0]) for k, v in closed_form(cycle, node).items()}
    seen["upper"], seen["lower"] = seen.pop("charge_end"), seen.pop("discharge_end", seen["charge_start"])
    wanted = (
        "period",
        "charge_share",
        "high_share",
        "upper",
        "lower",
        "charge_curvature",
        "discharge_curvature",
    )
    values = {n: seen[n] for n in wanted if n in seen}
    swing = abs(values["upper"] - values["lower"])
    u = {"period": 1e-5 * values["period"], "upper": 1e-3 * swing, "lower": 1e-3 * swing}
    u |= {n: 0.01 * abs(values[n]) + 1e-6 / values["period"] for n in values if n.endswith("curvature")}
    spread = np.array([u.get(n, 1e-4) for n in values])
    return CycleConstants(
        oscillates=True, names=tuple(values), values=np.array(list(values.values())),
        covariance=np.diag(spread**2), cycles=6.0, spans={node: (values["lower"], values["upper"])},
        noise={node: 1e-2 * swing}, resolutions={node: 4e-3 * swing}, samples=4000, interval=1e-6,
    )  # fmt: skip


@cache
def modelled(design: str, probed: bool) -> tuple[Sheet, Model]:
    sheet = Sheet.parse(DESIGNS[design].text + (TIMES_TEN_PROBE if probed else ""))
    bare = Sheet.parse(DESIGNS[design].text)
    empty = assemble(bare, [_nothing(design)])
    return sheet, assemble(sheet, [synthetic(empty, empty.nominal)])


def _nothing(design: str) -> CycleConstants:
    from benchfit import circuits

    node = next(n for n in circuits.get(DESIGNS[design].circuit).nodes if n.shape != "square").name
    return CycleConstants(
        oscillates=False, names=(), values=np.empty(0), covariance=np.empty((0, 0)), spans={node: (0.0, 1.0)}
    )


NAMES = sorted(n for n in DESIGNS if n != "two-transistor")


@st.composite
def builds(draw):
    """A design, and a state off from it: within tolerance, one or two parts anyhow or by a decade."""
    design, probed = draw(st.sampled_from(NAMES)), draw(st.booleans())
    sheet, model = modelled(design, probed)
    z = draw(st.lists(st.floats(-1.5, 1.5), min_size=len(model.parameters), max_size=len(model.parameters)))
    state = model.center + model.spread * np.array(z)
    timing = [
        i
        for i, p in enumerate(model.parameters)
        if p.part is not None and p.part.kind in ("resistor", "capacitor", "current") and p.follows is None
    ]
    for i in draw(st.lists(st.sampled_from(timing), max_size=2, unique=True)):
        state[i] += draw(st.sampled_from([math.log(10), -math.log(10), 0.4, -0.4, math.log(2.2)]))
    if "R_leak" in model.index and draw(st.booleans()):
        state[model.index["R_leak"]] = draw(st.floats(1e-9, 1e-6))
    return sheet, model, state


def test_a_decade_of_two_parts_each_has_the_share_of_its_logarithm():
    """f goes as 1/(R·C): along a straight line in the logarithms each share goes as its logarithm."""
    _, model = modelled("op-amp", False)
    state = model.nominal.copy()
    state[model.index["R"]] += math.log(1.2)
    state[model.index["C"]] += math.log(0.1)
    shares, first, last = path_shares(model, model.views[0], "frequency", state)
    assert last / first == pytest.approx(1 / 0.12, rel=1e-12)
    whole = math.log(0.12)
    assert shares[model.index["R"]] == pytest.approx((last - first) * math.log(1.2) / whole, rel=1e-6)
    assert shares[model.index["C"]] == pytest.approx((last - first) * math.log(0.1) / whole, rel=1e-6)


def test_a_probe_and_a_leak_share_as_their_conductances_along_the_way():
    """Against scipy's quadrature of the lamp's own closed form along the same path."""
    _, model = modelled("gas-lamp", True)
    state = model.nominal.copy()
    state[model.index["R_leak"]] = 1 / 20e6
    shares, first, last = path_shares(model, model.views[0], "frequency", state)
    p = {k: float(v) for k, v in model.values(model.nominal).items()}

    def frequency(leak: float, probe: float) -> float:
        g = 1 / p["R"] + leak / 20e6 + probe * 1e-7
        c = p["C"] + probe * 12e-12
        a = p["supply"] / p["R"] / g
        up = c / g * math.log((a - p["V_extinguish"]) / (a - p["V_strike"]))
        lit = g + 1 / p["r_lamp"]
        b = (p["supply"] / p["R"] + p["V_maintain"] / p["r_lamp"]) / lit
        return 1 / (up + c / lit * math.log((p["V_strike"] - b) / (p["V_extinguish"] - b)))

    def slope(s: float, which: int) -> float:
        h = 1e-5
        up, down = [s, s], [s, s]
        up[which] += h
        down[which] -= h
        return (frequency(*up) - frequency(*down)) / (2 * h)

    assert first == pytest.approx(frequency(0, 0), rel=1e-12)
    assert last == pytest.approx(frequency(1, 1), rel=1e-12)
    assert shares[model.index["R_leak"]] == pytest.approx(quad(slope, 0, 1, args=(0,))[0], rel=1e-5)
    assert shares[-1] == pytest.approx(quad(slope, 0, 1, args=(1,))[0], rel=1e-5)


@settings(suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much])
@given(builds(), st.sampled_from(["frequency", "duty"]))
def test_shares_add_up_whatever_the_build(build, which):
    """Model consistency: what the parts and the probe are given is the whole change, decades included."""
    _, model, state = build
    shares, first, last = path_shares(model, model.views[0], which, state)
    assume(np.all(np.isfinite(shares)) and np.isfinite(last - first))
    assert float(shares.sum()) == pytest.approx(last - first, rel=1e-9, abs=1e-9 * abs(first))


@settings(suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much])
@given(builds())
def test_what_did_not_move_has_no_share(build):
    _, model, state = build
    shares, _, _ = path_shares(model, model.views[0], "frequency", state)
    assume(np.all(np.isfinite(shares)))
    still = np.flatnonzero(state == model.nominal)
    assert np.all(shares[:-1][still] == 0)
    if not model.views[0].loads:
        assert shares[-1] == 0


def check(explanation):
    """What holds of every explanation: budgets that add up, probabilities that sum to 1."""
    if explanation.suspects:
        assert sum(s.probability for s in explanation.suspects) == pytest.approx(1.0, abs=1e-9)
        ranked = [s.probability for s in explanation.suspects]
        assert ranked == sorted(ranked, reverse=True)
        if explanation.settled:
            assert ranked[0] >= 0.9
    for miss in (explanation.miss or {}).values():
        if miss.miss is None or miss.unexplained is None:
            continue
        total = miss.on_paper + sum(s.share for s in miss.shares) + miss.unexplained
        assert total == pytest.approx(miss.miss, abs=1e-9)
        assert miss.miss == pytest.approx(miss.built / miss.target - 1, rel=1e-12)


@settings(max_examples=5, suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much])
@given(builds())
def test_the_whole_explanation_adds_up(build):
    """Model consistency through everything: shares make up the miss to 1e-9, probabilities sum to 1."""
    sheet, model, state = build
    with np.errstate(all="ignore"):
        seen = synthetic(model, state)
    assume(np.all(np.isfinite(seen.values)))
    check(explain([seen], sheet))


@pytest.mark.parametrize(
    "name",
    [
        "healthy op-amp",
        "the timer's decade",
        "the lamp behind a probe",
        "a capacitor",
        "another maker's gate",
    ],
)
def test_a_capture_s_explanation_adds_up(name):
    check(found(name).explanation)


def test_what_the_design_itself_misses_by_is_on_paper():
    """A build as its sheet says with a target it cannot meet: the miss is arithmetic of the design."""
    sheet = Sheet.parse(DESIGNS["op-amp"].text.replace('"455 Hz 3%"', '"500 Hz 3%"'))
    model = assemble(sheet, [_nothing("op-amp")])
    seen = explain([synthetic(model, model.nominal)], sheet)
    assert seen.miss is not None
    miss = seen.miss["frequency"]
    assert miss.on_paper == pytest.approx(455.1 / 500 - 1, abs=1e-4)
    assert miss.miss == pytest.approx(miss.on_paper, abs=1e-4)
    assert sum(abs(s.share) for s in miss.shares) < 0.01


def test_a_share_carries_the_uncertainty_of_what_is_not_settled():
    """R and C share a blame of 23 %: each share's u is about as large as the doubt between them."""
    miss = found("a capacitor").explanation.miss
    assert miss is not None
    u = {s.cause: s.u for s in miss["frequency"].shares}
    settled = found("a capacitor, R read").explanation.miss
    assert settled is not None
    known = {s.cause: s.u for s in settled["frequency"].shares}
    assert u["C"] is not None
    assert known["C"] is not None
    assert u["C"] > 0.08
    assert known["C"] < 0.015


def test_a_single_fault_s_share_is_what_the_nominal_part_would_mend():
    """The nominal part back on the bench moves the frequency by the share, to 10 % or 0.005 of the target."""
    from tools.bench import simulate

    for name, cause in (
        ("the timer's C", "C"),
        ("the timer's leak", "R_leak"),
        ("the lamp's strike", "V_strike"),
    ):
        seen = found(name).explanation
        assert seen.miss is not None
        miss = seen.miss["frequency"]
        design = DESIGNS["gas-lamp" if "lamp" in name else "timer-555"]
        off = {"C": 130e-9, "R_leak": 200e3, "V_strike": 105.0}[cause]
        f_off = 1 / simulate(design.circuit, {**design.parts, cause: off}).period
        f_mended = 1 / simulate(design.circuit, design.parts).period
        truth = (f_off - f_mended) / miss.target
        share = next(s.share for s in miss.shares if s.cause == cause)
        assert abs(share - truth) < max(0.1 * abs(truth), 0.005)


def test_replaced_constants_are_not_shared():
    """Frozen results: an explanation is not changed by what is done to the constants afterwards."""
    sheet, model = modelled("op-amp", False)
    seen = synthetic(model, model.nominal)
    one = explain([seen], sheet)
    other = explain(
        [replace(seen, values=seen.values * np.where(np.array(seen.names) == "period", 1.3, 1.0))], sheet
    )
    assert one.suspects[0].causes == ()
    assert other.suspects[0].causes != ()
