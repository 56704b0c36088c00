"""Text → value with unit and tolerance."""

from __future__ import annotations

import math
import re

from benchfit.errors import QuantityError
from benchfit.quantity.value import Spread, Toleranced

_UNITS = {
    "Ω": ("Ω", "\u2126", "ohm", "Ohm"),
    "F": ("F",),
    "V": ("V",),
    "A": ("A",),
    "s": ("s",),
    "Hz": ("Hz",),
    "S": ("S",),
    "K": ("K",),
    "°C": ("°C",),
    "V/s": ("V/s",),
    "1/V": ("1/V", "/V"),
}
_PREFIXES = {
    "f": 1e-15, "p": 1e-12, "n": 1e-9, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "m": 1e-3,
    "k": 1e3, "M": 1e6, "G": 1e9, "T": 1e12,
}  # fmt: skip
_EXAMPLES = {
    "Ω": '"4k7", "4.7 kΩ 5%", "4700 ohm ± 50 ohm"',
    "F": '"100n", "0.1 uF 10%", "4n7 J"',
    "V": '"9 V", "90 V ± 6 V", "60..80 V"',
    "A": '"10u", "10 uA 5%"',
    "s": '"83 ms", "10 us ± 2 us"',
    "Hz": '"12 Hz", "1.2 kHz ± 1%"',
    "V/s": '"500 kV/s", "0.5 V/us 20%"',
    "1/V": '"0.01 1/V", "1 %/V"',
    "K": '"20 mK"',
    "°C": '"23 °C"',
    "S": '"1 uS"',
}
# IEC 60062 letters, per cent of the value: (down, up).
_LETTERS = {
    "E": (0.005, 0.005), "L": (0.01, 0.01), "P": (0.02, 0.02), "W": (0.05, 0.05), "B": (0.1, 0.1),
    "C": (0.25, 0.25), "D": (0.5, 0.5), "F": (1.0, 1.0), "G": (2.0, 2.0), "H": (3.0, 3.0), "J": (5.0, 5.0),
    "K": (10.0, 10.0), "M": (20.0, 20.0), "N": (30.0, 30.0),
    "Q": (10.0, 30.0), "T": (10.0, 50.0), "S": (20.0, 50.0), "Z": (20.0, 80.0),
}  # fmt: skip
_PICOFARAD_LETTERS = {"B": 0.1, "C": 0.25, "D": 0.5, "F": 1.0, "G": 2.0}  # of capacitors under 10 pF, in pF
_NUMBER = r"(?:\d+(?:\.\d+)?|\.\d+)(?:[eE][+-]?\d+)?"
_SIGNED = rf"[+-]?{_NUMBER}"
_LIMIT = r"[^,]*?[^,.]"
_SHARES = {"%": 1e-2, "ppm": 1e-6}


def parse(
    text_or_number: object,
    unit: str,
    *,
    key: str = "",
    default_tolerance: str | None = None,
    ratio: bool = False,
) -> Toleranced:
    """A value with its tolerance, in the base unit.

    Parameters
    ----------
    text_or_number : str, int or float
        As in a build sheet; a bare number is in the base unit (a ratio as a fraction).
    unit : str
        Base unit that is wanted, "" or "1" for a ratio.
    key : str
        What the value is of, for the error's sentence.
    default_tolerance : str, optional
        Tolerance ("5 %", "± 3 V") taken where the text has none; without it the limits are the nominal.
    ratio : bool
        The value is a ratio; the same as a unit of "1". A ratio may be written with % or ppm, and a tolerance
        in per cent is still a share of the value: "50 % ± 2 %" is 0.49 to 0.51.

    Raises
    ------
    QuantityError
        Where anything is left over, the unit is another, or a limit lies on the wrong side of the nominal.

    Source: SI brochure (prefixes), IEC 60062:2016 (RKM code and tolerance letters).
    """
    reader = _Reader("1" if ratio else _canonical(unit), key, text_or_number)
    found = reader.read()
    if found.stated or default_tolerance is None:
        return found
    spread = parse_spread(default_tolerance, reader.unit, key=key)
    return spread.about(found.nominal, stated=False, text=found.text)


