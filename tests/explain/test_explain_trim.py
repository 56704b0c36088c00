"""Turning a trimmer onto the target: direction, distance, and how long to hold still, against the bench."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from benchfit import pipeline
from benchfit.errors import SheetError
from benchfit.explain.result import PartFound, Quantity, Rest
from benchfit.explain.trim import rested
from benchfit.sheet import Sheet
from tools.bench import simulate

SHEET = Path(__file__).resolve().parents[2] / "sample_captures" / "tide_gate_pacer.toml"
PARTS = {"R": 47e3, "C": 100e-9, "R_top": 22e3, "R_bottom": 22e3, "V_high": 10.6, "V_low": -9.9}
PROBE = {"capacitor": (10e6, 12e-12)}


def frequency(parts: dict[str, float], *, probed: bool) -> float:
    """By integrating the circuit's differential equation."""
    return 1 / simulate("op-amp", parts, probe=PROBE if probed else None).period


def reading(value: float, noise: float = 1e-4, scope: float = 1e-4) -> Quantity:
    return Quantity(value, math.hypot(noise, scope), "Hz", noise)


def known(**values: float) -> tuple[PartFound, ...]:
    return tuple(
        PartFound(name, value, 0.01 * value, "", value, None, 0.0, True, "capture")
        for name, value in values.items()
    )


@pytest.mark.parametrize("at", [41e3, 46e3, 53e3])
def test_turned_as_told_the_build_is_on_its_target(at: float) -> None:
    """The other parts are not nominal, and known: what is told must work on the bench, without the probe."""
    others = {**PARTS, "C": 104e-9, "R_top": 21.7e3}
    trimming = pipeline.trimming(Sheet.load(SHEET), "R", 40e3, 55e3)
    f = frequency({**others, "R": at}, probed=True)
    turn = trimming.turn(None, reading(f), 0.0, known(**{**others, "R": at}), 0.1)
    assert turn.now == pytest.approx(at, rel=2e-4)
    assert turn.goal is not None
    assert frequency({**others, "R": turn.goal}, probed=False) == pytest.approx(97.0, rel=2e-4)
    assert turn.travel == pytest.approx((turn.goal - at) / 15e3, rel=1e-2, abs=1e-3)
    assert turn.miss == pytest.approx(frequency({**others, "R": at}, probed=False) / 97 - 1, abs=2e-4)
    assert turn.is_reachable
    assert turn.limit == pytest.approx(0.08)


def test_the_uncertainty_grows_with_the_distance() -> None:
    trimming = pipeline.trimming(Sheet.load(SHEET), "R", 40e3, 55e3)
    turns = []
    for at in (46e3, 41e3):
        f = frequency({**PARTS, "R": at}, probed=True)
        turns.append(trimming.turn(None, reading(f), 0.0, known(**{**PARTS, "R": at}), 0.1))
    near, far = turns
    assert near.u is not None
    assert far.u is not None
    # R is known to 1 %, so a turn by 14 % of it is known to 1 % of that turn.
    assert far.goal is not None
    assert far.now is not None
    assert far.u == pytest.approx(0.01 * (far.goal - far.now), rel=0.05)
    assert near.u < far.u
    unexplained = trimming.turn(None, reading(90.0), 0.0, (), 0.1)
    assert unexplained.u is None


def test_out_of_reach_is_said_with_what_is_left() -> None:
    trimming = pipeline.trimming(Sheet.load(SHEET), "R", 48e3, 55e3)
    f = frequency({**PARTS, "R": 50e3}, probed=True)
    turn = trimming.turn(None, reading(f), 0.0, known(**{**PARTS, "R": 50e3}), 0.1)
    assert not turn.is_reachable
    assert turn.goal is not None
    assert turn.goal < 48e3
    assert turn.best == pytest.approx(frequency({**PARTS, "R": 48e3}, probed=False) / 97 - 1, abs=3e-4)


