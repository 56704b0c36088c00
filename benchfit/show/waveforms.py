"""Drawings of what was captured: the record with its fitted phases, one folded cycle, slopes, periods."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from benchfit.quantity import si
from benchfit.show import curves
from benchfit.show.palette import LIGHT, legend_above, minus, nothing, plain, scale, symbol

if TYPE_CHECKING:
    from benchfit.capture.model import Capture
    from benchfit.cycle.constants import CycleConstants
    from benchfit.explain.result import Explanation

Array = NDArray[np.float64]

_MOST_CYCLES = 7.0
_DASHES = (0, (4, 1.2))
_DASH_DOT = (0, (6, 2, 1, 2))


@dataclass(frozen=True, eq=False)
class Scene:
    """What a drawing is made of: the answer, the cycle's constants, the channels as node voltages."""

    explanation: Explanation
    constants: CycleConstants | None
    traces: list[curves.Trace]
    placed: list[curves.Placed]

    @property
    def timing(self) -> curves.Trace:
        """The channel whose phases were fitted; the first one where none was."""
        nodes = {p.fit.node for p in self.placed}
        return next((t for t in self.traces if t.node in nodes), self.traces[0])

    @property
    def others(self) -> list[curves.Trace]:
        return [t for t in self.traces if t is not self.timing]

    @property
    def phases(self) -> list[curves.Placed]:
        """The placed phases of the timing node."""
        return [p for p in self.placed if p.fit.node == self.timing.node]

    @property
    def turns(self) -> Array:
        """Starts of the cycles (s)."""
        return np.asarray(self.constants.turns if self.constants is not None else [], dtype=float)

    @property
    def period(self) -> float | None:
        if (value := self.value("period")) is not None:
            return value
        constants = self.constants
        return constants.value("period") if constants is not None and "period" in constants else None

    @property
    def target(self) -> float | None:
        """Target period (s)."""
        miss = (self.explanation.miss or {}).get("frequency")
        return 1 / miss.target if miss is not None and miss.target > 0 else None

    def value(self, name: str) -> float | None:
        """A measured quantity's value, None where it is not known."""
        q = self.explanation.measured.get(name)
        return float(q.value) if q is not None and np.isfinite(q.value) else None


def scene(explanation: Explanation, constants: CycleConstants | None, capture: Capture) -> Scene:
    """Everything that the drawings of one capture need."""
    traces = curves.traces(capture, explanation, constants)
    placed: list[curves.Placed] = []
    if constants is not None:
        for trace in traces:
            placed += curves.place(constants, trace)
    return Scene(explanation, constants, traces, placed)


def panels(s: Scene) -> list[float]:
    """Relative heights of the panels that a picture of the capture has."""
    return [4.0, *([1.3] if s.others else []), *([1.3] if s.phases else [])]


def draw_capture(axes: Sequence[Any], s: Scene) -> None:
    """The record with fitted phases, levels and asymptotes; the output below; residuals at the bottom.

    ``axes``: one (the record alone), two (and residuals) or three (and the other channels between them).
    """
    trace, main = s.timing, axes[0]
    begin, end = _window(s)
    factor, unit = scale(max(abs(begin), abs(end)), "s")
    finite = np.abs(trace.volts[np.isfinite(trace.volts)])
    volts, v_unit = scale(float(finite.max()) if finite.size else 1.0, "V")
    t, v = _between(trace, begin, end)
    _samples(main, t * factor, v * volts, "data", f"{plain(trace.name)}, captured", 3.2 if s.phases else 1.4)
    for role, style in (("charge", "-"), ("discharge", _DASHES)):
        x, y = curves.polylines(s.phases, role == "charge", begin, end)
        if x.size:
            main.plot(x * factor, y * volts, color=LIGHT[role], lw=1.2, ls=style, label=f"{role}, fitted")
    main.set_xlim(begin * factor, end * factor)
    main.set_ylabel(f"{plain(trace.node or trace.name)} ({v_unit})")
    _mark_levels(main, s, volts)
    legend_above(main)
    below = list(axes[1:])
    if s.others and (len(below) > 1 or (below and not s.phases)):
        _draw_others(below.pop(0), s.others, begin, end, factor)
    if below:
        _draw_residuals(below[-1], s, begin, end, factor)
    axes[-1].set_xlabel(f"time ({unit})")


