"""Text ↔ value with unit and tolerance: the one place that knows how a value is written.

A value is a number with an SI prefix and a unit ("4.7 kΩ", "0.1 uF"), or an RKM code ("4k7", IEC 60062); a
tolerance may follow it. SI prefixes are case-sensitive. What is left over is an error, never ignored.
"""

from benchfit.quantity.printing import percent, si
from benchfit.quantity.reading import duration, parse, parse_spread
from benchfit.quantity.value import Spread, Toleranced

__all__ = ["Spread", "Toleranced", "duration", "parse", "parse_spread", "percent", "si"]
