"""What is printed: kept as text files, read line by line by whoever changes it."""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Callable

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from show_examples import (
    ALL,
    PREDICTION,
    cancelling,
    fault_settled,
    healthy,
    hostile,
    no_sheet,
    probe_loads,
    unsettled,
)

from benchfit.explain.result import Miss, Quantity, Share
from benchfit.show import words
from benchfit.show.layout import Column, bar, cells, clean, fitting, shortened, table, wrapped
from benchfit.show.text import render, render_circuit, render_prediction

SGR = re.compile(r"\x1b\[[0-9;]*m")


@pytest.mark.parametrize("width", [60, 80, 120])
@pytest.mark.parametrize("name", ALL)
def test_printed_reports_are_the_ones_kept(name: str, width: int, golden: Callable[[str, str], None]) -> None:
    """Each kind of report, the failed ones included, at three widths; no line is wider than asked for."""
    text = render(ALL[name](), width=width)
    assert max(cells(line) for line in text.splitlines()) <= width
    assert not any(line != line.rstrip() for line in text.splitlines())
    golden(f"{name}_{width}.txt", text + "\n")


@pytest.mark.parametrize("name", ALL)
def test_colour_changes_nothing_but_colour(name: str) -> None:
    """Without its colour codes the coloured report is the plain one, which has none."""
    plain, coloured = render(ALL[name]()), render(ALL[name](), colour=True)
    assert "\x1b" not in plain
    assert plain == SGR.sub("", coloured) != coloured


@pytest.mark.parametrize("width", [60, 80])
def test_a_prediction_is_printed_as_kept(width: int, golden: Callable[[str, str], None]) -> None:
    text = render_prediction(PREDICTION, width=width)
    assert max(cells(line) for line in text.splitlines()) <= width
    golden(f"prediction_{width}.txt", text + "\n")


def test_advice_may_have_names() -> None:
    advice = {
        "node": "capacitor",
        "time_per_division": 5e-4,
        "could_settle": ["R_leak", "slew"],
        "probe": None,
    }
    text = render_prediction({**PREDICTION, "capture_advice": advice})
    assert "  time per division   500 µs" in text
    assert "  could settle        R_leak, slew" in text


def test_a_prediction_that_will_not_run_says_why() -> None:
    says = "the charge ends at 80 V, below the lowest strike voltage"
    text = render_prediction(
        {"circuit": "gas-lamp", "oscillates": False, "warnings": [{"code": "no-oscillation", "says": says}]}
    )
    assert f"Should not oscillate. {says}" in text


@pytest.mark.parametrize("name", ["op-amp", "gas-lamp", "two-transistor"])
def test_a_circuit_is_printed_with_all_its_parts_and_nodes(name: str) -> None:
    from benchfit import circuits

    circuit = circuits.get(name)
    text = render_circuit(circuit, width=80)
    for part in circuit.parts:
        assert re.search(rf"^  {part.name} ", text, re.M), part.name
    for node in circuit.nodes:
        assert re.search(rf"^  {node.name} ", text, re.M), node.name
    assert max(cells(line) for line in text.splitlines()) <= 80


class TestVerdictSentences:
    """The first lines of a report."""

    def test_settled_fault_is_named_with_its_probability(self) -> None:
        assert words.blame_sentence(fault_settled()).startswith(
            "To blame, 98 % sure: RA and RB are exchanged"
        )

    def test_what_cannot_be_told_is_said_with_the_reading_that_would(self) -> None:
        said = words.blame_sentence(unsettled())
        assert said == (
            "To blame is C (58 %) or R (40 %): this capture cannot tell which. "
            "Read next: R, resistance, one end lifted."
        )

    def test_a_pass_with_faults_that_cancel_blames_no_miss(self) -> None:
        assert words.verdict_sentence(cancelling()).startswith("PASS")
        assert words.blame_sentence(cancelling()).startswith("Found off, 97 % sure")

    def test_the_judged_value_is_the_one_without_the_probe(self) -> None:
        assert "12.040 ± 0.096 Hz with the probe lifted, on its target" in words.verdict_sentence(
            probe_loads()
        )

    def test_no_sheet_names_likely_circuits_and_judges_no_part(self) -> None:
        text = render(no_sheet())
        assert "Without a build sheet no part can be judged" in text
        assert not {"target", "miss", "Suspects", "Parts"} & set(text.split())

    @pytest.mark.parametrize(
        ("built", "says"), [(12.0, "× 1"), (24.0, "2 times"), (0.12, "0.01 times"), (9.0, "25.0 % below")]
    )
    def test_a_miss_is_said_in_per_cent_or_as_a_factor(self, built: float, says: str) -> None:
        miss = Miss(12.0, built, built / 12 - 1, 0.0)
        base = dataclasses.replace(
            healthy(), measured={"frequency": Quantity(built, 1e-6, "Hz")}, miss={"frequency": miss}
        )
        said = words.verdict_sentence(base)
        assert says in said or (built == 12.0 and "on its target of 12 Hz within the uncertainty" in said)