def _window(s: Scene) -> tuple[float, float]:
    """The whole record, or its first cycles where it holds many."""
    time = s.timing.time
    begin, end = float(time[0]), float(time[-1])
    if s.period is not None and (end - begin) > 12 * s.period:
        end = begin + _MOST_CYCLES * s.period
    return begin, end


def _between(trace: curves.Trace, begin: float, end: float) -> tuple[Array, Array]:
    first, stop = np.searchsorted(trace.time, [begin, end])
    return trace.time[first : stop + 1], trace.volts[first : stop + 1]


def _samples(ax: Any, x: Array, y: Array, role: str, label: str, width: float, columns: int = 1200) -> None:
    """Samples as a line, or as an envelope where they are many."""
    if (band := curves.envelope(x, y, columns)) is None:
        ax.plot(x, y, color=LIGHT[role], lw=width, label=label, solid_joinstyle="round")
    else:
        ax.fill_between(*band, fc=LIGHT[role], ec=LIGHT[role], lw=min(width, 1.6), label=label)


def _draw_others(ax: Any, others: list[curves.Trace], begin: float, end: float, factor: float) -> None:
    for trace, role in zip(others, ("output", "target", "soft"), strict=False):
        t, v = _between(trace, begin, end)
        _samples(ax, t * factor, v, role, plain(trace.node or trace.name), 1.2, 800)
    alone = plain(others[0].node or others[0].name)
    ax.set_ylabel(f"{alone} (V)" if len(others) == 1 else "other nodes (V)")
    ax.margins(y=0.15)
    if len(others) > 1:
        ax.legend(loc="upper right", ncols=3)


def _draw_residuals(ax: Any, s: Scene, begin: float, end: float, factor: float) -> None:
    t, v = _between(s.timing, begin, end)
    rest = v - curves.fitted(s.phases, t)
    known = np.abs(rest[np.isfinite(rest)])
    if known.size == 0:
        style = {"ha": "center", "va": "center", "color": LIGHT["soft"]}
        ax.text(0.5, 0.5, "no phase could be fitted", transform=ax.transAxes, **style)
        ax.set_yticks([])
        return
    noise = s.constants.noise.get(s.timing.node, 0.0) if s.constants is not None else 0.0
    reach = 1.25 * max(4.0 * noise, float(np.percentile(known, 99.0)))
    volts, unit = scale(reach, "V")
    if noise:
        ax.axhspan(-2 * noise * volts, 2 * noise * volts, color=LIGHT["band"], lw=0)
        _beside(ax, 2 * noise * volts, "± 2σ noise", ax.get_yaxis_transform())
    x, y = t * factor, np.clip(rest, -reach, reach) * volts
    _samples(ax, x, y, "soft" if x.size < 6000 else "data", "", 0.6)
    if (means := curves.means(x, y)) is not None:
        ax.plot(*means, color=LIGHT["ink"], lw=0.9)
    ax.axhline(0.0, color=LIGHT["ink"], lw=0.8)
    ax.set_ylim(-reach * volts, reach * volts)
    ax.set_ylabel(f"residual ({unit})")


def _mark_levels(ax: Any, s: Scene, volts: float) -> None:
    """Turning levels and asymptotes as lines, named beside the right-hand edge."""
    lines: list[tuple[float, str, Any]] = []
    for name in ("upper", "lower") if s.phases else ("high", "low"):
        if (v := s.value(name)) is not None:
            lines.append((v, _level_name(s, name, v), ":"))
    bottom, top = ax.get_ylim()
    reach = 0.7 * (top - bottom)
    for phase in ("charge", "discharge"):
        if (v := s.value(f"{phase}_asymptote")) is None:
            continue
        if bottom - reach <= v * volts <= top + reach:
            lines.append((v, rf"$V_\infty$ {phase}", _DASH_DOT))
        else:
            _point_to(ax, v, phase, v * volts > top)
    for v, _, style in lines:
        ax.axhline(v * volts, color=LIGHT["ink"], lw=0.8, ls=style, zorder=1.5 if s.phases else 2.5)
    heights = [bottom, top, *(v * volts for v, _, _ in lines)]
    pad = 0.05 * (max(heights) - min(heights))
    ax.set_ylim(min(heights) - pad, max(heights) + pad)
    _name_lines(ax, [(v * volts, f"{text}  {minus(si(v, 'V'))}") for v, text, _ in lines])


