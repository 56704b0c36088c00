"""Drawings of what was concluded: the miss budget as a staircase, the suspects with their probabilities."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from benchfit.show import words
from benchfit.show.layout import wrapped
from benchfit.show.palette import LIGHT, minus, nothing, plain, scale, symbol

if TYPE_CHECKING:
    from benchfit.explain.result import Explanation, Miss, Suspect

Row = tuple[str, float, float | None]


def draw_budget(axes: Sequence[Any], explanation: Explanation, name: str = "frequency") -> None:
    """A staircase from the target to what was built, one step for each cause, with the U of each step."""
    ax, miss = axes[0], (explanation.miss or {}).get(name)
    rows = words.budget_rows(miss)
    if miss is None or miss.built is None or not rows:
        nothing(ax, "no target" if miss is None else "no miss to divide")
        return
    factor, unit = (100.0, "%") if name == "duty" else scale(max(abs(miss.target), abs(miss.built)), "Hz")
    size = miss.target * factor
    ends, at = [], 1.0
    for _, share, _ in rows:
        ends.append((at * size, (at + share) * size))
        at += share
    reach = [
        end + k * (u or 0.0) * abs(size)
        for (_, end), (_, _, u) in zip(ends, rows, strict=True)
        for k in (-2, 2)
    ]
    _room(ax, [size, miss.built * factor, *reach])
    _steps(ax, rows, ends, abs(size))
    last = len(rows) + 1
    ax.plot([size, size], [-0.4, 1.38], color=LIGHT["target"], lw=2.2, solid_capstyle="butt")
    ax.plot(
        [miss.built * factor] * 2,
        [last - 1.38, last + 0.4],
        color=LIGHT["ink"],
        lw=2.2,
        solid_capstyle="butt",
    )
    ax.axvline(size, color=LIGHT["target"], lw=0.8, ls=":", zorder=0.5)
    _limits(ax, miss, factor)
    ax.set_yticks(range(last + 1), _labels(explanation, name, miss, rows))
    ax.set_ylim(last + 0.6, -0.6)
    ax.grid(False, axis="y")
    ax.tick_params(axis="y", length=0)
    ax.set_xlabel(f"{words.label(name)} ({unit})")


def _labels(explanation: Explanation, name: str, miss: Miss, rows: Sequence[Row]) -> list[str]:
    unit, q = words.units(name), explanation.measured.get(name)
    built = words.amount(name, q) or words.plain_amount(name, miss.built, unit)
    own = ("on paper", "unexplained", "probe")
    causes = [c if c in own or c.endswith(" others") else symbol(c) for c, _, _ in rows]
    return [f"target {words.plain_amount(name, miss.target, unit)}", *causes, f"built {built}"]


def _room(ax: Any, xs: Sequence[float]) -> None:
    low, high = min(xs), max(xs)
    room = 0.14 * ((high - low) or abs(high) or 1.0)
    ax.set_xlim(low - room, high + 1.8 * room)


def _steps(ax: Any, rows: Sequence[Row], ends: Sequence[tuple[float, float]], size: float) -> None:
    digits = words.share_decimals(rows)
    for i, ((_, share, u), (begin, end)) in enumerate(zip(rows, ends, strict=True), start=1):
        ax.barh(
            i, end - begin, left=begin, height=0.72, color=LIGHT["charge" if share < 0 else "discharge"], lw=0
        )
        big_u = 2 * abs(u) * size if u else 0.0
        if big_u:
            ax.errorbar(end, i, xerr=big_u, fmt="none", ecolor=LIGHT["ink"], elinewidth=0.9, capsize=2.2)
        if i < len(rows):
            ax.plot([end, end], [i + 0.36, i + 0.64], color=LIGHT["soft"], lw=0.8)
        half = words.share_half(u, digits)
        text = minus(f"{words.share(share, digits)} {half}".rstrip() + " %")
        at = (max(begin, end + big_u), i)
        ax.annotate(text, at, xytext=(6, 0), textcoords="offset points", va="center", fontsize=8)


def _limits(ax: Any, miss: Miss, factor: float) -> None:
    """The acceptance limits as a band."""
    if miss.limits is None:
        return
    low, high = (miss.target * (1 + x) * factor for x in miss.limits)
    left, right = ax.get_xlim()
    ax.axvspan(low, high, color=LIGHT["band"], lw=0, zorder=0)
    ax.set_xlim(left, right)
    if low < right and high > left:
        at = (left + 0.99 * (min(high, right) - left), 0.985)
        style = {"ha": "right", "va": "top", "fontsize": 7.5, "color": LIGHT["soft"]}
        ax.text(*at, "limits", transform=ax.get_xaxis_transform(), **style)


def draw_suspects(axes: Sequence[Any], explanation: Explanation, most: int = 6) -> None:
    """The likeliest suspects with their probabilities and what each says; the line is what settles a case."""
    ax = axes[0]
    suspects = [s for s in explanation.suspects[:most] if s.probability >= 0.01] or list(
        explanation.suspects[:1]
    )
    if not suspects:
        nothing(ax, "no suspect could be named")
        return
    for i, suspect in enumerate(suspects):
        told = i == 0 and explanation.settled
        role = ("charge" if suspect.causes else "output") if told else "data"
        ax.barh(i, 100 * suspect.probability, height=0.34, color=LIGHT[role], lw=0)
        ax.text(
            100 * suspect.probability + 1.2, i, words.chance(suspect.probability), va="center", fontsize=8.5
        )
        ax.text(
            0.3, i - 0.24, _sentence(suspect), va="bottom", fontsize=8, color=LIGHT["ink"], linespacing=1.15
        )
    ax.axvline(90, color=LIGHT["ink"], lw=0.9, ls=":", zorder=0.9)
    ax.text(90, 1.01, "settled from 90 %", transform=ax.get_xaxis_transform(), va="bottom", ha="center",
            fontsize=7.5, color=LIGHT["soft"])  # fmt: skip
    ax.set_xlim(0, 108)
    ax.set_xticks(range(0, 101, 20))
    ax.set_ylim(len(suspects) - 0.6, -0.8)
    ax.set_yticks(range(len(suspects)), [_names(s) for s in suspects])
    ax.tick_params(axis="y", length=0)
    ax.grid(False, axis="y")
    ax.set_xlabel("probability (%)")


def _names(suspect: Suspect) -> str:
    return " and ".join(symbol(n) for n in suspect.causes) if suspect.causes else "nothing"


def _sentence(suspect: Suspect) -> str:
    """What a suspect says, on two lines at most."""
    lines = wrapped(plain(words.charge(suspect)), 100)
    return "\n".join([lines[0], lines[1] + (" …" if len(lines) > 2 else "")] if len(lines) > 1 else lines)