def parse_spread(text: str, unit: str, *, key: str = "") -> Spread:
    """A tolerance alone ("± 3 V", "10 %", "-60 %/+200 %", "J") of a nominal that is computed elsewhere.

    Raises
    ------
    QuantityError
        Where the text is no tolerance of a quantity in ``unit``.
    """
    reader = _Reader(_canonical(unit), key, text)
    spread = reader.spread(reader.clean)
    if spread is None:
        expected = '"± 10 %"' + (f', "± 3 {reader.unit}"' if reader.unit != "1" else "") + ' or "-20 %/+80 %"'
        raise QuantityError(f'{_of(key)}"{text}" is not a tolerance; write {expected}', text=text, key=key)
    return spread


def duration(text_or_number: object, *, key: str = "") -> float:
    """A stretch of time on a command line, in s: "60s", "5m", "48h", "1h30m", "500ms", or a number of s.

    Here m is minutes, as clocks have it; :func:`parse` has the SI's m.
    """
    unit_seconds = {"ms": 1e-3, "s": 1.0, "m": 60.0, "min": 60.0, "h": 3600.0, "d": 86400.0}
    text = str(text_or_number).strip()
    if re.fullmatch(_NUMBER, text):
        return float(text)
    one = rf"({_NUMBER})\s*(ms|s|min|m|h|d)"
    if not re.fullmatch(rf"(?:{one}\s*)+", text):
        expected = '"60s", "5m", "48h" or a number of seconds'
        raise QuantityError(f'{_of(key)}"{text}" is not a duration; write {expected}', text=text, key=key)
    return sum(float(number) * unit_seconds[name] for number, name in re.findall(one, text))


