"""The live view as lines: nothing wider or higher than the terminal, what matters always there."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit.errors import Remark
from benchfit.explain.result import Explanation, NextReading, Quantity, Rest, Suspect, Turn
from benchfit.show.chart_cells import chart
from benchfit.show.layout import cells
from benchfit.show.live import LiveState, failure_line, live_lines, plain_line, turn_sentence

LOOK = Explanation(
    captures=(),
    oscillates=True,
    measured={
        "frequency": Quantity(96.5, 0.01, "Hz", 0.005),
        "duty": Quantity(0.489, 0.0005, "1", 0.0005),
        "upper": Quantity(5.31, 0.08, "V", 0.003),
        "lower": Quantity(-4.95, 0.08, "V", 0.003),
    },
    circuit="op-amp",
    title="Tide gate pacer",
    warnings=(Remark("few-cycles", "two cycles only"),),
)
FOUND = replace(
    LOOK,
    suspects=(
        Suspect(("C",), {"C": 0.08}, 0.7, "C (timing capacitor) is 8.2 % above its nominal: 108.2 ± 1.5 nF"),
        Suspect((), {}, 0.3, "nothing is off beyond its tolerance"),
    ),
    settled=False,
    verdict="conditional",
    next_readings=(NextReading("resistance, one end lifted", "R", 0.2),),
)
TURN = Turn(
    part="R", unit="Ω", quantity="frequency", low=40e3, high=55e3, now=43e3, goal=46.9e3, u=200.0,
    is_there=False, is_reachable=True, miss=0.09, expanded=1e-4, limit=0.08, best=None, is_tight=False,
    wait=12.0, rest=Rest(105.7, 0.01, 0.001, 0.0, 1.0),
)  # fmt: skip
STATE = LiveState(
    resource="TCPIP::127.0.0.1::5025::SOCKET",
    instrument="Benchfit,Loopback Scope,127001,1.0",
    title="Tide gate pacer",
    link="connected",
    is_up=True,
    captures=1204,
    failures=3,
    faults={"timeout": 2, "disconnected": 1},
    age=0.2,
    pace=0.1,
    look=LOOK,
    explanation=FOUND,
    lag=2.1,
    targets={"frequency": (97.0, 0.08), "duty": (0.5, None)},
    trace=[(float(age), 97 + age / 30) for age in range(120, -1, -1)],
    turn=TURN,
)


@pytest.mark.parametrize("colour", [False, True])
@pytest.mark.parametrize(
    ("width", "height"), [(80, 24), (120, 40), (80, 12), (40, 30), (200, 60), (60, 5), (20, 3)]
)
def test_it_fits_the_terminal(width: int, height: int, colour: bool) -> None:
    import re

    lines = live_lines(STATE, width, height, colour=colour)
    assert len(lines) <= height
    for line in lines:
        bare = re.sub(r"\x1b\[[\d;]*m", "", line)
        assert cells(bare) <= width, bare
        assert colour or "\x1b" not in line


def test_what_it_shows_at_80_columns() -> None:
    text = "\n".join(live_lines(STATE, 80, 30))
    for part in (
        "Tide gate pacer", "● connected", "last 0.2 s ago", "10/s", "1204 captures",
        "frequency  96.500 ± 0.020 Hz", "-0.52 % of 97 Hz", "duty cycle", "turns at   5.31 ± 0.16 V going up",
        "warnings   few-cycles", "trim R: raise it by 3.90 ± 0.40 kΩ (26 % of its travel), to 46.9 kΩ",
        "hold still 12 s", "frequency, miss in %, last 2 min", "suspects (of 2.1 s before the last capture)",
        "CONDITIONAL", "70 %  C (timing capacitor) is 8.2 %", "read next: resistance, one end lifted",
        "faults: timeout 2, disconnected 1", "Ctrl-C",
    ):  # fmt: skip
        assert " ".join(part.split()) in " ".join(text.split()), part


def test_it_begins_before_anything_is_known() -> None:
    lines = live_lines(LiveState("TCPIP::127.0.0.1::5025::SOCKET"), 80, 24)
    text = "\n".join(lines)
    assert "○ connecting" in text
    assert "no capture yet" in text
    assert "waiting for the first capture" in text


def test_a_lost_link_says_why() -> None:
    state = replace(STATE, is_up=False, link="reconnecting, pause 4 s", last_fault="X: refused.", age=5.1)
    text = "\n".join(live_lines(state, 80, 30))
    assert "○ reconnecting, pause 4 s" in text
    assert "X: refused." in text


def test_a_build_that_stands_still() -> None:
    state = replace(STATE, look=replace(LOOK, oscillates=False, measured={}), turn=None)
    assert any("does not oscillate" in line for line in live_lines(state, 80, 24))


def test_nothing_of_a_capture_can_command_the_terminal() -> None:
    state = replace(STATE, instrument="x\x1b[2Jy", title="a\x07b", last_fault="\x1b]0;t\x07", is_up=False)
    assert "\x1b" not in "".join(live_lines(state, 80, 30))


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({}, "raise it by 3.90 ± 0.40 kΩ (26 % of its travel), to 46.9 kΩ; hold still 12 s"),
        ({"goal": 41e3, "is_tight": True}, "lower it by 2.00 ± 0.40 kΩ (13 % of its travel), to 41 kΩ"),
        ({"is_there": True, "is_tight": True, "miss": 1e-4}, "leave it"),
        ({"is_there": True, "is_tight": True, "miss": 1e-4}, "you may stop"),
        ({"wait": None}, "too large for this limit"),
        ({"goal": 70e3, "is_reachable": False, "best": 0.03}, "upper end 55 kΩ, which leaves +3"),
        ({"goal": 20e3, "is_reachable": False}, "lower end 40 kΩ"),
        ({"goal": None}, "look at the suspects first"),
        ({"u": None}, "raise it by 3.9 kΩ"),
    ],
)  # fmt: skip
def test_advice_on_the_trimmer(changes: dict[str, object], says: str) -> None:
    assert says in turn_sentence(replace(TURN, **changes))  # type: ignore[arg-type]


def test_one_plain_line() -> None:
    line = plain_line(
        "2026-01-01T00:00:00.000Z", LOOK, FOUND, "2025-12-31T23:59:58.000Z", STATE.targets, TURN
    )
    assert "\n" not in line
    assert line.startswith("2026-01-01T00:00:00.000Z  frequency 96.500 ± 0.020 Hz (-0.52 %); duty cycle")
    assert "70 % C (timing capacitor)" in line
    assert "(of 2025-12-31T23:59:58.000Z)" in line
    assert "few-cycles" in line
    same = plain_line("2026-01-01T00:00:00.000Z", LOOK, FOUND, "2026-01-01T00:00:00.000Z", {})
    assert "(of " not in same
    assert failure_line("now", "X:\na") == "now  no capture: X:\\x0aa"


@given(
    st.lists(st.tuples(st.floats(0, 130), st.floats(-1e9, 1e9)), max_size=30),
    st.integers(12, 150),
    st.integers(1, 12),
    st.booleans(),
    st.one_of(st.none(), st.floats(1e-6, 1e3)),
)
def test_the_chart_keeps_its_size(
    points: list[tuple[float, float]], width: int, rows: int, zero: bool, limit: float | None
) -> None:
    lines = chart(sorted(points, reverse=True), width, rows, 120.0, zero=zero, limit=limit, unit="%")
    assert len(lines) == rows
    assert all(len(line) <= max(width, 11) for line in lines)


def test_the_chart_draws_what_it_is_given() -> None:
    """A rising straight line: dots in the lower left and the upper right, none in the other two corners."""
    lines = chart([(float(age), -float(age)) for age in range(120, -1, -1)], 50, 4, 120.0)
    plot = [line.split("┤")[1] for line in lines]
    blank = "\u2800"
    assert plot[0][-1] != blank
    assert plot[-1][0] != blank
    assert set(plot[0][:10]) == {blank}
    assert set(plot[-1][-10:]) == {blank}
