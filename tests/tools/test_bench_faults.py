"""Builds as they are drawn for the fault study, and the bench's own judgement of what can be decided."""

from __future__ import annotations

import numpy as np
import pytest

import benchfit
from benchfit.explain import odds
from tools.bench import simulate
from tools.bench.builds import draw
from tools.bench.designs import DESIGNS
from tools.bench.faults import least
from tools.bench.identify import judge
from tools.bench.prior import draw_prior
from tools.bench.specs import standard
from tools.fault_study import main


@pytest.mark.parametrize("circuit", ["gas-lamp", "triangle"])
def test_a_draw_is_a_function_of_its_seed(circuit: str):
    one, two = draw(circuit, 7), draw(circuit, 7)
    assert one.sheet == two.sheet
    assert one.true == two.true
    for node in one.nodes:
        assert np.array_equal(one.record.channels[node], two.record.channels[node])


@pytest.mark.parametrize("circuit", sorted(DESIGNS))
def test_sheets_are_sheets_and_causes_are_parts(circuit: str):
    """The package's parser takes every sheet; what is off is a part or parasitic that the circuit knows."""
    known = {part.name for part in benchfit.circuits.get(circuit).parts}
    build = draw(circuit, 1)
    assert benchfit.Sheet.parse(build.sheet) is not None
    assert set(build.fault.causes) <= known
    assert set(build.true) <= known


@pytest.mark.parametrize("circuit", ["schmitt-inverter", "timer-555"])
def test_a_single_fault_is_alone(circuit: str):
    """All but what is off lie inside their limits, and what is off lies clearly outside."""
    for seed in range(4):
        build = draw(circuit, seed, kind="single")
        for spec in build.design.specs:
            value = build.true[spec.name]
            if spec.name not in build.fault.causes and not spec.follows:
                assert spec.low - 1e-12 <= value <= spec.high + 1e-12
            elif spec.name in build.fault.causes:
                middle = np.sqrt(spec.low * spec.high) if spec.log else 0.5 * (spec.low + spec.high)
                off = abs(np.log(value / middle)) if spec.log else abs(value - middle)
                assert off > 0.9 * least(spec) or build.fault.how in ("swap", "neighbour")


def test_restored_and_lifted_are_what_the_bench_says():
    build = next(b for s in range(20) if (b := draw("timer-555", s, kind="single")).fault.how == "value" and b.probe)
    (cause,) = build.fault.causes
    mended = {**build.true, cause: build.design.spec(cause).nominal}
    assert build.restored == pytest.approx(1 / simulate("timer-555", mended, probe=build.probe).period, rel=1e-9)
    assert build.lifted == pytest.approx(1 / simulate("timer-555", build.true).period, rel=1e-9)


def test_standard_values():
    """IEC 60063: the nearest of the series by ratio."""
    assert standard(4800.0, (10, 15, 22, 33, 47, 68)) == 4700.0
    assert standard(9.6e-9, (10, 15, 22, 33, 47, 68)) == pytest.approx(1e-8)


def test_judgement_knows_a_look_alike():
    """Where one resistor sets every time, R and C share the posterior; in a timer they do not."""
    twin, clear = draw("triangle", 15, kind="single"), draw("timer-555", 36, kind="single")
    assert (twin.fault.causes, clear.fault.causes) == (("C",), ("RA",))
    posterior = judge(twin).posterior
    assert posterior[("R",)] == pytest.approx(posterior[("C",)], rel=0.2)
    assert judge(clear).truth > 0.9


def test_judgement_of_a_healthy_build_is_not_a_fault():
    found = judge(draw("schmitt-inverter", 3, kind="healthy"))
    assert found.misfit[()] < 12


def test_the_study_runs_and_lists_its_failures(tmp_path, capsys):
    """Two builds through the public face: figures on standard output, a line for each failure in a file."""
    failures = tmp_path / "failures.csv"
    words = ["--builds", "2", "--circuits", "triangle,schmitt-inverter", "--kind", "healthy", "--quick"]
    assert main([*words, "--failures", str(failures)]) == 0
    printed = capsys.readouterr().out
    assert "settled on a wrong answer, of all" in printed
    assert "no answer at all                         0.0 %  (0 of 2)" in printed
    assert failures.read_text(encoding="utf-8").startswith("failure,circuit,seed,nodes")


def test_the_prior_mix_follows_the_table():
    """Of builds drawn from the program's own table, as many are healthy as it says (binomial, three sigma)."""
    rng = np.random.default_rng(5)
    design = DESIGNS["timer-555"](rng)
    drawn = [draw_prior(rng, design, 1e-3) for _ in range(600)]
    healthy = sum(not f.causes for f in drawn)
    assert abs(healthy - 600 * odds.HEALTHY) < 3 * np.sqrt(600 * odds.HEALTHY * (1 - odds.HEALTHY))
    for fault in drawn:
        for name in fault.causes:
            if fault.how == "value":
                spec = design.spec(name)
                assert not spec.low <= fault.values[name] <= spec.high
