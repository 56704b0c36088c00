"""A burn-in's log as a picture: the frequency over time, what moves with it, its stability."""

from __future__ import annotations

import math
import os
from typing import TYPE_CHECKING, Any

import numpy as np

from benchfit.burnin.result import Drawn, QuantityTrend, Trend, UnitTrend
from benchfit.show import words
from benchfit.show.palette import LIGHT, legend_above, minus, nothing, plain, scale, settings

if TYPE_CHECKING:
    from matplotlib.figure import Figure

_COLOURS = ("discharge", "charge", "output", "target", "soft", "data")
_STYLES = ("-", "--", "-.", ":")
_MOST = 6


def plot(trend: Trend, path: str | os.PathLike[str] | None = None, axes: Any = None) -> Figure:
    """Draw the trend; write it to ``path`` (PNG, SVG or PDF by its ending) if given.

    Parameters
    ----------
    trend : Trend
    path : path-like, optional
    axes : sequence of three Axes, optional
        Where to draw in a figure of the caller's.

    Raises
    ------
    UsageError
        Where the ending is none of the three, or the file cannot be written.
    """
    import matplotlib as mpl
    from matplotlib.figure import Figure as NewFigure

    from benchfit.show.plot import save

    with mpl.rc_context(settings()):
        if axes is None:
            has_middle = _has_middle(trend)
            figure: Figure = NewFigure(figsize=(8.6, 8.8 if has_middle else 6.4), layout="constrained")
            ratios = (1.35, 1.0, 1.0) if has_middle else (1.35, 1.0)
            axes = list(figure.subplots(len(ratios), 1, height_ratios=ratios))
            if not has_middle:
                axes.insert(1, None)
            title = " · ".join(
                t for t in (trend.title, trend.circuit or "", os.path.basename(trend.path)) if t
            )
            figure.suptitle(
                plain(title), x=0.01, ha="left", fontsize=11.5, fontweight="bold", color=LIGHT["ink"]
            )
        else:
            figure = axes[0].figure
        if len(trend.units) == 1:
            _frequency(axes[0], trend, trend.units[0])
        else:
            _units(axes[0], trend, "frequency")
        if axes[1] is not None and len(trend.units) == 1:
            _moving(axes[1], trend.units[0])
        elif axes[1] is not None:
            _units(axes[1], trend, "duty")
        _stability(axes[2], trend)
        if path is not None:
            save(figure, path)
    return figure


def _has_middle(trend: Trend) -> bool:
    """Whether there is anything to draw between frequency and stability."""
    if len(trend.units) > 1:
        return any("duty" in unit.drawn for unit in trend.units)
    return bool(_others(trend.units[0]))


def _others(unit: UnitTrend) -> list[QuantityTrend]:
    """What drifts besides the frequency and stands out from nothing, the largest change first."""
    moving = [q for q in unit.quantities.values() if q.is_drifting and q.name in unit.drawn]
    moving = [q for q in moving if q.name not in ("frequency", "period") and abs(q.mean) > 2 * q.u]
    return sorted(moving, key=lambda q: -abs(q.change / q.mean))


def _frequency(ax: Any, trend: Trend, unit: UnitTrend) -> None:
    drawn = unit.drawn.get("frequency")
    if drawn is None:
        nothing(ax, "no record has a frequency")
        return
    factor, name = scale(float(np.nanmax(np.abs(drawn.mean))), "Hz")
    time, axis = _hours(drawn.time)
    _band(ax, drawn, time, factor, "discharge", "records" if _is_thin(drawn) else "mean; least to most")
    quantity = unit.quantities["frequency"]
    if quantity.is_drifting:
        label = f"{quantity.law}, {words.chance(quantity.probability)}"
        ax.plot(time, drawn.law * factor, color=LIGHT["charge"], lw=1.8, label=label, zorder=4)
    _limits(ax, unit.limits.get("frequency"), factor, drawn)
    _gaps(ax, trend, time, drawn.time)
    _alarms(ax, trend, unit, factor, time, drawn.time)
    ax.set_ylabel(f"frequency ({name})")
    ax.set_xlabel(axis)
    ax.margins(x=0.01)
    legend_above(ax)


def _hours(time: Any) -> tuple[Any, str]:
    """Times in h as they are best read, and the axis' label."""
    span = float(time[-1]) if time.size else 0.0
    if span > 72:
        return time / 24, "time (d)"
    if span < 2:
        return time * 60, "time (min)"
    return time, "time (h)"


def _is_thin(drawn: Drawn) -> bool:
    return bool(np.array_equal(drawn.low, drawn.high))


def _band(ax: Any, drawn: Drawn, time: Any, factor: float, role: str, label: str) -> None:
    few = drawn.time.size < 150
    if not _is_thin(drawn):
        ax.fill_between(time, drawn.low * factor, drawn.high * factor, color=LIGHT[role], alpha=0.22, lw=0)
    style = {"marker": "o", "ms": 2.6, "lw": 0} if few else {"lw": 0.9}
    ax.plot(time, drawn.mean * factor, color=LIGHT[role], label=label, zorder=3, **style)


