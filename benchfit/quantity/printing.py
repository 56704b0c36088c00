"""Value with uncertainty → text with an SI prefix."""

from __future__ import annotations

import math

_STEPS = (
    ("f", -15), ("p", -12), ("n", -9), ("µ", -6), ("m", -3), ("", 0), ("k", 3), ("M", 6), ("G", 9), ("T", 12),
)  # fmt: skip
_UNKNOWN = "unknown"
# Beyond these no prefix helps.
_SMALL, _LARGE = 1e-18, 1e18


def si(value: float, unit: str, u: float | None = None, k: float = 2) -> str:
    """A value with its expanded uncertainty U = k·u and an SI prefix, as "4.702 ± 0.011 kΩ".

    U has two significant digits and the value as many decimals (JCGM 100:2008, 7.2.6); without u the value
    has four significant digits. The prefix goes by the value (by U where that is larger). What is not finite
    is "unknown".
    """
    if not math.isfinite(value):
        return _UNKNOWN
    half = _expanded(u, k)
    size = max(abs(value), half)
    if unit in ("", "1", "°C", "1/V", "%"):
        prefix, exponent = "", 0
    elif unit == "V/s" and size >= 1e3:
        factor, name = (1e-6, "V/µs") if size >= 1e5 else (1e-3, "V/ms")
        return si(value * factor, name, None if u is None else u * factor, k)
    elif unit.startswith("V/") and unit != "V/s":
        prefix, exponent = "", 0
    else:
        prefix, exponent = _prefix(value, half)
    name = "" if unit == "1" else unit
    return f"{_with_half(value, half, exponent)} {prefix}{name}".rstrip()


def percent(x: float, u: float | None = None, *, k: float = 2, signed: bool = False) -> str:
    """A fraction in per cent with its expanded uncertainty, as "16.20 ± 0.40 %"; ``signed``: with a plus."""
    if not abs(x) < 1e300:
        return _UNKNOWN
    text = _with_half(x, _expanded(u, k), -2, digits=3)
    return f"{'+' if signed and x > 0 else ''}{text} %"


def _expanded(u: float | None, k: float) -> float:
    return k * abs(u) if u is not None and abs(u) < 1e300 else 0.0


def _prefix(value: float, half: float) -> tuple[str, int]:
    """The SI prefix with which the number as printed has one to three digits before the point."""
    size = max(abs(value), half)
    if not _SMALL < size < _LARGE:
        return "", 0
    size = round(size, _decimals(half)) if half > 0 else float(f"{size:.4g}")
    fitting = [step for step in _STEPS if size >= 10 ** step[1] * (1 - 1e-12)]
    return fitting[-1] if fitting else _STEPS[0]


def _decimals(half: float) -> int:
    """Decimals that show U to two significant digits (0.0998 is 0.10, not 0.100)."""
    return 1 - math.floor(math.log10(float(f"{half:.1e}")) + 1e-12)


def _with_half(value: float, half: float, exponent: int, digits: int = 4) -> str:
    """The value (± U) in units of 10^exponent."""
    scaled, half = value / 10.0**exponent, half / 10.0**exponent
    if half == 0:
        if scaled != 0 and not 1e-4 <= abs(scaled) < 1e6:
            return f"{scaled:.{digits - 1}e}"
        return f"{scaled:.{digits}g}" if abs(scaled) < 10 ** (digits - 1) else f"{scaled:.0f}"
    if half < 1e-12 or max(abs(scaled), half) >= 1e15:
        return f"{scaled:.6e} ± {half:.1e}"
    decimals = _decimals(half)
    shown = max(decimals, 0)
    return f"{round(scaled, decimals) + 0.0:.{shown}f} ± {round(half, decimals):.{shown}f}"
