"""Colours, sizes and axes of the drawings: they keep apart in grey and to every kind of colour vision."""

from __future__ import annotations

import math
from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

LIGHT: Mapping[str, str] = MappingProxyType({
    "paper": "#fffffe",
    "ink": "#1c2430",
    "soft": "#5b6675",
    "grid": "#dde2e8",
    "data": "#9fb0c2",
    "charge": "#c2540a",
    "discharge": "#14346b",
    "output": "#4f7d5b",
    "target": "#7a3e8e",
    "band": "#e9eef4",
})  # fmt: skip
"""Roles and their colours on paper."""

DARK: Mapping[str, str] = MappingProxyType({
    "paper": "#14181e",
    "ink": "#e8ecf1",
    "soft": "#a3aebb",
    "grid": "#323b46",
    "data": "#5f7286",
    "charge": "#e27a2a",
    "discharge": "#c3d8ff",
    "output": "#8cc79b",
    "target": "#d39be4",
    "band": "#222a33",
})  # fmt: skip
"""The same roles on a dark page."""

_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "µ", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}


def scale(largest: float, unit: str) -> tuple[float, str]:
    """(factor, unit with SI prefix) by which numbers up to ``largest`` come out between 1 and 1000."""
    if not (math.isfinite(largest) and largest > 0):
        return 1.0, unit
    exponent = min(12, max(-15, 3 * math.floor(math.log10(largest * (1 + 1e-9)) / 3)))
    return 10.0**-exponent, _PREFIXES[exponent] + unit


def settings() -> Any:
    """The rcParams of every drawing: quiet axes, text of one family, nothing random in the files."""
    c = LIGHT
    return {
        "font.family": "DejaVu Sans",
        "font.size": 9.0,
        "mathtext.fontset": "dejavusans",
        "axes.titlesize": 10.5,
        "axes.titleweight": "bold",
        "axes.titlelocation": "left",
        "axes.titlepad": 8.0,
        "axes.labelsize": 9.0,
        "axes.labelcolor": c["ink"],
        "axes.titlecolor": c["ink"],
        "axes.edgecolor": c["soft"],
        "axes.facecolor": c["paper"],
        "axes.linewidth": 0.8,
        "axes.spines.top": False,
        "axes.spines.right": False,
        "axes.grid": True,
        "axes.axisbelow": True,
        "axes.formatter.useoffset": False,
        "axes.unicode_minus": True,
        "grid.color": c["grid"],
        "grid.linewidth": 0.6,
        "text.color": c["ink"],
        "xtick.color": c["soft"],
        "ytick.color": c["soft"],
        "xtick.labelcolor": c["ink"],
        "ytick.labelcolor": c["ink"],
        "xtick.labelsize": 8.5,
        "ytick.labelsize": 8.5,
        "xtick.direction": "out",
        "ytick.direction": "out",
        "legend.frameon": False,
        "legend.fontsize": 8.5,
        "lines.linewidth": 1.4,
        "figure.facecolor": c["paper"],
        "figure.dpi": 100.0,
        "savefig.dpi": 160.0,
        "path.simplify": True,
        "path.simplify_threshold": 0.2,
        "pdf.fonttype": 42,
        "svg.hashsalt": "benchfit",
    }


def symbol(name: str) -> str:
    """A part's or level's name as the trade sets it: one letter, the rest below it ("V_strike", "RA")."""
    head, _, tail = name.partition("_")
    if not tail and len(head) > 1 and head[0] in "RCVI" and head[1:].isalnum() and head.isascii():
        head, tail = head[0], head[1:]
    greek = {"eta": r"\eta"}
    if not tail:
        return f"${greek.get(head, head)}$" if head in greek or len(head) == 1 else plain(head)
    if not (head.isalnum() and head.isascii()):
        return plain(name)
    below = tail.replace("_", r"\,")
    safe = all(ch.isalnum() or ch in "\\," for ch in below) and below.isascii()
    return rf"${head}_\mathrm{{{below}}}$" if safe else plain(name)


def plain(text: object) -> str:
    """Text that matplotlib sets as it stands: no mathematics, no control codes."""
    printable = "".join(ch if ch.isprintable() else "·" for ch in str(text))
    return printable.replace("\\", "\\\\").replace("$", r"\$") if "$" in printable else printable


def minus(text: str) -> str:
    """The text with a proper minus sign."""
    return text.replace("-", "−")


def legend_above(ax: Any, **more: Any) -> None:
    """The legend in one row above the axes, where it covers nothing."""
    ax.legend(loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=4, borderaxespad=0.2, borderpad=0.0, **more)


def nothing(ax: Any, says: str) -> None:
    """An empty drawing that says why it is empty."""
    ax.text(0.5, 0.5, says, ha="center", va="center", transform=ax.transAxes, color=LIGHT["soft"])
    ax.set_axis_off()
