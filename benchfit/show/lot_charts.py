"""Drawings of a lot: where the units' frequencies lie, and how far each part is from its nominal."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from benchfit.errors import UsageError
from benchfit.quantity import si
from benchfit.show.palette import LIGHT, legend_above, nothing, plain, scale, settings, symbol

if TYPE_CHECKING:
    import os
    from collections.abc import Sequence

    from matplotlib.figure import Figure

    from benchfit.show.lot import Lot, Spread, Unit

LotKind = Literal["frequency", "parts"]
_WIDE = 50.0
"""Limits beyond this (%) do not stretch the picture."""


def plot_lot(
    lot: Lot, path: str | os.PathLike[str] | None = None, axes: Any = None, kind: LotKind = "frequency"
) -> Figure:
    """Draw one picture of a lot; ``path`` and ``axes`` as in :func:`benchfit.show.plot.plot`.

    "frequency": how many units run at which frequency, with target and tolerance interval; "parts": every
    unit's deviation of each part from its nominal, with the sheet's limits.

    Raises
    ------
    UsageError
        Where the kind is neither, or the file cannot be written.
    """
    if kind not in ("frequency", "parts"):
        raise UsageError(f'no picture of a lot is called "{kind}"; there are frequency, parts', kind=kind)
    import matplotlib as mpl
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    with mpl.rc_context(settings()):
        ax = axes
        if ax is None:
            rows = sum(s.limits is not None for s in lot.spreads)
            figure = Figure(
                figsize=(8.0, 3.2 if kind == "frequency" else 1.4 + 0.5 * rows), layout="constrained"
            )
            FigureCanvasAgg(figure)
            ax = figure.subplots()
        (draw_frequencies if kind == "frequency" else draw_parts)(ax, lot)
        if path is not None:
            from benchfit.show.plot import save

            save(ax.figure, path)
    found: Figure = ax.figure
    return found


def draw_frequencies(ax: Any, lot: Lot) -> None:
    """How many units run at which frequency."""
    known = [u for u in lot.units if u.frequency is not None]
    if not known:
        nothing(ax, "no unit runs")
        return
    apart = [u for u in known if u.name in lot.apart]
    values = np.array([u.frequency for u in known if u.name not in lot.apart], dtype=float)
    factor, unit = scale(float(values.max()), "Hz")
    x = values * factor
    bins = int(np.clip(2 * np.sqrt(x.size), 5, 60))
    ax.hist(x, bins=bins, color=LIGHT["data"], edgecolor=LIGHT["paper"], linewidth=0.6, label="units")
    ticks = {"color": LIGHT["ink"], "ms": 8, "mew": 0.8, "zorder": 3, "transform": ax.get_xaxis_transform()}
    ax.plot(x, np.full(x.size, 0.03), "|", **ticks)
    # Units with a fault of their own may lie far off: they are named at the edge, and no bin is lost to them.
    _beside(ax, [u for u in apart if (u.frequency or 0.0) < values.mean()], "left")
    _beside(ax, [u for u in apart if (u.frequency or 0.0) >= values.mean()], "right")
    spread = lot.spread("frequency")
    if spread is not None:
        ax.axvline(spread.mean * factor, color=LIGHT["charge"], lw=1.5, label="mean")
        if spread.interval is not None:
            low, high = (v * factor for v in spread.interval)
            ax.axvspan(low, high, color=LIGHT["band"], lw=0, zorder=0, label="95 % of such units")
    if lot.target is not None:
        ax.axvline(lot.target * factor, color=LIGHT["target"], lw=1.5, ls=(0, (5, 2)), label="target")
    ax.yaxis.get_major_locator().set_params(integer=True)
    ax.set_xlabel(f"frequency ({unit})")
    ax.set_ylabel("units")
    legend_above(ax)


def _beside(ax: Any, units: Sequence[Unit], side: Literal["left", "right"]) -> None:
    """Name the units that lie beyond one edge."""
    if not units:
        return
    named = f"{plain(units[0].name)}: {si(units[0].frequency or 0.0, 'Hz')}"
    text = named if len(units) == 1 else f"{len(units)} units with a fault of their own"
    place = {"x": 0.01, "s": f"← {text}"} if side == "left" else {"x": 0.99, "s": f"{text} →"}
    ax.text(**place, y=0.96, transform=ax.transAxes, ha=side, va="top", fontsize=8.5, color=LIGHT["soft"])


def draw_parts(ax: Any, lot: Lot) -> None:
    """Every unit's deviation of each part from its nominal, in per cent, with the sheet's limits."""
    spreads = [s for s in lot.spreads if s.limits is not None and s.nominal]
    if not spreads:
        nothing(ax, "no part is known from the captures")
        return
    rng = np.random.default_rng(1)
    for row, s in enumerate(spreads):
        nominal = s.nominal or 1.0
        low, high = (100 * (x / nominal - 1) for x in s.limits or (nominal, nominal))
        ax.barh(row, high - low, left=low, height=0.62, color=LIGHT["band"], edgecolor=LIGHT["soft"], lw=0.6,
                label="limits" if row == 0 else None)  # fmt: skip
        seen = [u.parts[s.name].deviation for u in lot.units if u.parts and s.name in u.parts]
        x = 100 * np.array([d for d in seen if d is not None], dtype=float)
        y = row + 0.22 * rng.uniform(-1, 1, x.size)
        ax.plot(
            x,
            y,
            "o",
            ms=3.0,
            mew=0,
            color=LIGHT["discharge"],
            alpha=0.55,
            label="units" if row == 0 else None,
        )
        mean = 100 * (s.mean / nominal - 1)
        style = {"color": LIGHT["charge"], "lw": 2.2, "solid_capstyle": "butt"}
        ax.plot([mean, mean], [row - 0.36, row + 0.36], label="mean" if row == 0 else None, **style)
    ax.axvline(0.0, color=LIGHT["ink"], lw=0.8)
    ax.set_xlim(*_reach(spreads, [u for u in lot.units if u.name not in lot.apart]))
    ax.set_yticks(range(len(spreads)), [symbol(s.name) if s.name else plain(s.name) for s in spreads])
    ax.set_ylim(len(spreads) - 0.4, -0.6)
    ax.tick_params(axis="y", length=0)
    ax.grid(False, axis="y")
    ax.set_xlabel("off its nominal (%)")
    legend_above(ax)


def _reach(spreads: Sequence[Spread], units: Sequence[Unit]) -> tuple[float, float]:
    """From where to where (%) to draw: every unit, and limits unless they are so wide that they hide the rest."""
    shown = [0.0]
    for s in spreads:
        nominal = s.nominal or 1.0
        ends = [100 * (x / nominal - 1) for x in s.limits or ()]
        shown += ends if max(map(abs, ends), default=0.0) <= _WIDE else []
        seen = [u.parts[s.name].deviation for u in units if u.parts and s.name in u.parts]
        shown += [100 * d for d in seen if d is not None]
    low, high = min(shown), max(shown)
    margin = 0.04 * (high - low) or 1.0
    return low - margin, high + margin