def _limits(ax: Any, limits: tuple[float, float] | None, factor: float, drawn: Drawn) -> None:
    """Limits as lines, where they are near enough to what was measured to be worth the room."""
    if limits is None:
        return
    low, high = float(np.nanmin(drawn.low)), float(np.nanmax(drawn.high))
    room = 2.0 * max(high - low, 1e-3 * abs(high))
    shown = [x for x in limits if low - room <= x <= high + room]
    for x, label in zip(shown, ("limit", None), strict=False):
        ax.axhline(x * factor, color=LIGHT["target"], lw=1.1, ls="--", label=label)


def _gaps(ax: Any, trend: Trend, time: Any, hours: Any) -> None:
    if trend.started is None or not hours.size or not hours[-1]:
        return
    unit = float(time[-1] / hours[-1])
    label: str | None = "gap"
    for gap in trend.gaps[:200]:
        a, b = ((x - trend.started) / 3600 * unit for x in (gap.began, gap.ended))
        if b > a:
            ax.axvspan(a, b, color=LIGHT["grid"], alpha=0.8, lw=0, label=label, zorder=0)
            label = None


def _alarms(ax: Any, trend: Trend, unit: UnitTrend, factor: float, time: Any, hours: Any) -> None:
    if trend.started is None or not hours.size or not hours[-1]:
        return
    scaled = float(time[-1] / hours[-1])
    mine = [a for a in trend.alarms if a.unit == unit.unit and a.quantity == "frequency"]
    if mine:
        at = [(a.acquired - trend.started) / 3600 * scaled for a in mine]
        values = [a.value * factor for a in mine]
        ax.plot(at, values, "v", color=LIGHT["target"], ms=7, mec=LIGHT["paper"], label="alarm", zorder=5)


def _moving(ax: Any, unit: UnitTrend) -> None:
    """What drifts besides the frequency, relative to its start."""
    moving = _others(unit)
    if not moving:
        nothing(ax, "nothing else drifts")
        return
    for i, q in enumerate(moving[:_MOST]):
        drawn = unit.drawn[q.name]
        time, axis = _hours(drawn.time)
        start = drawn.law[0] if math.isfinite(drawn.law[0]) else drawn.mean[0]
        relative = 100 * (drawn.mean - start) / abs(start)
        colour, style = LIGHT[_COLOURS[i % len(_COLOURS)]], _STYLES[i // 3 % len(_STYLES)]
        label = q.name if q.kind == "part" else words.label(q.name)
        ax.plot(time, relative, color=colour, ls=style, lw=1.1, label=plain(label))
        ax.set_xlabel(axis)
    ax.set_ylabel("change (%)")
    ax.margins(x=0.01)
    legend_above(ax)


def _units(ax: Any, trend: Trend, name: str) -> None:
    """Every unit's quantity relative to its own start; units that depart are drawn strongly."""
    departing = {d.unit for d in trend.departures if d.is_departing and d.quantity == name}
    any_drawn = False
    for i, unit in enumerate(trend.units):
        drawn = unit.drawn.get(name)
        if drawn is None:
            continue
        any_drawn = True
        time, axis = _hours(drawn.time)
        ax.set_xlabel(axis)
        relative = 100 * (drawn.mean / drawn.mean[: max(1, drawn.mean.size // 50)].mean() - 1)
        strong = unit.unit in departing
        label = f"{unit.unit} departs" if strong else unit.unit
        colour = LIGHT["charge"] if strong else LIGHT[_COLOURS[(i * 2) % 4] if not departing else "data"]
        width, style = (1.6, "-") if strong else (0.9, (0, (8, 1 + 2 * (i % 5))))
        ax.plot(time, relative, color=colour, lw=width, ls=style, label=plain(label))
    if not any_drawn:
        nothing(ax, f"{words.label(name)}: no unit's drifts" if name != "frequency" else "no frequency")
        return
    ax.set_ylabel(f"{words.label(name)}, change (%)")
    ax.margins(x=0.01)
    legend_above(ax)


def _stability(ax: Any, trend: Trend) -> None:
    shown = [unit for unit in trend.units if unit.stability]
    if not shown:
        nothing(ax, "too few records in even steps for an Allan deviation")
        return
    for i, unit in enumerate(shown):
        tau = np.array([d.averaging_time for d in unit.stability])
        adev = np.array([d.adev for d in unit.stability])
        if not np.all(adev > 0):
            continue
        reach = np.array([[d.adev - d.low, d.high - d.adev] for d in unit.stability]).T
        colour = LIGHT[_COLOURS[i % len(_COLOURS)]]
        ax.errorbar(
            tau, adev, reach, color=colour, marker="o", ms=3.5, lw=1.1, capsize=2.5, elinewidth=1.0,
            label=plain(unit.unit) or None,
        )  # fmt: skip
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xlabel("averaging time (s)")
    ax.set_ylabel("Allan deviation of frequency")
    ax.set_title(minus("overlapping, fractional, 68 % intervals"), fontsize=9, fontweight="normal")
    if len(shown) > 1:
        ax.legend(loc="best")
