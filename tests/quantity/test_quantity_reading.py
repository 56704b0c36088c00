"""Values as text: what is read, what is refused, and the laws that reading keeps."""

from __future__ import annotations

import math
import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit.errors import BenchfitError, QuantityError
from benchfit.quantity import Toleranced, duration, parse, parse_spread

PREFIXES = {"p": 1e-12, "n": 1e-9, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "m": 1e-3, "k": 1e3, "M": 1e6, "G": 1e9}


@pytest.mark.parametrize(
    ("text", "unit", "nominal"),
    [
        ("4k7", "Ω", 4700),
        ("4.7k", "Ω", 4700),
        ("4.7 kΩ", "Ω", 4700),
        ("4.7\u00a0k\u2126", "Ω", 4700),
        ("4700 ohm", "Ω", 4700),
        ("4.7 kOhm", "ohm", 4700),
        (4700, "Ω", 4700),
        ("4700", "Ω", 4700),
        ("4.7e3", "Ω", 4700),
        ("100n", "F", 1e-7),
        ("0.1 uF", "F", 1e-7),
        ("0.1µF", "F", 1e-7),
        ("0.1μF", "F", 1e-7),
        ("100 nF", "F", 1e-7),
        ("125 V", "V", 125),
        ("-13.5 V", "V", -13.5),
        ("\u221213.5 V", "V", -13.5),
        ("3V3", "V", 3.3),
        ("12 Hz", "Hz", 12),
        ("83 ms", "s", 0.083),
        ("1m", "s", 1e-3),
        ("1M", "Ω", 1e6),
        ("50 %", "1", 0.5),
        ("0.63", "", 0.63),
        (0.63, "1", 0.63),
        ("25ppm", "1", 25e-6),
        ("0.5 V/us", "V/s", 5e5),
        ("1 V/ms", "V/s", 1e3),
        ("2 kV/s", "V/s", 2e3),
        ("-1 %/V", "1/V", -0.01),
        ("23 °C", "°C", 23),
        ("20 mK", "K", 0.02),
        ("1 µS", "S", 1e-6),
    ],
)
def test_a_value_without_tolerance(text, unit, nominal):
    """Everything the interface lists as a value is read, and its limits are the value itself."""
    value = parse(text, unit)
    assert value.nominal == pytest.approx(nominal, rel=1e-15)
    assert value.low == value.high == value.nominal
    assert not value.stated
    assert value.is_exact


