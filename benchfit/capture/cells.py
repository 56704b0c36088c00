"""What one cell of a table can be: a number, nothing, an overload word, or text."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass

NUMBER, EMPTY, OVERLOAD, TEXT = "n", "e", "o", "x"

# A decimal comma needs a digit after it: "5," is a cell and a separator, never a number.
_NUMBERS = {
    ".": re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"),
    ",": re.compile(r"[+-]?(?:\d+(?:,\d+)?|,\d+)(?:[eE][+-]?\d+)?"),
}

# Words that instruments and loggers write where the converter ran out of range; common practice.
OVERLOAD_WORDS = frozenset((
    "ol", "o.l", "over", "overload", "overloaded", "overflow", "overrange", "overrun", "ovld", "ovl", "ovfl", "ovrng",
    "ovr", "oor", "out-of-range", "out_of_range", "outofrange", "out of range", "over range", "under range", "under",
    "underflow", "underrange", "clip", "clipped", "clipping", "sat", "saturated", "saturation", "off scale", "offscale",
    "inf", "infinity", "∞", "1.#inf", "1.#inf00", "#inf", "übersteuert", "überlauf", "overlast", "saturé",
    "dépassement", "****", "*****", ">>>>", "<<<<",
))  # fmt: skip

# Words for "no value"; the first line is what the C engine of pandas takes for a missing value too.
_MISSING_WORDS = frozenset((
    "nan", "na", "n/a", "#n/a", "#na", "null", "none", "<na>", "1.#ind", "1.#qnan", "-nan",
    "nil", "-", "--", "---", "----", "?", "invalid", "missing", "no-data", "nodata", "undefined",
))  # fmt: skip

# SCPI-1999, vol. 1, 7.2.1.5: 9.9E37 stands for infinity and 9.91E37 for "not a number".
SCPI_INFINITY = 9.9e37
SCPI_NOT_A_NUMBER = 9.91e37


def is_number(cell: str, decimal: str) -> bool:
    """Whether ``cell`` (without blanks around it) is a number with this decimal mark."""
    return _NUMBERS[decimal].fullmatch(cell) is not None


def number(cell: str, decimal: str) -> float:
    """The number in ``cell``; NaN where there is none."""
    if not is_number(cell, decimal):
        return math.nan
    return float(cell.replace(",", "."))


def is_overload(cell: str) -> bool:
    """Whether ``cell`` is a word for a value out of the converter's range, with or without a sign."""
    word = cell.casefold()
    return word in OVERLOAD_WORDS or word.lstrip("+-> <").strip(" !.") in OVERLOAD_WORDS


def is_missing(cell: str) -> bool:
    """Whether ``cell`` is empty or a word for a missing value."""
    return not cell or cell.casefold() in _MISSING_WORDS


def kind(cell: str, decimal: str) -> str:
    """NUMBER, EMPTY, OVERLOAD or TEXT."""
    if not cell:
        return EMPTY
    if is_number(cell, decimal):
        return NUMBER
    if is_missing(cell):
        return EMPTY
    return OVERLOAD if is_overload(cell) else TEXT


@dataclass(frozen=True)
class Precision:
    """How finely a column is printed: with a ``fixed`` last digit, or (0) with so many ``digits`` in all."""

    fixed: float = 0.0
    digits: int = 17

    def quantum(self, largest: float) -> float:
        """One step of the last printed digit of a value of this size."""
        if self.fixed or not (largest > 0 and math.isfinite(largest)):
            return self.fixed
        return float(10.0 ** (math.floor(math.log10(largest)) - self.digits + 1))


def precision(cells: Iterable[str], decimal: str) -> Precision:
    """Precision with which the numbers among ``cells`` are printed."""
    places: set[int] = set()
    digits = 1
    floating = False
    for cell in cells:
        if is_number(cell, decimal):
            mantissa, _, exponent = cell.lower().lstrip("+-").replace(",", ".").partition("e")
            whole, _, fraction = mantissa.partition(".")
            floating = floating or bool(exponent)
            places.add(len(fraction))
            digits = max(digits, len((whole + fraction).lstrip("0")))
    if not places:
        return Precision()
    return Precision(10.0 ** -places.pop()) if not floating and len(places) == 1 else Precision(0.0, digits)