def _point_to(ax: Any, v: float, phase: str, up: bool) -> None:
    """An asymptote far off the picture, as an arrow in its corner."""
    text = rf"$V_\infty$ {phase}  {minus(si(v, 'V'))} {'↑' if up else '↓'}"
    box = {"fc": LIGHT["paper"], "ec": "none", "pad": 1.5, "alpha": 0.85}
    x, y, va = (0.995, 0.985, "top") if up else (0.995, 0.015, "bottom")
    ax.text(x, y, text, transform=ax.transAxes, ha="right", va=va, color=LIGHT[phase], fontsize=8, bbox=box)


def _level_name(s: Scene, name: str, value: float) -> str:
    """The symbol of the part that is this level, where the build has one; else upper or lower."""
    q = s.explanation.measured.get(name)
    swing = abs((s.value("upper") or 0.0) - (s.value("lower") or 0.0))
    near = max(2 * (q.u or 0.0) if q is not None else 0.0, 0.02 * swing)
    volts = {p.name: p.value for p in s.explanation.parts if p.unit == "V" and p.value is not None}
    named = [(abs(v - value), n) for n, v in volts.items() if n.startswith("V_") and abs(v - value) <= near]
    return symbol(min(named)[1] if named else f"V_{name}")


def _beside(ax: Any, y: float, text: str, transform: Any, size: float = 7.5, role: str = "soft") -> None:
    ax.text(1.008, y, text, transform=transform, va="center", fontsize=size, color=LIGHT[role])


def _name_lines(ax: Any, labels: list[tuple[float, str]], gap: float = 0.062) -> None:
    """Labels right of the axes at their heights, pushed apart where they would touch."""
    bottom, top = ax.get_ylim()
    at = sorted(((y - bottom) / (top - bottom), text) for y, text in labels)
    heights = [y for y, _ in at]
    for _ in range(40):
        for i in range(len(heights) - 1):
            lack = gap - (heights[i + 1] - heights[i])
            if lack > 1e-6:
                heights[i] -= lack / 2
                heights[i + 1] += lack / 2
    for (_, text), y in zip(at, heights, strict=True):
        _beside(ax, y, text, ax.transAxes, 8.0, "ink")


def draw_cycle(axes: Sequence[Any], s: Scene) -> None:
    """All cycles laid over each other, with the curve of the build and that of the nominal parts."""
    ax, trace, period, starts = axes[0], s.timing, s.period, s.turns
    if period is None or starts.size < 2:
        nothing(ax, "no whole cycle in the capture")
        return
    build, nominal = _curve(s, trace.node), _curve(s, f"nominal:{trace.node}")
    if build:
        begins = np.array([p.begin for p in s.phases if p.fit.rising == (build[1][1] > build[1][0])])
        t, v = curves.folded(trace, begins if begins.size > 1 else starts, period)
        t = t if begins.size > 1 else curves.aligned(t, v, period, *build)
    else:
        t, v = curves.folded(trace, starts, period)
        build = _fitted_cycle(s, starts, period)
    ends = [float(curve[0][-1]) for curve in (build, nominal) if curve and len(curve[0])]
    longest = max(period, s.target or 0.0, *ends)
    factor, unit = scale(longest, "s")
    volts, v_unit = scale(float(np.max(np.abs(v))) if v.size else 1.0, "V")
    dots = {"color": LIGHT["data"], "ms": 2.0}
    ax.plot(t * factor, v * volts, ".", label=f"{starts.size - 1} cycles, captured", **dots)
    if build:
        x, y = build
        ax.plot(x * factor, y * volts, color=LIGHT["discharge"], lw=1.8, label="build, fitted")
    if nominal:
        x, y = nominal
        ax.plot(x * factor, y * volts, color=LIGHT["target"], lw=1.5, ls=(0, (5, 2)), label="nominal parts")
    if s.target is not None:
        ax.axvline(s.target * factor, color=LIGHT["target"], lw=1.1, ls=":", label="target period")
    ax.set_xlim(0, 1.04 * factor * longest)
    ax.set_xlabel(f"time from the start of a cycle ({unit})")
    ax.set_ylabel(f"{plain(trace.node or trace.name)} ({v_unit})")
    legend_above(ax, markerscale=3)