@pytest.mark.parametrize(
    ("text", "unit", "nominal", "low", "high"),
    [
        ("100n 10%", "F", 100e-9, 90e-9, 110e-9),
        ("100n ±10%", "F", 100e-9, 90e-9, 110e-9),
        ("100n +/- 10 %", "F", 100e-9, 90e-9, 110e-9),
        ("10u -20%/+80%", "F", 10e-6, 8e-6, 18e-6),
        ("10u +80%/-20%", "F", 10e-6, 8e-6, 18e-6),
        ("10u -20/+80 %", "F", 10e-6, 8e-6, 18e-6),
        ("50 Ω −60 %/+200 %", "Ω", 50, 20, 150),
        ("1M J", "Ω", 1e6, 0.95e6, 1.05e6),
        ("4K7J", "Ω", 4700, 4465, 4935),
        ("470 J", "Ω", 470, 446.5, 493.5),
        ("90 V ± 6 V", "V", 90, 84, 96),
        ("90 V ± 600 mV", "V", 90, 89.4, 90.6),
        ("-15 V 5%", "V", -15, -15.75, -14.25),
        ("5 V ± 0", "V", 5, 5, 5),
        ("60..80 V", "V", 70, 60, 80),
        ("60 V .. 80 V", "V", 70, 60, 80),
        ("0 .. 3 mV", "V", 1.5e-3, 0, 3e-3),
        ("-5 .. 5 V", "V", 0, -5, 5),
        ("0.05 V, 0 .. 0.2 V", "V", 0.05, 0, 0.2),
        ("10..22k", "Ω", 16e3, 10e3, 22e3),
        ("0.56..0.75", "1", 0.655, 0.56, 0.75),
        ("48..52 %", "1", 0.5, 0.48, 0.52),
        ("50 % ± 2 %", "1", 0.5, 0.49, 0.51),
        ("0.5 ± 0.02", "1", 0.5, 0.48, 0.52),
        ("12.31 Hz 10ppm", "Hz", 12.31, 12.31 * (1 - 1e-5), 12.31 * (1 + 1e-5)),
        ("4.702 ± 0.011 kΩ", "Ω", 4702, 4691, 4713),
        ("2 V +0.5V/-0.1V", "V", 2, 1.9, 2.5),
    ],
)
def test_a_value_with_tolerance(text, unit, nominal, low, high):
    """Every way to write a tolerance gives the limits that it says."""
    value = parse(text, unit)
    assert (value.nominal, value.low, value.high) == pytest.approx((nominal, low, high), rel=1e-12, abs=1e-18)
    assert value.stated


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("", "Ω"),
        ("  ", "Ω"),
        ("ohm", "Ω"),
        ("4x7", "Ω"),
        ("4k7k", "Ω"),
        ("4.7k3", "Ω"),
        ("4,7k", "Ω"),
        ("4.7 kilo", "Ω"),
        ("4.7 KHz", "Hz"),
        ("100N", "F"),
        ("10U", "F"),
        ("1 mv", "V"),
        ("5 V", "Ω"),
        ("5 Ω", "V"),
        ("4R7", "F"),
        ("4K7", "F"),
        ("10%", "Ω"),
        ("1M 5", "Ω"),
        ("1M Y", "Ω"),
        ("12 Hz J", "Hz"),
        ("90 V ± 6", "V"),
        ("90 V 6 V", "V"),
        ("90 V ± -6 V", "V"),
        ("90 V ± 6 A", "V"),
        ("5 V +5%/+10%", "V"),
        ("5 V -5%/-10%", "V"),
        ("80..60 V", "V"),
        ("60 V..80", "V"),
        ("1...5 V", "V"),
        ("1..2..3 V", "V"),
        ("5 V, 6 .. 7 V", "V"),
        ("60..80 V 5%", "V"),
        ("1e999", "V"),
        ("nan", "V"),
        ("inf", "V"),
        ("1_000", "Ω"),
        ("0x10", "Ω"),
        ("97 % x", "1"),
        ("0.5k", "1"),
        ("470 K", "Ω"),
        ("470 M", "Ω"),
        ("470J", "F"),
        ("5 m", "°C"),
        ("10m/s", "V/s"),
        (float("nan"), "V"),
        (float("inf"), "Ω"),
        (True, "Ω"),
        (None, "Ω"),
        ([1], "Ω"),
        ("4k7 5% 5%", "Ω"),
        ("4k7 5%J", "Ω"),
        ("--5 V", "V"),
        ("5 V ±", "V"),
        ("± 5 V", "V"),
    ],
)
def test_anything_else_is_refused(text, unit):
    """An error names the key, the text and what would be accepted, and no part of a text is ever ignored."""
    with pytest.raises(QuantityError) as refusal:
        parse(text, unit, key="parts.X")
    says = str(refusal.value)
    assert says.startswith("parts.X: ")
    assert str(text) in says
    assert "write" in says
    assert "\n" not in says
    assert isinstance(refusal.value, BenchfitError)
    assert isinstance(refusal.value, ValueError)


def test_a_space_keeps_a_letter_a_tolerance():
    """After a prefix and a space F is the letter for 1 %, not the farad; without the space it is the
    farad."""
    assert parse("100n F", "F").high == pytest.approx(101e-9)
    assert not parse("100nF", "F").stated


