"""Specifications of parts, and standard values."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

E6 = (10, 15, 22, 33, 47, 68)
E12 = (10, 12, 15, 18, 22, 27, 33, 39, 47, 56, 68, 82)
E24 = (10, 11, 12, 13, 15, 16, 18, 20, 22, 24, 27, 30, 33, 36, 39, 43, 47, 51, 56, 62, 68, 75, 82, 91)


@dataclass(frozen=True)
class Spec:
    """One part of a design.

    ``nominal``, ``low``, ``high`` in SI; ``text`` is its line in the build sheet (None: left to the circuit's
    default). ``log``: spreads and faults are ratios, else differences. ``kind``: resistor, capacitor, supply,
    level, threshold, ratio, current or device. ``follows``: the part whose true value the limits move with
    (by the difference from that part's nominal).
    """

    name: str
    nominal: float
    low: float
    high: float
    text: str | None
    kind: str
    log: bool = True
    follows: str = ""


@dataclass(frozen=True)
class Design:
    """A circuit and its parts as meant; ``nodes`` that could be probed, with the loading ones in
    ``loads``."""

    circuit: str
    specs: tuple[Spec, ...]
    nodes: tuple[str, ...]
    loads: tuple[str, ...]
    swaps: tuple[tuple[str, str], ...] = ()
    parasitics: tuple[str, ...] = ()

    def nominal(self) -> dict[str, float]:
        """Nominal values by name."""
        return {s.name: s.nominal for s in self.specs}

    def spec(self, name: str) -> Spec:
        """One part's specification."""
        return next(s for s in self.specs if s.name == name)


def standard(value: float, series: tuple[int, ...]) -> float:
    """The nearest standard value, by ratio."""
    decade = np.floor(np.log10(value))
    table = [s * 10.0 ** (decade + shift - 1) for shift in (-1, 0, 1) for s in series]
    return float(f"{min(table, key=lambda s: abs(np.log(s / value))):.3g}")


def written(value: float) -> str:
    """A number for a sheet, in plain digits."""
    return f"{value:.6g}"


def ratio(name: str, value: float, percent: float, kind: str, **more: Any) -> Spec:
    """A part with a tolerance in per cent, as the sheet states it."""
    limits = sorted((value * (1 - percent / 100), value * (1 + percent / 100)))
    log = kind not in ("level",) and value > 0
    return Spec(name, value, limits[0], limits[1], f"{written(value)} ±{percent:g}%", kind, log, **more)


def default(name: str, value: float, low: float, high: float, log: bool, follows: str = "") -> Spec:
    """A device's figure that the sheet leaves to the circuit's documented spread."""
    return Spec(name, value, low, high, None, "device", log, follows)
