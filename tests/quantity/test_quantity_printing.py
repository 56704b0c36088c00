"""Values with their uncertainty as text."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from benchfit.quantity import parse, percent, si


@pytest.mark.parametrize(
    ("value", "unit", "u", "text"),
    [
        (4702, "Ω", 5.5, "4.702 ± 0.011 kΩ"),
        (4700, "Ω", None, "4.7 kΩ"),
        (1e-7, "F", None, "100 nF"),
        (2.2222e-3, "s", 1.1e-6, "2.2222 ± 0.0022 ms"),
        (999.96, "Hz", 0.005, "999.960 ± 0.010 Hz"),
        (999.99996, "Hz", 0.0005, "1.0000000 ± 0.0000010 kHz"),
        (999.999, "Hz", None, "1 kHz"),
        (0.0, "V", None, "0 V"),
        (0.0, "V", 0.001, "0.0 ± 2.0 mV"),
        (-13.5, "V", 0.1, "-13.50 ± 0.20 V"),
        (5e5, "V/s", 5e3, "0.500 ± 0.010 V/µs"),
        (0.63, "1", 0.01, "0.630 ± 0.020"),
        (23.0, "°C", 0.5, "23.0 ± 1.0 °C"),
        (math.nan, "V", 0.1, "unknown"),
        (math.inf, "Ω", None, "unknown"),
        (12.0, "Hz", math.nan, "12 Hz"),
        (12.0, "Hz", 0.0, "12 Hz"),
        (12.0, "Hz", math.inf, "12 Hz"),
    ],
)
def test_si(value, unit, u, text):
    """Two significant digits of U = 2u, as many decimals of the value, one prefix for both."""
    assert si(value, unit, u) == text


def test_gum_rounding():
    """JCGM 100:2008, 7.2.2 and 7.2.6 (from memory): 100.021 47 g with 0.35 mg; 10.057 62 Ω with 27 mΩ is
    10.058 Ω."""
    assert si(100.02147, "1", 0.00035, k=1) == "100.02147 ± 0.00035"
    assert si(10.05762, "Ω", 0.027, k=1) == "10.058 ± 0.027 Ω"


@pytest.mark.parametrize(
    ("x", "u", "text"),
    [
        (0.162, None, "16.2 %"),
        (0.162, 0.002, "16.20 ± 0.40 %"),
        (1.5, None, "150 %"),
        (-0.00012, 1e-6, "-0.01200 ± 0.00020 %"),
        (0.0, None, "0 %"),
        (math.nan, None, "unknown"),
    ],
)
def test_percent(x, u, text):
    """Fractions in per cent."""
    assert percent(x, u) == text


def test_percent_signed():
    """A plus sign where one is asked for, none at zero."""
    assert percent(0.05, signed=True) == "+5 %"
    assert percent(-0.05, signed=True) == "-5 %"
    assert percent(0.0, signed=True) == "0 %"


@given(
    value=st.floats(1e-14, 1e13),
    share=st.floats(1e-9, 0.9),
    sign=st.sampled_from([1, -1]),
    unit=st.sampled_from(["Ω", "F", "V", "A", "s", "Hz"]),
)
def test_what_is_printed_can_be_read(value, share, sign, unit):
    """Text → value gives back the value within the last digit shown, and U within its two digits."""
    u = value * share
    text = si(sign * value, unit, u, k=1)
    again = parse(text, unit)
    half = 0.5 * (again.high - again.low)
    assert half == pytest.approx(u, rel=0.051)
    assert abs(again.nominal - sign * value) <= 0.051 * u * (1 + 1e-6) + 1e-12 * value


@given(st.floats(1e-14, 1e13), st.sampled_from(["Ω", "F", "V", "Hz"]))
def test_four_digits_without_u(value, unit):
    """Without u the value has four significant digits, and one to three of them before the point."""
    text = si(value, unit)
    assert parse(text, unit).nominal == pytest.approx(value, rel=6e-4)
    before = re.match(r"\d+", text)
    assert before
    assert len(before[0]) <= 3 or value > 9.99e14


@given(st.floats(), st.one_of(st.none(), st.floats()), st.sampled_from(["Ω", "V", "1", "V/s", "°C", "%"]))
def test_never_nan_or_inf(value, u, unit):
    """Whatever comes in, no NaN and no infinity is shown."""
    assume(u is None or not 0 < abs(u) < 1e-300)
    for text in (si(value, unit, u), percent(value, u)):
        assert not re.search(r"nan|inf", text, re.IGNORECASE)
