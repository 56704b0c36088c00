"""What must not change, or must change in proportion, whatever the values: dimensions, order, batches."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit import circuits
from benchfit.circuits.solve import constants, curve, settle
from tests.circuits.builds import VALUES, parts_of, scale_of

TIMED = ("period", "rise_time", "fall_time")
RATES = ("charge_curvature", "discharge_curvature")
SHARES = ("charge_share", "discharge_share", "high_share")


def unit_of(circuit: str, name: str) -> str:
    if ":" in name:
        return "S" if name.startswith("G_") else "F"
    return circuits.get(circuit).part(name).unit


def scaled(circuit, p, factors):
    """Every value times the factor of its unit."""
    return {name: value * factors.get(unit_of(circuit, name), 1.0) for name, value in p.items()}


def seen(circuit, values):
    made = circuits.get(circuit)
    node = next(n.name for n in made.nodes if n.shape != "square")
    return constants(made.cycle(parts_of(circuit, values)), node)


@st.composite
def builds(draw):
    """A build of any circuit, parts off by up to 15 % and some parasitics there."""
    circuit = draw(st.sampled_from(sorted(VALUES)))
    off = st.floats(0.87, 1.15)
    p = {name: value * draw(off) for name, value in VALUES[circuit].items()}
    ohms, farads, volts, seconds = scale_of(circuit)
    offered = {
        "R_leak": 12 * ohms, "I_leak": 0.01 * volts / ohms, "C_stray": 0.05 * farads,
        "delay": 0.01 * seconds, "C_slope": 0.1 / volts, "slew": 300 * volts / seconds, "ESR": 0.002 * ohms,
    }  # fmt: skip
    names = {part.name for part in circuits.get(circuit).parts}
    for name, value in offered.items():
        if name in names and draw(st.booleans()):
            p[name] = value * draw(off)
    node = next(n for n in circuits.get(circuit).nodes if n.shape != "square")
    if node.loads and draw(st.booleans()):
        p |= {f"G_probe:{node.name}": 1 / (20 * ohms), f"C_probe:{node.name}": 0.02 * farads}
    return circuit, p


def agree(a, b, how):
    assert a.keys() == b.keys()
    for name in a:
        assert float(b[name]) == pytest.approx(
            float(a[name]) * how(name), rel=1e-6, abs=1e-7 * how(name), nan_ok=True
        ), name


@given(builds(), st.floats(0.01, 100))
def test_impedance_changes_nothing(build, k):
    """All resistances times k, all capacitances and currents divided by it: the same waveform."""
    circuit, p = build
    other = scaled(circuit, p, {"Ω": k, "F": 1 / k, "A": 1 / k, "S": 1 / k})
    agree(seen(circuit, p), seen(circuit, other), lambda name: 1.0)


@given(builds(), st.floats(0.01, 100))
def test_time_goes_with_capacitance_and_nothing_else_does(build, k):
    circuit, p = build
    other = scaled(circuit, p, {"F": k, "s": k, "V/s": 1 / k})

    def how(name):
        return k if name in TIMED else 1 / k if name in RATES else 1.0

    agree(seen(circuit, p), seen(circuit, other), how)


@given(builds(), st.floats(0.1, 10))
def test_levels_go_with_the_voltages_and_times_do_not(build, k):
    circuit, p = build
    other = scaled(circuit, p, {"V": k, "A": k, "V/s": k, "1/V": 1 / k})

    def how(name):
        return 1.0 if name in (*TIMED, *RATES, *SHARES) else k

    agree(seen(circuit, p), seen(circuit, other), how)


@given(builds())
def test_times_add_up_and_shares_lie_between_0_and_1(build):
    circuit, p = build
    settled = settle(circuits.get(circuit).cycle(parts_of(circuit, p)))
    if np.isnan(settled.period):
        return
    assert np.all(settled.durations >= 0)
    assert float(settled.period) == pytest.approx(float(settled.durations.sum()))
    found = seen(circuit, p)
    for name in SHARES:
        assert name not in found or 0 < float(found[name]) <= 1
    if circuit != "two-transistor":
        assert sum(float(found[name]) for name in SHARES[:2]) == pytest.approx(1.0)


@given(st.lists(st.floats(0.8, 1.25), min_size=2, max_size=5), st.sampled_from(sorted(VALUES)))
def test_a_batch_is_its_rows(factors, circuit):
    """Many sets of parts at once give what each gives by itself, in whatever shape they come."""
    first = next(iter(VALUES[circuit]))
    made = circuits.get(circuit)
    node = next(n.name for n in made.nodes if n.shape != "square")
    p = parts_of(circuit, VALUES[circuit])
    rows = np.array(factors)[:, None] * np.ones((1, 2))
    together = constants(made.cycle({**p, first: p[first] * rows}), node)
    for i, factor in enumerate(factors):
        alone = constants(made.cycle({**p, first: p[first] * factor}), node)
        for name, value in alone.items():
            there = np.broadcast_to(together[name], rows.shape)[i]
            assert there == pytest.approx(np.full(2, float(value)), rel=1e-9, abs=1e-12, nan_ok=True)


@pytest.mark.parametrize("circuit", sorted(VALUES))
def test_the_drawn_curve_joins_the_phases(circuit):
    made = circuits.get(circuit)
    cycle = made.cycle(parts_of(circuit, VALUES[circuit]))
    settled = settle(cycle)
    for node in {p.node for p in cycle.phases}:
        t, v = curve(cycle, node)
        assert t[0] == 0
        assert t[-1] == pytest.approx(float(settled.period))
        assert np.all(np.diff(t) >= 0)
        mine = [i for i, p in enumerate(cycle.phases) if p.node == node]
        assert v.max() >= max(float(settled.ends[i]) for i in mine) - 1e-9
        assert v.min() == pytest.approx(min(float(min(settled.starts[i], settled.ends[i])) for i in mine))


@pytest.mark.parametrize("circuit", sorted(circuits.names()))
def test_the_starter_build_runs(circuit):
    """Every circuit's own example oscillates as it stands, through the face a user has."""
    from benchfit.pipeline import predict
    from benchfit.sheet.model import Sheet

    made = circuits.get(circuit)
    lines = "\n".join(f'{name} = "{text}"' for name, text in made.example.items())
    record = predict(Sheet.parse(f'circuit = "{circuit}"\n[parts]\n{lines}\n'))
    assert record["oscillates"] is True
    assert record["predicted"]["frequency"]["value"] > 0
    assert 0 < record["predicted"]["duty"]["value"] <= 1


@pytest.mark.parametrize("circuit", sorted(circuits.names()))
def test_every_parasitic_has_a_range_in_which_it_is_looked_for(circuit):
    """From the nominal parts and the period; a parasitic without one would never be a suspect."""
    ohms, farads, _, _ = scale_of(circuit)
    p = {**parts_of(circuit, VALUES[circuit]), "period": np.float64(ohms * farads)}
    for part in circuits.get(circuit).parts:
        if part.kind == "parasitic":
            assert part.reach is not None
            low, high = part.reach(p)
            assert 0 < low < high < np.inf, part.name