@given(
    digits=st.integers(1, 9999),
    power=st.integers(-3, 3),
    prefix=st.sampled_from(sorted(PREFIXES)),
    unit=st.sampled_from(["F", "V", "A", "Hz", "S"]),
    space=st.sampled_from(["", " "]),
)
def test_a_prefix_is_its_factor(digits, power, prefix, unit, space):
    """x + prefix + unit is x times the prefix's factor to the last bit, with and without the unit."""
    number = f"{digits}e{power}"
    factor = round(math.log10(PREFIXES[prefix]))
    exact = float(f"{digits}e{power + factor}")
    assert parse(f"{number}{space}{prefix}{unit}", unit).nominal == exact
    assert parse(f"{number}{prefix}", unit).nominal == exact


@given(left=st.integers(0, 999), right=st.integers(0, 999), letter=st.sampled_from("pnumkM"))
def test_a_letter_for_the_decimal_mark(left, right, letter):
    """4k7 is 4.7k, whatever the digits (IEC 60062)."""
    coded = parse(f"{left}{letter}{right}", "F").nominal
    plain = parse(f"{left}.{right}{letter}", "F").nominal
    assert coded == plain


@given(
    nominal=st.floats(1e-12, 1e12),
    percent=st.floats(0, 99).map(lambda x: round(x, 3)),
    unit=st.sampled_from(["Ω", "F", "V", "s", "Hz", "A", "1"]),
)
def test_a_tolerance_encloses_its_nominal(nominal, percent, unit):
    """The limits lie percent of the nominal to either side; a stated tolerance needs no default."""
    name = "" if unit == "1" else unit
    value = parse(f"{nominal!r} {name} {percent}%".replace("  ", " "), unit, default_tolerance="1 %")
    assert value.low <= value.nominal <= value.high
    assert value.stated
    assert value.high - value.nominal == pytest.approx(nominal * percent / 100, rel=1e-6, abs=nominal * 1e-12)


@given(st.text(max_size=12))
def test_no_text_does_anything_but_parse_or_refuse(text):
    """Random text is a value or a QuantityError, and a value is finite with limits in order."""
    for unit in ("Ω", "F", "V", "1", "V/s"):
        try:
            value = parse(text, unit)
        except QuantityError:
            continue
        assert value.low <= value.nominal <= value.high
        assert math.isfinite(value.low)
        assert math.isfinite(value.high)


WHOLE = (
    ("4k7 5%", "Ω"),
    ("100n", "F"),
    ("60..80 V", "V"),
    ("1M J", "Ω"),
    ("0.63", "1"),
    ("12.31 Hz 10ppm", "Hz"),
)

LEFTOVERS = st.text(st.sampled_from("0123459 .%±+-/JFVΩkmnRµpszxé\u00a0"), min_size=1, max_size=3)


@given(st.sampled_from(WHOLE), LEFTOVERS)
def test_leftovers_are_refused(whole, leftover):
    """A valid text with something after it is refused, or means something else; it is never cut short."""
    text, unit = whole
    plain = parse(text, unit)
    try:
        value = parse(text + leftover, unit)
    except QuantityError:
        return
    is_same = (value.nominal, value.low, value.high) == (plain.nominal, plain.low, plain.high)
    says_nothing = leftover.strip() in ("", unit) or not leftover.strip().strip("0")
    assert says_nothing or not is_same


def test_a_default_tolerance_is_taken_where_none_is_stated():
    """The default's limits are there, and ``stated`` says that they were not in the text."""
    value = parse("4k7", "Ω", default_tolerance="5 %")
    assert (value.low, value.high) == pytest.approx((4465, 4935))
    assert not value.stated
    assert parse("10 V", "V", default_tolerance="± 3 V").low == 7
    assert parse("10 V ± 0", "V", default_tolerance="5 %").is_exact


def test_the_prior_is_the_rectangle():
    """Half-width/√3 about the middle of the limits (JCGM 100:2008, 4.3.7), also where the nominal lies
    aside."""
    mean, sd = parse("90 V ± 6 V", "V").prior_linear()
    assert (mean, sd) == pytest.approx((90, 6 / math.sqrt(3)))
    mean, sd = parse("10u -20%/+80%", "F").prior_linear()
    assert (mean, sd) == pytest.approx((13e-6, 5e-6 / math.sqrt(3)))
    mean, sd = parse("100n 10%", "F").prior_log()
    half = 0.5 * math.log(1.1 / 0.9)
    assert (mean, sd) == pytest.approx((math.log(1e-7) + 0.5 * math.log(1.1 * 0.9), half / math.sqrt(3)))
    assert parse("5 V ± 0", "V").prior_linear() == (5.0, 0.0)


