"""Values: overload words, empty cells, damaged and cut rows, units, the converter's step."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit.capture import Capture, describe, read
from benchfit.capture.resolution import resolution
from benchfit.errors import CaptureError

Write = Callable[..., Path]
HEAD = "Time (s),CH1 (V),CH2 (V)\n"


def lines(n: int = 200) -> list[str]:
    return [f"{k * 1e-4:.5f},{1 + 0.02 * (k * 7 % 50):.3f},{0.1 * (k % 9):.2f}" for k in range(n)]


def codes(capture: Capture) -> list[str]:
    return [remark.code for remark in capture.warnings]


def says(capture: Capture, code: str) -> str:
    return " ".join(remark.says for remark in capture.warnings if remark.code == code)


@pytest.mark.parametrize(
    "word",
    ["OL", "-OL", "OVER", "Overload", "OVLD", "+OVFL", "CLIP", "clipped", "inf", "-inf", "Infinity", "∞", "-∞", "1.#INF", "9.9E+37",
     "-9.9E37", "****", "SAT", "overrange"],
)  # fmt: skip
def test_overload_words_are_no_values_but_are_remembered(word: str, write: Write) -> None:
    rows = lines()
    for k in (50, 51, 120):
        rows[k] = f"{k * 1e-4:.5f},{word},0.5"
    capture = read(write(HEAD + "\n".join(rows) + "\n"))
    first, second = capture.channels
    assert first.overloaded is not None
    assert np.flatnonzero(first.overloaded).tolist() == [50, 51, 120]
    assert np.flatnonzero(np.isnan(first.values)).tolist() == [50, 51, 120]
    assert second.overloaded is None
    assert second.values[50] == 0.5
    assert codes(capture) == ["clipped"]
    assert "3 samples" in says(capture, "clipped")


@pytest.mark.parametrize("word", ["", " ", "NaN", "nan", "N/A", "--", "---", "null", "9.91E+37", "1.#QNAN"])
def test_empty_cells_and_words_for_nothing(word: str, write: Write) -> None:
    rows = lines()
    for k in (50, 51, 120):
        rows[k] = f"{k * 1e-4:.5f},{word},0.5"
    capture = read(write(HEAD + "\n".join(rows) + "\n"))
    first = capture.channels[0]
    assert np.flatnonzero(np.isnan(first.values)).tolist() == [50, 51, 120]
    assert first.overloaded is None or not first.overloaded.any()
    assert capture.samples == 200
    assert codes(capture) == ["empty-cells"]


@pytest.mark.parametrize(("begin", "end"), [(2, 0), (25, 1), (0, 1)])
def test_times_without_values_at_the_ends(begin: int, end: int, write: Write) -> None:
    rows = lines()
    for k in [*range(begin), *range(200 - end, 200)]:
        rows[k] = f"{k * 1e-4:.5f},,"
    capture = read(write(HEAD + "\n".join(rows) + "\n"))
    assert capture.samples == 200
    assert capture.start == 0.0
    for channel in capture.channels:
        assert np.isnan(channel.values[:begin]).all()
        assert np.isfinite(channel.values[begin : 200 - end]).all()


def test_a_channel_that_is_out_of_range_from_the_first_row_on(write: Write) -> None:
    rows = [
        row if k > 150 else row.split(",")[0] + ",OL," + row.split(",")[2] for k, row in enumerate(lines())
    ]
    capture = read(write(HEAD + "\n".join(rows) + "\n"))
    assert [channel.name for channel in capture.channels] == ["CH1", "CH2"]
    assert capture.channels[0].overloaded is not None
    assert capture.channels[0].overloaded.sum() == 151


def test_a_damaged_row_is_left_out_counted_and_shown(write: Write) -> None:
    rows = lines()
    rows[100] = "0.01#00,1.2,0.1"
    rows[140] = "0.0140"
    capture = read(write(HEAD + "\n".join(rows) + "\n"))
    assert capture.samples == 200
    assert np.flatnonzero(np.isnan(capture.channels[0].values)).tolist() == [100, 140]
    assert 'line 102: "0.01#00,1.2,0.1"' in says(capture, "damaged")
    assert "2 rows" in says(capture, "damaged")


def test_a_damaged_cell_loses_its_value_only(write: Write) -> None:
    rows = lines()
    rows[100] = rows[100].replace(",", ",x", 1)
    capture = read(write(HEAD + "\n".join(rows) + "\n"))
    assert np.flatnonzero(np.isnan(capture.channels[0].values)).tolist() == [100]
    assert np.isfinite(capture.channels[1].values).all()
    assert "1 cells" in says(capture, "damaged")


@pytest.mark.parametrize("place", [0, 1, 2, 7])
def test_damage_near_the_top_is_no_header(place: int, write: Write) -> None:
    rows = lines()
    rows[place] = rows[place].replace(".", "?", 1)
    capture = read(write(HEAD + "\n".join(rows) + "\n"))
    assert capture.samples == (199 if place == 0 else 200)
    assert [channel.name for channel in capture.channels] == ["CH1", "CH2"]


@pytest.mark.parametrize(
    ("last", "kept"),
    [
        ("0.01", 199),
        ("0.01990,1.", 199),
        ("0.01990,1.460,0.1", 199),
        ("0.01990,1.460,0.10", 200),
        ("0.01990,1.460,", 199),
        ("0.0199", 199),
    ],
)
def test_a_last_row_cut_in_the_middle(last: str, kept: int, write: Write) -> None:
    capture = read(write(HEAD + "\n".join([*lines()[:-1], last])))
    assert capture.samples == kept
    assert ("damaged" in codes(capture)) == (kept == 199)


def test_a_last_row_without_its_line_end_is_whole(write: Write) -> None:
    capture = read(write(HEAD + "\n".join(lines())))
    assert capture.samples == 200
    assert codes(capture) == []


def test_text_below_the_table_is_passed_over(write: Write) -> None:
    capture = read(write(HEAD + "\n".join(lines()) + "\n\n# end of record\n"))
    assert capture.samples == 200
    assert codes(capture) == []


@pytest.mark.parametrize("text", ["# event marker", "--- pause ---", "battery low"])
def test_a_line_of_text_between_rows_is_counted(text: str, write: Write) -> None:
    rows = lines()
    capture = read(write(HEAD + "\n".join([*rows[:70], text, *rows[70:]]) + "\n"))
    assert capture.samples == 200
    assert text in says(capture, "damaged")


def test_blank_lines_between_rows_are_nothing(write: Write) -> None:
    capture = read(write(HEAD + "\n\n".join(lines()) + "\n\n\n"))
    assert capture.samples == 200
    assert codes(capture) == []


def test_a_tail_of_zero_bytes_is_left_out(write: Write) -> None:
    capture = read(write((HEAD + "\n".join(lines()) + "\n").encode() + bytes(5000)))
    assert capture.samples == 200
    assert "damaged" in codes(capture)


def test_decimal_commas_without_quotes_on_some_rows_are_refused(write: Write) -> None:
    rows = [
        f"{k * 1e-4:.5f},{k % 9}" if k % 3 else f"{k * 1e-4:.5f}".replace(".", ",") + f",{k % 9},5"
        for k in range(200)
    ]
    with pytest.raises(CaptureError, match="decimal commas"):
        read(write("Time (s),CH1 (V)\n" + "\n".join(rows) + "\n"))


def test_units_are_brought_to_base_units(write: Write) -> None:
    text = "Time (ms),U (mV),I (uA),T (°C),N (dB?)\n" + "".join(
        f"{k},{100 + k},{-3 * k},{20 + k % 3},{k % 5}\n" for k in range(50)
    )
    capture = read(write(text))
    assert [(c.name, c.unit) for c in capture.channels] == [("U", "V"), ("I", "A"), ("T", "°C"), ("N", "dB?")]
    assert capture["U"].values[1] == pytest.approx(0.101)
    assert capture["I"].values[1] == pytest.approx(-3e-6)
    assert capture["U"].resolution == pytest.approx(1e-3)
    assert capture.interval == pytest.approx(1e-3)


def test_equal_names_are_told_apart(write: Write) -> None:
    text = "Time (s),U (V),U (V)\n" + "\n".join(lines()) + "\n"
    assert [channel.name for channel in read(write(text)).channels] == ["U", "U (2)"]


# -- resolution ----------------------------------------------------------------------------------------------


@given(st.floats(1e-6, 10.0), st.integers(3, 256), st.integers(0, 1000))
def test_the_step_of_a_converter_is_found(step: float, levels: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    codes = np.concatenate([rng.integers(0, levels, 3000), [0, 1]])
    assert resolution(step * codes) == pytest.approx(step, rel=1e-6)


@given(st.integers(0, 1000))
def test_noise_of_single_precision_is_no_step(seed: int) -> None:
    """Codes of 0.4 V printed as 0.4, 0.4000001, -4.76837e-07: met in real exports."""
    rng = np.random.default_rng(seed)
    values = 0.4 * rng.integers(-20, 150, 3000) + 4.8e-7 * rng.integers(-1, 2, 3000)
    assert resolution(values) == pytest.approx(0.4, rel=1e-4)


def test_one_odd_value_is_no_step() -> None:
    values = np.concatenate([0.02 * np.arange(-100, 100), [0.0203]])
    assert resolution(values) == pytest.approx(0.02, rel=1e-3)


def test_a_constant_has_no_step() -> None:
    assert resolution(np.full(100, -5.12)) == 0.0
    assert resolution(np.full(100, np.nan)) == 0.0


def test_constant_channel(write: Write) -> None:
    capture = read(
        write(
            "x-axis,1,REF1\nsecond,Volt,Volt\n"
            + "".join(f"{k * 1e-4:.5f},{k % 9},-5.12\n" for k in range(99))
        )
    )
    reference = capture["REF1"]
    assert reference.minimum == reference.maximum == -5.12
    assert reference.resolution == 0.0


# -- what -v says --------------------------------------------------------------------------------------------


def test_describe_says_how_the_file_was_understood(write: Write) -> None:
    text = "Zeit;Kanal A;Kanal B\n(ms);(V);(A)\n\n" + "".join(
        f"{k / 10:.3f};{k % 9 / 4:.2f};{k % 5:.2f}\n" for k in range(99)
    ).replace(".", ",")
    said = "\n".join(describe(read(write(text.encode("utf-8-sig")))))
    for part in ("UTF-8 with byte order mark", "LF", "semicolon", "decimal comma", "Zeit in ms", "Kanal A from column 2", "Kanal B in A",
                 "0.0001 s from time column", "Kanal A 0.25 V", "99"):  # fmt: skip
        assert part in said