def test_at_rest_readings_are_averaged() -> None:
    """u² = u_noise²/n + u_scope² (JCGM 100:2008, 4.2.3 and 5.1.2)."""
    rng = np.random.default_rng(3)
    rest: Rest | None = None
    for k in range(100):
        rest = rested(rest, reading(97 + 0.01 * rng.standard_normal(), 0.01, 0.0005), 0.1 * k)
    assert rest is not None
    assert rest.count == 100
    assert rest.u == pytest.approx(math.hypot(0.001, 0.0005), rel=1e-9)
    assert abs(rest.mean - 97) < 4 * rest.u
    assert rest.began == 0.0


def test_false_alarms_of_movement_are_rare() -> None:
    """A trimmer at rest must not be taken for one that moves: by design one reading in 16,000 (4 u)."""
    rng = np.random.default_rng(4)
    rest: Rest | None = None
    alarms = 0
    for k in range(20_000):
        before = rest
        rest = rested(rest, reading(97 + 0.01 * rng.standard_normal(), 0.01), float(k))
        alarms += before is not None and rest.count == 1
    assert alarms <= 8


def test_movement_starts_anew() -> None:
    rest = None
    for k in range(10):
        rest = rested(rest, reading(97.0, 0.01), float(k))
    assert rest is not None
    assert rest.count == 10
    moved = rested(rest, reading(97.1, 0.01), 10.0)
    assert (moved.count, moved.mean, moved.began) == (1, 97.1, 10.0)


def test_the_wait_is_what_it_takes() -> None:
    """Held still for as long as was said, the estimate is tight enough; a little less, and it is not."""
    trimming = pipeline.trimming(Sheet.load(SHEET, ["target.frequency=97 Hz 0.1 %"]), "R", 40e3, 55e3)
    pace, noise = 0.2, 0.05
    turn = trimming.turn(None, reading(97.0, noise, 0.001), 0.0, (), pace)
    assert not turn.is_tight
    assert turn.wait is not None
    more = round(turn.wait / pace)
    assert more > 5
    for k in range(1, more + 1):
        turn = trimming.turn(turn, reading(97.0, noise, 0.001), pace * k, (), pace)
        assert turn.is_tight == (k == more)
    assert 2 * turn.rest.u <= 0.25 * 0.001 * 97.0


def test_a_scope_that_is_too_coarse_is_said() -> None:
    trimming = pipeline.trimming(Sheet.load(SHEET, ["target.frequency=97 Hz 0.01 %"]), "R", 40e3, 55e3)
    turn = trimming.turn(None, reading(97.0, 0.001, 0.01), 0.0, (), 0.1)
    assert turn.wait is None
    assert not turn.is_tight


@pytest.mark.parametrize(
    ("overrides", "part", "says"),
    [
        ([], "Rx", "did you mean R?"),
        (["target.frequency=none"], "R", "target"),
    ],
)
def test_what_cannot_be_trimmed(overrides: list[str], part: str, says: str) -> None:
    with pytest.raises(SheetError) as caught:
        pipeline.trimming(Sheet.load(SHEET, overrides), part, 1.0, 2.0)
    assert says in caught.value.says


def test_a_part_that_moves_nothing() -> None:
    """One resistor sets both times: it does not move the duty cycle."""
    text = SHEET.read_text(encoding="utf-8").replace('frequency = "97 Hz 8 %"', 'duty = "49 %"')
    with pytest.raises(SheetError, match="R does not move the duty"):
        pipeline.trimming(Sheet.parse(text), "R", 40e3, 55e3)


def test_without_a_target() -> None:
    text = SHEET.read_text(encoding="utf-8").replace('[target]\nfrequency = "97 Hz 8 %"\n', "")
    with pytest.raises(SheetError, match="no target"):
        pipeline.trimming(Sheet.parse(text), "R", 40e3, 55e3)


def test_without_a_stated_limit_one_per_cent_is_taken() -> None:
    trimming = pipeline.trimming(Sheet.load(SHEET, ["target.frequency=97 Hz"]), "R", 40e3, 55e3)
    assert trimming.limit == pytest.approx(0.01)