def test_nothing_from_a_file_reaches_the_terminal_as_a_command() -> None:
    text = render(hostile())
    assert "\x1b" not in text
    assert "\x07" not in text
    text.encode("utf-8")


def test_cells_and_cleaning() -> None:
    """Terminal widths as in Unicode TR 11 (East Asian width), combining marks of no width."""
    assert cells("Ωµ±█│→") == 6
    assert cells("灯") == 2
    assert cells("é") == 1
    assert clean("a\tb\u202ec\u200b") == "a\\x09b\\x202ec\\x200b"
    assert clean("é 灯 Ω ±") == "é 灯 Ω ±"


@given(st.text(max_size=40), st.integers(40, 130))
@settings(deadline=None)
def test_prose_stays_within_its_width_and_loses_no_word(text: str, width: int) -> None:
    words_in = clean(text).split()
    lines = wrapped(clean(text), width, "  ")
    assert all(len(line) <= width for line in lines)
    assert "".join(" ".join(lines).split()) == "".join("".join(words_in).split())


def test_a_number_stays_with_its_unit() -> None:
    for width in range(20, 40):
        text = "\n".join(wrapped("the charge ends at 83.4 ± 2.1 V and not at 90 V", width))
        assert "83.4 ± 2.1 V" in text
        assert "90 V" in text


@given(st.lists(st.lists(st.text("abcµ± ", max_size=14), min_size=3, max_size=3), min_size=1, max_size=5))
@settings(deadline=None)
def test_tables_keep_their_columns(rows: list[list[str]]) -> None:
    """No row is wider than the table, and a right-hand column ends in the same cell in every row."""
    lines = table(rows, [Column(), Column(True), Column(True, 1)], 40)
    assert len(lines) == len(rows)
    assert max(cells(line) for line in lines) <= 40
    shown = fitting(rows, [Column(), Column(True), Column(True, 1)], 40)
    if shown == [0, 1, 2] and all(row[2].strip() for row in rows):
        ends = {len(line) for row, line in zip(rows, lines, strict=True) if row[2] == row[2].rstrip()}
        assert len(ends) <= 1


def test_columns_of_the_highest_rank_go_first() -> None:
    row = [["name", "1" * 10, "2" * 10, "3" * 10]]
    columns = [Column(), Column(rank=1), Column(rank=3), Column(rank=2)]
    assert fitting(row, columns, 80) == [0, 1, 2, 3]
    assert fitting(row, columns, 35) == [0, 1, 3]
    assert fitting(row, columns, 20) == [0, 1]


def test_long_names_lose_their_middle() -> None:
    assert shortened("a_very_long_capture_name.csv", 16) == "a_very_lon…e.csv"


@given(st.floats(-1, 1), st.integers(4, 30))
def test_bars_are_in_proportion(x: float, half: int) -> None:
    """Length of a bar = its share of the largest to a quarter cell, on its side of the axis."""
    left, right = bar(x, 1.0, half).split("│")
    assert len(left) == half
    length = sum({"█": 1.0}.get(c, 0.5) for c in (left + right).strip())
    assert abs(length - abs(x) * half) <= 0.2501
    assert not (left.strip() and right.strip())


def test_small_shares_are_put_together_and_the_rows_still_add_up() -> None:
    shares = tuple(Share(f"p{i}", x, 0.0) for i, x in enumerate([0.2, -0.1, 1e-4, 2e-4, -5e-5]))
    total = sum(s.share for s in shares) + 0.01 + 0.003
    rows = words.budget_rows(Miss(1.0, 1.0 + total, total, 0.01, shares, 0.003))
    assert [r[0] for r in rows] == ["on paper", "p0", "p1", "3 others", "unexplained"]
    assert abs(sum(r[1] for r in rows) - total) < 1e-12


@pytest.mark.parametrize(
    ("p", "says"),
    [(0.0, "< 1 %"), (0.004, "< 1 %"), (0.034, "3 %"), (0.5, "50 %"), (0.9989, "> 99 %"), (1.0, "> 99 %")],
)
def test_a_probability_is_never_said_to_be_none_or_all(p: float, says: str) -> None:
    assert words.chance(p) == says


@pytest.mark.parametrize(
    ("x", "says"),
    [
        (0.163, "+16.3 %"),
        (-0.0028, "-0.28 %"),
        (9.2, "× 10.2"),
        (-0.9, "× 0.1"),
        (None, ""),
        (float("nan"), ""),
    ],
)
def test_changes(x: float | None, says: str) -> None:
    assert words.change(x) == says
