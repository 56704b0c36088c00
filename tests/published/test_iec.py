"""IEC 60062:2016 (marking codes) and IEC 60063:2015 (preferred numbers) against their published tables."""

from __future__ import annotations

import pytest

from benchfit.quantity import parse
from benchfit.sheet import preferred

# IEC 60063 tables, as printed in public standards' extracts.
E6 = (10, 15, 22, 33, 47, 68)
E12 = (10, 12, 15, 18, 22, 27, 33, 39, 47, 56, 68, 82)
E24 = (10, 11, 12, 13, 15, 16, 18, 20, 22, 24, 27, 30, 33, 36, 39, 43, 47, 51, 56, 62, 68, 75, 82, 91)
E48 = (
    100, 105, 110, 115, 121, 127, 133, 140, 147, 154, 162, 169, 178, 187, 196, 205, 215, 226, 237, 249,
    261, 274, 287,
    301, 316, 332, 348, 365, 383, 402, 422, 442, 464, 487, 511, 536, 562, 590, 619, 649, 681, 715, 750,
    787, 825, 866,
    909, 953,
)  # fmt: skip


def digits(series: str, scale: int) -> tuple[int, ...]:
    return tuple(round(scale * x) for x in preferred.values(series))


def test_the_two_digit_series():
    """IEC 60063: E3 to E24, the older values where the rule gives others."""
    assert digits("E3", 10) == (10, 22, 47)
    assert digits("E6", 10) == E6
    assert digits("E12", 10) == E12
    assert digits("E24", 10) == E24


def test_the_three_digit_series():
    """IEC 60063: E48 by its table; E96 and E192 by the rule, with 920 as the only exception."""
    assert digits("E48", 100) == E48
    assert digits("E96", 100) == tuple(round(100 * 10 ** (i / 96)) for i in range(96))
    e192 = digits("E192", 100)
    assert e192[185] == 920
    assert [x for i, x in enumerate(e192) if x != round(100 * 10 ** (i / 192))] == [920]
    assert set(digits("E48", 100)) < set(digits("E96", 100)) < set(e192)


@pytest.mark.parametrize("series", preferred.SERIES)
def test_the_counts(series):
    """IEC 60063: E-N has N values a decade, ascending from 1."""
    values = preferred.values(series)
    assert len(values) == len(set(values)) == int(series[1:])
    assert list(values) == sorted(values)
    assert values[0] == 1
    assert values[-1] < 10


def test_e24_is_no_part_of_e96():
    """Recomputed from the lists: of E24 only 10, 11, 13, 15, 20 and 75 are in E96, so a 1 % drawer has
    both."""
    e96 = {x / 10 for x in digits("E96", 100)}
    assert sorted(e96 & set(E24)) == [10, 11, 13, 15, 20, 75]
    assert preferred.stocked(0.01) == ("E96", "E24")
    assert preferred.stocked(0.05) == ("E24",)


@pytest.mark.parametrize(
    ("tolerance", "series"),
    [(0.005, "E192"), (0.01, "E96"), (0.02, "E48"), (0.05, "E24"), (0.1, "E12"), (0.2, "E6"), (0.3, "E3"),
     (0.8, "E3"),
     (0.03, "E24"), (0.001, "E192")],
)  # fmt: skip
def test_the_tolerance_classes(tolerance, series):
    """IEC 60063: over 20, 20, 10, 5, 2, 1 and 0.5 %."""
    assert preferred.series_for(tolerance) == series


def test_neighbours_and_nearest():
    """The neighbours enclose a value across decades; a value of the series is its own lower neighbour."""
    assert preferred.neighbours(9.5e3, "E12") == (8.2e3, 10e3)
    assert preferred.neighbours(4.7e-9, "E12") == (4.7e-9, 5.6e-9)
    assert preferred.nearest(9.5e3, "E24") == 9.1e3
    assert preferred.nearest(0.99e3, "E12") == 1e3
    assert preferred.nearest(1.02e-7, "E96") == 1.02e-7
    with pytest.raises(ValueError, match="positive"):
        preferred.nearest(0.0, "E12")


def test_the_ladder():
    """All values of both series between two limits, each once."""
    assert preferred.ladder(1e3, 1.06e3, "E96", "E24") == (1e3, 1.02e3, 1.05e3)
    assert preferred.ladder(8.2e-9, 12e-9, "E12") == (8.2e-9, 10e-9, 12e-9)


@pytest.mark.parametrize(
    ("code", "ohm"),
    [("R47", 0.47), ("4R7", 4.7), ("470R", 470), ("4K7", 4.7e3), ("47K", 47e3), ("47K3", 47.3e3),
     ("470K", 470e3),
     ("4M7", 4.7e6)],
)  # fmt: skip
def test_resistance_codes(code, ohm):
    """IEC 60062: R, K and M in place of the decimal mark (a published table of the code's examples)."""
    assert parse(code, "Ω").nominal == pytest.approx(ohm, rel=1e-15)


@pytest.mark.parametrize(
    ("code", "farad"),
    [("p10", 0.1e-12), ("1p5", 1.5e-12), ("332p", 332e-12), ("1n0", 1e-9), ("33n2", 33.2e-9), ("1u5", 1.5e-6),
     ("1µ5", 1.5e-6), ("10m", 10e-3)],
)  # fmt: skip
def test_capacitance_codes(code, farad):
    """IEC 60062: p, n, µ and m in place of the decimal mark (from memory of the standard)."""
    assert parse(code, "F").nominal == pytest.approx(farad, rel=1e-15)


# B to M as in published tables of the code; E, H and N from memory of the standard.
SYMMETRICAL = {"B": 0.1, "C": 0.25, "D": 0.5, "F": 1, "G": 2, "J": 5, "K": 10, "M": 20, "L": 0.01,
"P": 0.02, "W": 0.05,
               "E": 0.005, "H": 3, "N": 30}  # fmt: skip
# Z, S and T as in published tables; Q from memory of the standard.
ASYMMETRICAL = {"Z": (20, 80), "S": (20, 50), "T": (10, 50), "Q": (10, 30)}


@pytest.mark.parametrize(("letter", "percent"), SYMMETRICAL.items())
def test_symmetrical_tolerance_letters(letter, percent):
    """IEC 60062: the letter after the value, in per cent."""
    for text, unit in ((f"4K7 {letter}", "Ω"), (f"33n2 {letter}", "F")):
        value = parse(text, unit)
        assert value.high / value.nominal - 1 == pytest.approx(percent / 100, rel=1e-6)
        assert 1 - value.low / value.nominal == pytest.approx(percent / 100, rel=1e-6)


@pytest.mark.parametrize(("letter", "limits"), ASYMMETRICAL.items())
def test_asymmetrical_tolerance_letters(letter, limits):
    """IEC 60062: letters of electrolytic capacitors."""
    value = parse(f"100u {letter}", "F")
    assert (value.low, value.high) == pytest.approx((1e-4 - limits[0] * 1e-6, 1e-4 + limits[1] * 1e-6))


@pytest.mark.parametrize(("letter", "picofarad"), [("B", 0.1), ("C", 0.25), ("D", 0.5), ("F", 1), ("G", 2)])
def test_letters_of_small_capacitors(letter, picofarad):
    """IEC 60062: below 10 pF the letters are picofarads."""
    value = parse(f"4p7 {letter}", "F")
    half = picofarad * 1e-12
    assert (value.low, value.high) == pytest.approx((4.7e-12 - half, 4.7e-12 + half))
    assert parse(f"10p {letter}", "F").high == pytest.approx(10e-12 * (1 + SYMMETRICAL[letter] / 100))
