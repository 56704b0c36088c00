"""The live view: what an instrument shows, acquisition by acquisition, redrawn in place; or a line each."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import IO, Any

from benchfit.explain.result import Explanation, Quantity, Turn
from benchfit.quantity import percent, si
from benchfit.show import words
from benchfit.show.chart_cells import chart
from benchfit.show.layout import Style, cells, clean, paint, shortened, wrapped

_GAUGE = 21
_LEAST_CHART, _MOST_CHART = 3, 14


@dataclass(frozen=True)
class LiveState:
    """What is known at one moment of a live run.

    Attributes
    ----------
    resource, instrument, title : str
    link : str
        State of the link in words; ``is_up``: it stands.
    captures, failures : int
    faults : mapping of int
        How often each kind of fault came; ``last_fault`` says the last one.
    age : float or None
        Seconds since the last capture was acquired.
    pace : float or None
        Seconds from one capture to the next.
    look : Explanation or None
        What the last capture shows (measured only).
    explanation : Explanation or None
        The last explanation; ``lag``: how many seconds older its capture is than the last one.
    targets : mapping of (value, limit)
        Of "frequency" and "duty"; the limit as a share of the value, None where there is none.
    trace : sequence of (seconds ago, value)
        The last minutes of ``trace_name`` ("frequency" or "duty"), oldest first; ``span`` its length (s).
    turn : Turn or None
    """

    resource: str
    instrument: str = ""
    title: str = ""
    link: str = "connecting"
    is_up: bool = False
    captures: int = 0
    failures: int = 0
    faults: Mapping[str, int] = field(default_factory=dict)
    last_fault: str = ""
    age: float | None = None
    pace: float | None = None
    look: Explanation | None = None
    explanation: Explanation | None = None
    lag: float | None = None
    targets: Mapping[str, tuple[float, float | None]] = field(default_factory=dict)
    trace: Sequence[tuple[float, float]] = ()
    trace_name: str = "frequency"
    span: float = 120.0
    turn: Turn | None = None


def live_lines(state: LiveState, width: int, height: int, *, colour: bool = False) -> list[str]:
    """The view as lines, none wider than ``width`` cells and at most ``height`` of them.

    The trace of the last minutes takes the room that is left; where there is none, the less urgent goes.
    """
    inner = max(width, 20)
    top = [*_head(state, inner, colour), *_measured(state, inner, colour)]
    trim = _trim(state, inner, colour)
    below = [*_suspects(state, inner, colour)]
    foot = _foot(state, inner, colour)
    room = height - len(top) - len(trim) - len(below) - len(foot) - 1
    middle: list[str] = []
    if room >= _LEAST_CHART:
        middle = _trace(state, inner, min(room, _MOST_CHART), colour)
    lines = [*top, *trim, *middle, *below]
    return [*lines[: max(height - len(foot), 0)], *foot][: max(height, 1)]


def plain_line(
    stamp: str,
    look: Explanation,
    explanation: Explanation | None,
    explained: str | None,
    targets: Mapping[str, tuple[float, float | None]],
    turn: Turn | None = None,
) -> str:
    """One acquisition on one line, for a pipe; ``explained``: the stamp of the capture that was explained."""
    if not look.oscillates:
        parts = ["does not oscillate"]
    else:
        parts = []
        for name in ("frequency", "duty"):
            q = look.measured.get(name)
            if q is not None:
                off = _miss(q, targets.get(name))
                amount = words.amount(name, q)
                parts.append(f"{words.label(name)} {amount}" + (f" ({off})" if off else ""))
        levels = [words.amount(name, look.measured.get(name)) for name in ("lower", "upper")]
        if all(levels):
            parts.append(f"turns at {levels[0]} and {levels[1]}")
    if explanation is not None and explanation.suspects:
        first = explanation.suspects[0]
        old = f" (of {explained})" if explained and explained != stamp else ""
        parts.append(f"{words.chance(first.probability)} {words.charge(first)}{old}")
    if turn is not None:
        parts.append(turn_sentence(turn))
    parts += [remark.code for remark in look.warnings]
    return clean(f"{stamp}  {'; '.join(parts)}")


def failure_line(stamp: str, says: str) -> str:
    """A failed acquisition on one line."""
    return clean(f"{stamp}  no capture: {says}")


def turn_sentence(turn: Turn) -> str:
    """Which way and how far to turn, and whether one may stop."""
    name = words.label(turn.quantity)
    if turn.now is None or turn.goal is None or turn.travel is None:
        return f"trim {turn.part}: no setting of it gives this {name}; look at the suspects first"
    if not turn.is_reachable:
        end, side = (turn.low, "lower") if turn.goal < turn.low else (turn.high, "upper")
        best = "" if turn.best is None else f", which leaves {percent(turn.best, signed=True)}"
        needs, stop = si(turn.goal, turn.unit), si(end, turn.unit)
        return (
            f"trim {turn.part}: out of reach, it would take {needs}; turn it to its {side} end {stop}{best}"
        )
    if turn.is_there:
        text = f"trim {turn.part}: leave it, it is where it should be within the uncertainty"
    else:
        way = "raise" if turn.goal > turn.now else "lower"
        by = si(abs(turn.goal - turn.now), turn.unit, turn.u)
        share = f"{100 * abs(turn.travel):.2g} % of its travel"
        text = f"trim {turn.part}: {way} it by {by} ({share}), to {si(turn.goal, turn.unit)}"
    return f"{text}; {_patience(turn)}"


def _patience(turn: Turn) -> str:
    if turn.is_tight:
        return "inside the limit, you may stop" if turn.is_inside else "the estimate is tight enough to go by"
    if turn.wait is None:
        return "the scope's own uncertainty is too large for this limit"
    return f"hold still {_seconds(turn.wait)} for an estimate tight enough to stop"


def _seconds(s: float) -> str:
    if s < 99.5:
        return f"{s:.0f} s" if s >= 9.5 else f"{s:.1f} s"
    return f"{s / 60:.0f} min" if s < 5700 else f"{s / 3600:.1f} h"


# -- the parts of the view --------------------------------------------------------------------------------


def _sides(left: str, right: str, width: int) -> str:
    """Two texts at the two ends of a line; the left one gives way."""
    right = shortened(right, width)
    left = shortened(left, max(width - cells(right) - 2, 0))
    return f"{left}{' ' * max(width - cells(left) - cells(right), 0)}{right}"


def _head(state: LiveState, width: int, colour: bool) -> list[str]:
    title = clean(state.title or (state.look.circuit if state.look and state.look.circuit else "live"))
    mark = "●" if state.is_up else "○"
    link = f"{mark} {clean(state.link)}"
    age = "no capture yet" if state.age is None else f"last {_seconds(state.age)} ago"
    pace = f", {1 / state.pace:.3g}/s" if state.pace and state.pace < 1 else ""
    if state.pace and state.pace >= 1:
        pace = f", every {_seconds(state.pace)}"
    first = _sides(title, f"{link}  {age}{pace}", width)
    where = f"{clean(state.resource)}  {clean(state.instrument)}".rstrip()
    second = _sides(where, f"{words.count(state.captures)} captures", width)
    style: Style = "bold" if state.is_up else "doubt"
    return [paint(first, style, colour), paint(second, "dim", colour), ""]


def _measured(state: LiveState, width: int, colour: bool) -> list[str]:
    look = state.look
    if look is None:
        return ["waiting for the first capture"]
    if not look.oscillates:
        return [paint("does not oscillate", "bad", colour)]
    lines = []
    for name in ("frequency", "duty"):
        q = look.measured.get(name)
        if q is not None:
            lines.append(_against(name, q, state.targets.get(name), width, colour))
    levels = [
        (words.amount(name, look.measured.get(name)), way)
        for name, way in (("upper", "up"), ("lower", "down"))
    ]
    told = [f"{text} going {way}" for text, way in levels if text]
    if told:
        lines.append(shortened(f"{'turns at':<11}{', '.join(told)}", width))
    if look.warnings:
        codes = ", ".join(dict.fromkeys(remark.code for remark in look.warnings))
        lines.append(paint(shortened(f"{'warnings':<11}{codes}", width), "doubt", colour))
    return lines


def _against(
    name: str, q: Quantity, target: tuple[float, float | None] | None, width: int, colour: bool
) -> str:
    text = f"{words.label(name):<11}{words.amount(name, q):<24}"
    if target is None:
        return shortened(text.rstrip(), width)
    value, limit = target
    off = q.value / value - 1
    wanted = words.plain_amount(name, value, words.units(name))
    text += f"{words.change(off):>9} of {wanted}"
    scale = limit if limit else 0.05
    drawn = _gauge(off, scale)
    if len(text) + 2 + len(drawn) <= width:
        text = f"{text:<{width - len(drawn) - 2}}  {drawn}"
    style: Style = "plain"
    if limit:
        u = 2 * (q.u or 0.0) / value
        style = "good" if abs(off) + u <= limit else "bad" if abs(off) - u > limit else "doubt"
    return paint(shortened(text.rstrip(), width), style, colour)


def _gauge(off: float, limit: float) -> str:
    """A scale of twice the limit to either side, the limits marked, a pointer on it; an arrow beyond it."""
    half = _GAUGE // 2
    row = ["─"] * _GAUGE
    row[half] = "┼"
    for side in (-1, 1):
        row[half + side * round(half / 2)] = "│"
    place = half + round(half * off / (2 * limit))
    if place < 0:
        row[0] = "◀"
    elif place >= _GAUGE:
        row[-1] = "▶"
    else:
        row[place] = "●"
    return "".join(row)


def _miss(q: Quantity, target: tuple[float, float | None] | None) -> str:
    return "" if target is None else words.change(q.value / target[0] - 1)


def _trim(state: LiveState, width: int, colour: bool) -> list[str]:
    if state.turn is None:
        return []
    style: Style = "good" if state.turn.is_inside and state.turn.is_tight else "bold"
    return ["", *(paint(line, style, colour) for line in wrapped(turn_sentence(state.turn), width))]


def _trace(state: LiveState, width: int, rows: int, colour: bool) -> list[str]:
    target = state.targets.get(state.trace_name)
    name = words.label(state.trace_name)
    if target is not None:
        points = [(age, 100 * (value / target[0] - 1)) for age, value in state.trace]
        head, unit = f"{name}, miss in %, last {_seconds(state.span)}", "%"
    else:
        scale = 100 if state.trace_name == "duty" else 1
        points = [(age, value * scale) for age, value in state.trace]
        head, unit = f"{name}, last {_seconds(state.span)}", "%" if scale == 100 else "Hz"
    limit = 100 * target[1] if target is not None and target[1] else None
    drawn = chart(points, width, rows - 1, state.span, zero=target is not None, limit=limit, unit=unit)
    return ["", paint(shortened(head, width), "dim", colour), *drawn][: rows + 1]


def _suspects(state: LiveState, width: int, colour: bool) -> list[str]:
    explanation = state.explanation
    if explanation is None:
        return ["", paint("the first explanation is on its way", "dim", colour)] if state.look else []
    old = f" (of {_seconds(state.lag)} before the last capture)" if state.lag and state.lag >= 0.05 else ""
    verdict = words.VERDICTS.get(explanation.verdict or "", "")
    head = f"suspects{old}" + (f"; {verdict}" if verdict else "")
    lines = ["", paint(shortened(head, width), "bold", colour)]
    if not explanation.suspects:
        lines += wrapped(words.blame_sentence(explanation), width, "  ")[:2]
    for number, suspect in enumerate(explanation.suspects[:3]):
        said = wrapped(clean(words.charge(suspect)), width - 2, f"  {words.chance(suspect.probability):>6}  ")
        most = 2 if number == 0 else 1
        lines += said[:most] if len(said) <= most else [*said[: most - 1], f"{said[most - 1]} …"]
    if explanation.next_readings:
        reading = words.reading(explanation, explanation.next_readings[0])
        lines.append(shortened(f"  read next: {clean(reading)}", width))
    return lines


def _foot(state: LiveState, width: int, colour: bool) -> list[str]:
    lines = [""]
    if state.faults:
        counts = ", ".join(f"{kind} {times}" for kind, times in state.faults.items())
        lines.append(paint(shortened(f"faults: {clean(counts)}", width), "doubt", colour))
    if state.last_fault and not state.is_up:
        lines += [paint(line, "doubt", colour) for line in wrapped(clean(state.last_fault), width)[:3]]
    lines.append(paint(shortened("Ctrl-C ends it and keeps what was learned", width), "dim", colour))
    return lines


class LiveScreen:
    """The view on a terminal, redrawn in place on a page of its own; the shell's comes back at the end."""

    def __init__(self, stream: IO[str], *, colour: bool) -> None:
        from rich.console import Console
        from rich.live import Live

        self.colour = colour
        self._console = Console(file=stream, no_color=not colour, highlight=False, markup=False, emoji=False)
        self._live = Live(console=self._console, screen=True, auto_refresh=False, redirect_stderr=False)

    def __enter__(self) -> LiveScreen:
        self._live.__enter__()
        return self

    def __exit__(self, *exc: Any) -> None:
        self._live.__exit__(*exc)

    def draw(self, state: LiveState) -> None:
        """Draw the state at the terminal's present size."""
        from rich.text import Text

        width, height = self._console.size
        lines = live_lines(state, width, height, colour=self.colour)
        text = Text.from_ansi("\n".join(lines), no_wrap=True, overflow="crop")
        self._live.update(text, refresh=True)
