"""Real recordings that lie beside the project in ``shared/wild``; their values were read by hand."""

from __future__ import annotations

from pathlib import Path

import pytest

from benchfit.capture import read
from benchfit.cycle import CycleConstants, guess, measure

FOLDER = Path(__file__).resolve().parents[2].parent / "shared" / "wild"


def measured(name: str, **options: float) -> CycleConstants:
    path = FOLDER / name
    if not path.exists():
        pytest.skip(f"{name} is not there: the folder shared does not lie beside the project")
    capture = read(path, **options)  # type: ignore[arg-type]
    return measure(capture, guess(capture))


def test_op_amp_astable() -> None:
    """T = 2.222 ms, duty 0.487; the output slews at nearly 1 V/µs and rounds the capacitor's corners."""
    found = measured("real01.csv")
    assert found.value("period") == pytest.approx(2.222e-3, abs=1e-6)
    assert found.value("high_share") == pytest.approx(0.487, abs=1e-3)
    assert found.value("high") == pytest.approx(13.95, abs=0.1)
    assert found.value("low") == pytest.approx(-12.88, abs=0.05)
    assert 6.9 < found.value("upper") < 7.1
    assert -6.75 < found.value("lower") < -6.55
    assert 20e-6 < found.value("rise_time") < 30e-6
    assert 950 < found.value("charge_curvature") < 1100
    assert "few-cycles" in {r.code for r in found.remarks}


def test_timer() -> None:
    """T = 2.271 s, high 0.651 of it, capacitor 1.55 V to 3.37 V."""
    found = measured("real02.csv", interval=1e-3)
    assert found.value("period") == pytest.approx(2.271, abs=2e-3)
    assert found.value("high_share") == pytest.approx(0.651, abs=2e-3)
    assert found.value("upper") == pytest.approx(3.37, abs=0.01)
    assert found.value("lower") == pytest.approx(1.55, abs=0.01)


def test_two_transistors() -> None:
    """Collector: T = 306 µs."""
    assert measured("real03.csv").value("period") == pytest.approx(306e-6, rel=5e-3)


def test_step_response() -> None:
    """A capacitor's one charge: τ = 1.93 ms by a log fit, to 0.967 V."""
    found = measured("real06.csv")
    assert not found.oscillates
    assert 1 / found.value("ramp_curvature") == pytest.approx(1.93e-3, rel=0.05)
    assert found.value("rest") == pytest.approx(0.967, abs=0.003)


def test_artefact_at_the_start() -> None:
    """T = 48.5 µs, high 0.512; the first six samples are no part of the cycle."""
    found = measured("real14.csv")
    assert found.value("period") == pytest.approx(48.5e-6, rel=1e-3)
    assert found.value("high_share") == pytest.approx(0.512, abs=2e-3)
    assert "startup" in {r.code for r in found.remarks}