class _Reader:
    """Reads one text; holds what an error's sentence needs."""

    def __init__(self, unit: str, key: str, given: object) -> None:
        self.unit, self.key, self.given = unit, key, given
        self.clean = re.sub(r"\s+", " ", str(given)).strip().replace("\u2212", "-").replace("…", "..")

    def read(self) -> Toleranced:
        if isinstance(self.given, bool) or not isinstance(self.given, str | int | float):
            raise self.refusal()
        if not isinstance(self.given, str):
            return self.toleranced(float(self.given), None)
        limits = re.fullmatch(rf"(?:(.+?), )?({_LIMIT})\.\.(?!\.)({_LIMIT})", self.clean)
        if limits:
            return self.limits(limits[1], limits[2].strip(), limits[3].strip())
        whole = self.value(self.clean)
        if whole is not None:
            return self.toleranced(whole, None)
        for head, tail in self.splits():
            shared = self.shared(head, tail)
            if shared is not None:
                return shared
            value, spread = self.value(head), self.spread(tail, value_text=head)
            if value is not None and spread is not None:
                return self.toleranced(value, spread)
        raise self.refusal()

    def splits(self) -> list[tuple[str, str]]:
        """The ways to cut the text into a value and a tolerance."""
        patterns = (
            r"(.+?)\s*((?:±|\+/-|\+-).+)",
            rf"(.+?)\s*(-\s*{_NUMBER}[^/]*/\s*\+.+)",
            rf"(.+?)\s*(\+\s*{_NUMBER}[^/]*/\s*-.+)",
            rf"(.+?)\s+({_NUMBER}\s*(?:%|ppm))",
            r"(.+?)\s*([A-Z])",
        )
        found = (re.fullmatch(pattern, self.clean) for pattern in patterns)
        return [(m[1], m[2]) for m in found if m]

    def limits(self, nominal: str | None, first: str, second: str) -> Toleranced:
        """"60..80 V": the nominal is the middle, unless it stands before ("0.05 V, 0 .. 0.2 V")."""
        low, high = self.pair(first, second)
        middle = self.value(nominal) if nominal else None
        if low is None or high is None or (nominal and middle is None):
            raise self.refusal()
        if middle is None:
            middle = 0.5 * (low + high)
        if not low <= middle <= high:
            raise self.refusal("the lower limit stands first, and the nominal lies between them")
        return Toleranced(middle, low, high, self.unit, True, str(self.given))

    def pair(self, first: str, second: str) -> tuple[float | None, float | None]:
        """Two values of one unit, which the first may leave to the second."""
        high = self.value(second)
        if not re.fullmatch(_SIGNED, first):
            is_bare = re.fullmatch(_SIGNED, second) is not None and self.unit != "1" and high != 0
            return (None, None) if is_bare else (self.value(first), high)
        unit = re.fullmatch(rf"{_SIGNED}( ?[^\d ]*)", second)
        return self.value(first + unit[1] if unit else first), high

    def shared(self, head: str, tail: str) -> Toleranced | None:
        """"4.702 ± 0.011 kΩ": a bare value takes the unit that follows its tolerance."""
        match = re.fullmatch(r"(?:±|\+/-|\+-)\s*(.+)", tail)
        if not match or self.unit == "1" or not re.fullmatch(_SIGNED, head):
            return None
        value, half = self.pair(head, match[1])
        if value is None or half is None or re.fullmatch(_SIGNED, match[1]):
            return None
        return self.toleranced(value, Spread(half, half, False, self.unit, tail))

    def toleranced(self, value: float, spread: Spread | None) -> Toleranced:
        if not math.isfinite(value):
            raise self.refusal("the value must be finite")
        if spread is None:
            return Toleranced(value, value, value, self.unit, False, str(self.given))
        if spread.down < 0 or spread.up < 0:
            raise self.refusal("the limits must enclose the value")
        return spread.about(value, stated=True, text=str(self.given))

    def value(self, text: str) -> float | None:
        """One value without tolerance, None where the text is none."""
        plain = re.fullmatch(rf"({_SIGNED}) ?([^\d ]*|1/V)", text)
        if plain:
            factor = self.factor(plain[2], is_spaced=" " in text)
            return None if factor is None else _scaled(plain[1], factor)
        coded = re.fullmatch(r"([+-]?)(\d*)([^\d\s.+-])(\d+) ?([^\d ]*)", text)
        if not coded or self.unit == "1":
            return None
        factor = self.mark(coded[3])
        if factor is None or (coded[5] and coded[5] not in _UNITS[self.unit]):
            return None
        if text.endswith(" F"):
            return None  # as in "100n F", where it is the tolerance letter
        return _scaled(f"{coded[1]}{coded[2] or '0'}.{coded[4]}", factor)

    def mark(self, letter: str) -> float | None:
        """The factor of a letter in place of the decimal mark (IEC 60062; the V of 3V3: common practice)."""
        if letter == "R":
            return 1.0 if self.unit == "Ω" else None
        if letter == "K":
            return 1e3 if self.unit == "Ω" else None
        if letter == self.unit and letter in "FV":
            return 1.0
        return _PREFIXES.get(letter)

    def factor(self, suffix: str, *, is_spaced: bool) -> float | None:
        """The factor to the base unit of what follows a number; None where it is no prefix and unit of it."""
        if not suffix:
            return 1.0
        if self.unit == "1":
            return _SHARES.get(suffix)
        if is_spaced and suffix in ("M", "G", "T", "K") and self.unit in ("Ω", "F", "K"):
            raise self.refusal(f"{suffix} after a space may be a prefix or a tolerance letter")
        if self.unit == "V/s":
            return _slope(suffix)
        if self.unit == "1/V":
            return {"1/V": 1.0, "/V": 1.0, "%/V": 1e-2, "ppm/V": 1e-6}.get(suffix)
        spellings = _UNITS[self.unit]
        if suffix in spellings or (suffix == "R" and self.unit == "Ω"):
            return 1.0
        if self.unit == "°C":
            return None
        prefix, rest = suffix[0], suffix[1:]
        if rest and rest not in spellings:
            return None
        return 1e3 if prefix == "K" and self.unit == "Ω" else _PREFIXES.get(prefix)

    def spread(self, text: str, *, value_text: str = "") -> Spread | None:
        """One tolerance, None where the text is none."""
        letter = self.letter(text, value_text)
        if letter is not None:
            return letter
        half = re.fullmatch(r"(±|\+/-|\+-)?\s*([^\s+-].*)", text)
        if half and "/-" not in half[2] and "/+" not in half[2]:
            size = self.size(half[2], may_be_absolute=half[1] is not None)
            return None if size is None else Spread(size[0], size[0], size[1], self.unit, text)
        sides = re.fullmatch(r"([+-])\s*([^/\s].*?)\s*/\s*([+-])\s*(\S.*)", text)
        if not sides or sides[1] == sides[3]:
            return None
        unit = re.fullmatch(rf"{_NUMBER}( ?[^\d ]*)", sides[4])
        first = sides[2] + unit[1] if unit and re.fullmatch(_NUMBER, sides[2]) else sides[2]
        one, two = self.size(first), self.size(sides[4])
        if one is None or two is None or one[1] != two[1]:
            return None
        down, up = (one, two) if sides[1] == "-" else (two, one)
        return Spread(down[0], up[0], down[1], self.unit, text)

    def size(self, text: str, *, may_be_absolute: bool = True) -> tuple[float, bool] | None:
        """How far, and whether that is a share of the value."""
        share = re.fullmatch(rf"({_NUMBER})\s*(%|ppm)", text)
        if share:
            return _scaled(share[1], _SHARES[share[2]]), True
        if not may_be_absolute:
            return None
        bare = re.fullmatch(_NUMBER, text) is not None
        if bare and self.unit != "1" and float(text) != 0:
            return None
        value = self.value(text)
        return None if value is None or value < 0 else (value, False)

    def letter(self, text: str, value_text: str) -> Spread | None:
        """A tolerance letter of IEC 60062, which a resistor or a capacitor may carry."""
        if text not in _LETTERS or self.unit not in ("Ω", "F"):
            return None
        if value_text and re.fullmatch(_SIGNED, value_text) and not self.clean.endswith(f" {text}"):
            return None
        value = self.value(value_text) if value_text else None
        if self.unit == "F" and value is not None and value < 9.999999e-12 and text in _PICOFARAD_LETTERS:
            half = _PICOFARAD_LETTERS[text] * 1e-12
            return Spread(half, half, False, self.unit, text)
        down, up = _LETTERS[text]
        return Spread(down / 100, up / 100, True, self.unit, text)

    def refusal(self, why: str = "") -> QuantityError:
        examples = _EXAMPLES.get(self.unit, '"0.63", "50 %", "0.63 ± 5%"')
        is_ratio = self.unit == "1"
        base = "a fraction" if is_ratio else f"a number in {self.unit}"
        kind = "a ratio" if is_ratio else f"a value in {self.unit}"
        shown = f'"{self.given}"' if isinstance(self.given, str) else repr(self.given)
        return QuantityError(
            f"{_of(self.key)}{shown} is not {kind}{f' ({why})' if why else ''}; "
            f"write {base}, or text such as {examples}",
            text=str(self.given), key=self.key, expected=examples,
        )  # fmt: skip


def _of(key: str) -> str:
    return f"{key}: " if key else ""


def _canonical(unit: str) -> str:
    """The unit in the spelling that results carry."""
    if unit in ("", "1"):
        return "1"
    for name, spellings in _UNITS.items():
        if unit in spellings:
            return name
    raise QuantityError(f'"{unit}" is no unit that can be read; known are {", ".join(_UNITS)}', text=unit)


def _slope(suffix: str) -> float | None:
    """The factor of a slope such as "kV/s" or "V/us" to V/s."""
    match = re.fullmatch(r"(.?)V/(.?)s", suffix)
    if not match:
        return None
    above = _PREFIXES.get(match[1]) if match[1] else 1.0
    below = _PREFIXES.get(match[2]) if match[2] else 1.0
    return None if above is None or below is None else above / below


def _scaled(number: str, factor: float) -> float:
    """number · factor, rounded once: 33.2 n is the double nearest to 33.2e-9, not 33.2 times that of 1e-9."""
    exponent = round(math.log10(factor))
    mantissa, _, power = number.lower().partition("e")
    return float(f"{mantissa}e{int(power or 0) + exponent}")