def test_the_rectangle_of_a_handbook_value():
    """JCGM 100:2008, 4.3.7, example 2 (from memory): 16.52e-6/°C, error not over 0.40e-6/°C, gives u =
    0.23e-6/°C."""
    assert parse("16.52e-6 ± 0.40e-6", "1").prior_linear()[1] == pytest.approx(0.23e-6, abs=0.005e-6)


def test_a_log_prior_needs_a_positive_lower_limit():
    """ln 0 does not exist, and the sentence says which text asks for it."""
    with pytest.raises(QuantityError, match=r"0 \.\. 3 mV"):
        parse("0 .. 3 mV", "V").prior_log()


def test_a_period_becomes_a_frequency():
    """The limits change places."""
    period = parse("83 ms 2%", "s")
    frequency = period.reciprocal("Hz")
    assert frequency.nominal == pytest.approx(1 / 0.083)
    assert (frequency.low, frequency.high) == pytest.approx((1 / (0.083 * 1.02), 1 / (0.083 * 0.98)))
    assert frequency.unit == "Hz"
    assert frequency.stated


@pytest.mark.parametrize(
    ("text", "about", "low", "high"),
    [
        ("± 3 V", 55, 52, 58),
        ("± 10 %", 2.5, 2.25, 2.75),
        ("10 %", 2.5, 2.25, 2.75),
        ("-60 %/+200 %", 50, 20, 150),
        ("−60 %/+200 %", 50, 20, 150),
        ("-1 V/+2 V", 5, 4, 7),
        ("± 10 %", -13.5, -14.85, -12.15),
        ("± 0", 5, 5, 5),
    ],
)
def test_a_spread_about_a_nominal(text, about, low, high):
    """A tolerance alone is applied to a nominal that is computed elsewhere."""
    value = parse_spread(text, "V").about(about)
    assert (value.nominal, value.low, value.high) == pytest.approx((about, low, high))
    assert not value.stated


@pytest.mark.parametrize("text", ["", "5", "5 V ± 3 V", "± 3", "± 3 A", "+5%/+10%", "J5"])
def test_a_spread_is_a_tolerance_alone(text):
    """A value is no tolerance, nor is a bare number where there is a unit."""
    with pytest.raises(QuantityError, match="tolerance"):
        parse_spread(text, "V", key="V_maintain")


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("60s", 60),
        ("5m", 300),
        ("48h", 172800),
        ("2d", 172800),
        ("1h30m", 5400),
        ("500ms", 0.5),
        ("7", 7),
        (1.5, 1.5),
        ("5 min", 300),
        ("1h 30m", 5400),
    ],
)
def test_durations_have_minutes(text, seconds):
    """On the command line m is a minute, as clocks have it."""
    assert duration(text) == pytest.approx(seconds)


@pytest.mark.parametrize("text", ["", "5x", "m", "-5s", "1h30", "5 s m"])
def test_other_durations_are_refused(text):
    """The sentence names the option and what would do."""
    with pytest.raises(QuantityError, match=r"--every: .* is not a duration; write"):
        duration(text, key="--every")


def test_an_error_survives_pickling():
    """Worker processes hand their errors back."""
    with pytest.raises(QuantityError) as refusal:
        parse("foo", "Ω", key="R")
    again = pickle.loads(pickle.dumps(refusal.value))
    assert str(again) == str(refusal.value)
    assert again.facts == refusal.value.facts


def test_a_value_is_frozen():
    """Nothing changes a value after it was read."""
    value = parse("4k7", "Ω")
    assert value == Toleranced(4700, 4700, 4700, "Ω", False, "4k7")
    with pytest.raises(AttributeError):
        value.nominal = 1.0  # type: ignore[misc]