def _curve(s: Scene, name: str) -> tuple[Array, Array] | None:
    """A circuit's curve over one cycle, None where the explanation holds none."""
    if not (found := s.explanation.model.get(name)) or len(found[0]) < 2:
        return None
    return np.asarray(found[0], dtype=float), np.asarray(found[1], dtype=float)


def _fitted_cycle(s: Scene, starts: Array, period: float) -> tuple[Array, Array] | None:
    """The fitted phases over one cycle, where no circuit is given."""
    x = np.linspace(0.0, period, 400)
    y = curves.fitted(s.phases, starts[0] + x)
    return (x, y) if np.isfinite(y).any() else None


def draw_slopes(axes: Sequence[Any], s: Scene) -> None:
    """dv/dt against v, up and down: straight lines where one R and one C are at work.

    A leak moves a line's foot on the voltage axis, a voltage-dependent capacitor bends both lines, a clamp
    bends one end.
    """
    for ax, phase in zip(axes, ("charge", "discharge"), strict=False):
        v, slope, u = curves.slopes(s.phases, s.timing, phase == "charge")
        if v.size < 3:
            nothing(ax, f"too few samples in the {phase}")
            continue
        volts, v_unit = scale(float(np.max(np.abs(v))), "V")
        rates, r_unit = scale(float(np.max(np.abs(slope))), "V/s")
        fit = next(p.fit for p in s.phases if p.fit.rising == (phase == "charge"))
        ends = np.array([fit.start, fit.end])
        line = curves.rate(fit, ends) * rates
        ax.plot(ends * volts, line, color=LIGHT[phase], lw=1.8, label="one exponential")
        dots = {"fmt": "o", "ms": 3.2, "lw": 0.9, "color": LIGHT["soft"], "zorder": 3}
        ax.errorbar(v * volts, slope * rates, yerr=2 * u * rates, label="captured, ± U", **dots)
        ax.set_title(phase)
        ax.set_xlabel(f"v ({v_unit})")
        ax.set_ylabel(f"dv/dt ({r_unit})")
        ax.legend(loc="best")


def draw_periods(axes: Sequence[Any], s: Scene) -> None:
    """Every single period against its number: flat, drifting, hunting, or late now and then."""
    ax, periods = axes[0], np.diff(s.turns)
    if periods.size < 2:
        nothing(ax, "fewer than three whole cycles")
        return
    factor, unit = scale(float(periods.max()), "s")
    number = np.arange(1, periods.size + 1, dtype=float)
    if (band := curves.envelope(number, periods * factor, 600)) is None:
        style = {"ls": "-" if periods.size <= 120 else "", "color": LIGHT["discharge"], "zorder": 3}
        ax.plot(number, periods * factor, marker="o", ms=2.6, lw=0.8, label="single periods", **style)
    else:
        ax.fill_between(*band, color=LIGHT["data"], label="single periods, extremes")
    q = s.explanation.measured.get("period")
    if q is not None:
        ax.axhline(q.value * factor, color=LIGHT["charge"], lw=1.4, label=f"mean {si(q.value, 's', q.u)}")
        low, high = ((q.value + k * (q.u or 0.0)) * factor for k in (-2, 2))
        ax.axhspan(low, high, color=LIGHT["charge"], alpha=0.15, lw=0)
    if s.target is not None and abs(s.target - periods.mean()) < 3 * float(np.ptp(periods)):
        ax.axhline(s.target * factor, color=LIGHT["target"], lw=1.2, ls=":", label="target")
    ax.xaxis.get_major_locator().set_params(integer=True)
    ax.set_xlabel("cycle number")
    ax.set_ylabel(f"period ({unit})")
    ax.margins(y=0.15)
    legend_above(ax)
