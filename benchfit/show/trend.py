"""What a burn-in's log says, as a bench user reads it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from typing import Any

from benchfit.burnin.result import Cause, QuantityTrend, Trend, UnitTrend
from benchfit.quantity import percent, si
from benchfit.show import words
from benchfit.show.layout import Column, Page, Style, clean
from benchfit.show.trend_record import NOISES

LAWS = {
    "none": "no drift",
    "linear": "linear",
    "logarithmic": "logarithmic in time",
    "settling": "settling",
    "step": "a step",
}
_MOST = 12


# --- one record, as it is logged ------------------------------------------------------------------


def record_line(shown: Mapping[str, Any], alarms: Sequence[str], first: float | None) -> str:
    """One record in one line: when, its number, frequency, how far that is off the first record, duty."""
    at = datetime.fromisoformat(shown["acquired"]).astimezone().strftime("%Y-%m-%d %H:%M:%S")
    parts = [f"{at}  #{shown['seq']}"]
    if shown.get("unit"):
        parts.append(clean(shown["unit"]))
    if "error" in shown:
        return "  ".join([*parts, f"failed: {clean(shown['error']['says'])}"])
    measured = shown.get("measured") or {}
    frequency, duty = measured.get("frequency"), measured.get("duty")
    if frequency:
        parts.append(si(frequency["value"], "Hz", frequency.get("u_noise") or frequency.get("u")))
        if first:
            parts.append(f"{percent(frequency['value'] / first - 1, signed=True)} since the first")
    else:
        parts.append("does not oscillate" if measured.get("oscillates") is False else "no frequency")
    if duty:
        parts.append(f"duty {percent(duty['value'])}")
    return "  ".join([*parts, *(f"[{clean(alarm)}]" for alarm in alarms)])


# --- report ---------------------------------------------------------------------------------------


def render(trend: Trend, *, width: int = 80, colour: bool = False) -> str:
    """The printed report, no line wider than ``width`` (60 at least). No newline at the end."""
    page = Page(max(width, 60), colour)
    _heading(page, trend)
    for unit in trend.units:
        if len(trend.units) > 1:
            page.section(f"Unit {clean(unit.unit)}", f"{words.count(unit.records)} records, {unit.failures} failed")
        _finding(page, unit, trend.started or 0.0)
    if len(trend.units) > 1:
        _siblings(page, trend)
    for unit in trend.units:
        mark = f"{clean(unit.unit)}: " if len(trend.units) > 1 else ""
        _table(page, unit, mark)
        _shares(page, unit, mark)
        _deviations(page, unit, mark)
    _alarms(page, trend)
    _interruptions(page, trend)
    return "\n".join(page.lines)


def _heading(page: Page, trend: Trend) -> None:
    head = ", ".join(x for x in (trend.title, trend.circuit or "") if x)
    if head:
        page.prose(head, style="bold")
    failed = f", {trend.failures} failed" if trend.failures else ""
    lasted = ""
    if trend.started is not None and trend.ended is not None:
        lasted = f" over {_spoken(trend.ended - trend.started)}"
    page.prose(f"{trend.path}, {words.count(trend.records)} records{lasted}{failed}", style="dim")
    if trend.started is not None:
        open_ = "" if trend.is_closed else "; not closed: it is being written, or was interrupted"
        page.prose(f"{_utc(trend.started)} to {_utc(trend.ended)}{open_}", style="dim")
    for note in trend.notes:
        page.prose(note, "note: ", "dim")
    if len(trend.units) == 1:
        page.lines.append("")


def _finding(page: Page, unit: UnitTrend, started: float) -> None:
    """What a bench user wants to know first: does it drift, of what, when does it leave its limits."""
    frequency = unit.quantities.get("frequency")
    if frequency is None:
        page.prose("No record has a frequency.", style="bold")
        return
    if frequency.law is None:
        page.prose("Too few records to tell a drift from noise.", style="bold")
    elif frequency.law == "none":
        half = 2 * frequency.u_change / abs(frequency.mean)
        if frequency.probability >= 0.5:
            says = f"The frequency does not drift: any change over the run is below {percent(half)}"
            page.prose(f"{says} ({words.chance(frequency.probability)} sure).", style="good")
        else:
            page.prose(f"No drift of the frequency is proven; a change of up to {percent(half)} is possible.")
    else:
        page.prose(_drifting(frequency, started), style="bold")
        for line in _blamed(unit):
            page.prose(line, style="bold")
    for quantity in unit.quantities.values():
        if quantity.leaving is not None:
            page.prose(_leaves(quantity, started), style=_leaving_style(quantity))


def _drifting(q: QuantityTrend, started: float) -> str:
    moved = percent(q.change / abs(q.mean), q.u_change / abs(q.mean), signed=True)
    if q.law == "settling":
        law = f"settling with a time constant of {_spoken(q.parameter)}"
    elif q.law == "step":
        law = f"a step at {_utc(started + q.parameter)}"
    else:
        law = "logarithmic in time, as class-2 ceramics age" if q.law == "logarithmic" else "linear in time"
    says = f"The frequency changed by {moved} over the run, {law} ({words.chance(q.probability)} sure)"
    if q.probability < 0.9 and q.runner_up[1] > 0.05:
        says += f"; {LAWS[q.runner_up[0]]} is possible too ({words.chance(q.runner_up[1])})"
    return f"{says}."


def _blamed(unit: UnitTrend) -> list[str]:
    if not unit.causes:
        return [f"What drifts cannot be told: {unit.why_no_cause}."] if unit.why_no_cause else []
    first = unit.causes[0]
    if first.either:
        names = words.listed([first.cause, *first.either], "or")
        share = sum(c.share for c in unit.causes if c.cause in (first.cause, *first.either))
        return [f"Due to {names} (together {percent(share)} of it): these captures cannot tell which."]
    live = [c for c in unit.causes if abs(c.share) >= 0.1]
    return [f"Due to {words.listed([f'{c.cause} ({percent(c.share, c.u)} of it; {_moved(c)})' for c in live])}."]


def _moved(cause: Cause) -> str:
    if cause.unit == "1":
        return f"it moved by {percent(cause.change, signed=True)}"
    return f"it moved by {si(cause.change, cause.unit)}"


def _leaves(q: QuantityTrend, started: float) -> str:
    assert q.leaving is not None
    limits = " … ".join(words.plain_amount(q.name, x, q.unit) for x in (q.leaving.low, q.leaving.high))
    name = words.label(q.name)
    if q.leaving.at is not None:
        earliest = _utc(None if q.leaving.earliest is None else started + q.leaving.earliest)
        latest = "later than can be said" if q.leaving.latest is None else _utc(started + q.leaving.latest)
        span = f"95 %: {earliest} to {latest}"
        return f"The {name} leaves its limits {limits} about {_utc(started + q.leaving.at)} ({span})."
    return f"When the {name} leaves its limits {limits}: {q.leaving.why}."


def _leaving_style(q: QuantityTrend) -> Style:
    assert q.leaving is not None
    if q.leaving.why.startswith("it is outside"):
        return "bad"
    return "doubt" if q.leaving.at is not None else "plain"


def _table(page: Page, unit: UnitTrend, mark: str) -> None:
    rows = [["", "mean", "change over the run", "drift per hour", "law"]]
    styles: list[Style] = ["dim"]
    for q in unit.quantities.values():
        # Parts that the captures do not show, and parasitics that do not stand out from nothing, move at
        # random.
        if q.kind == "part" and (q.law is None or abs(q.mean) <= 2 * q.u):
            continue
        law = LAWS.get(q.law or "", "too few records")
        if q.law == "none" and q.probability < 0.5:
            law = "no drift proven"
        elif q.law is not None:
            law = f"{law}, {words.chance(q.probability)}"
        rows.append(
            [
                q.name if q.kind == "part" else words.label(q.name),
                _amount(q.name, q.mean, q.u, q.unit),
                *_moves(q),
                law,
            ]
        )
        styles.append("plain" if q.is_drifting else "dim")
    if len(rows) > 1:
        page.section(f"{mark}Quantities", "± U, k = 2")
        columns = [Column(), Column(True, 2), Column(True), Column(True, 1), Column(rank=0)]
        page.table(rows, columns, styles)


def _amount(name: str, value: float, u: float, unit: str) -> str:
    return percent(value, u) if name == "duty" else si(value, unit, u)


def _moves(q: QuantityTrend) -> tuple[str, str]:
    if not math.isfinite(q.change):
        return "", ""
    level = abs(q.mean)
    change = si(q.change, q.unit, q.u_change)
    if level > 0 and abs(q.change) < level:
        change = percent(q.change / level, q.u_change / level, signed=True)
    return change, f"{si(q.drift * 3600, q.unit, q.u_drift * 3600)}/h".replace(" /h", "/h")


def _shares(page: Page, unit: UnitTrend, mark: str) -> None:
    if not unit.causes:
        return
    page.section(f"{mark}The frequency's drift by cause", "shares of it, ± U")
    rows = [
        [
            c.cause,
            percent(c.share, c.u),
            _moved(c),
            f"not told from {words.listed(c.either)}" if c.either else "",
        ]
        for c in unit.causes
    ]
    if unit.unexplained is not None and abs(unit.unexplained) >= 0.005:
        rows.append(["unexplained", percent(unit.unexplained), "", ""])
    page.table(rows, [Column(), Column(True), Column(rank=1), Column(rank=2)], [])


def _deviations(page: Page, unit: UnitTrend, mark: str) -> None:
    if not unit.stability:
        return
    page.section(f"{mark}Stability", "overlapping Allan deviation of the fractional frequency")
    rows = [["averaging time", "deviation", "68 % interval", "noise"]]
    for d in unit.stability:
        interval = f"{d.low:.2e} … {d.high:.2e}"
        rows.append([_spoken(d.averaging_time), f"{d.adev:.3e}", interval, NOISES[d.noise]])
    page.table(rows, [Column(True), Column(True), Column(True, 2), Column(rank=1)], ["dim"])


def _siblings(page: Page, trend: Trend) -> None:
    if not trend.departures:
        if len(trend.units) == 2:
            page.prose("Two units cannot show which of them departs; three or more can.", style="dim")
        return
    departing = [d for d in trend.departures if d.is_departing]
    off = [d for d in trend.departures if d.is_off]
    page.section("Against its siblings", "what all do together taken off")
    if not departing and not off:
        page.prose("No unit departs from its siblings.", style="good")
    for d in departing:
        moved = percent(d.change, d.u_change, signed=True)
        name = words.label(d.quantity)
        says = f"{d.unit} departs in its {name}: {moved} against its siblings ({LAWS[d.law]})."
        page.prose(says, style="bad")
    for d in off:
        away = percent(d.level, d.u_level, signed=True)
        says = f"{d.unit} lies {away} off its siblings in its {words.label(d.quantity)}."
        page.prose(says, style="doubt")


def _alarms(page: Page, trend: Trend) -> None:
    if not trend.alarms:
        return
    page.section("Alarms", words.count(len(trend.alarms)))
    units = {q.name: q.unit for unit in trend.units for q in unit.quantities.values()}
    rows = []
    for a in trend.alarms[:_MOST]:
        value, limit = (words.plain_amount(a.quantity, x, units.get(a.quantity, "")) for x in (a.value, a.limit))
        side = "above" if a.value > a.limit else "below"
        ended = f"cleared by #{a.cleared}" if a.cleared else "still on"
        unit = f"{a.unit}: " if a.unit else ""
        rows.append([f"#{a.seq}", _utc(a.acquired), f"{unit}{words.label(a.quantity)} {value} {side} {limit}", ended])
    page.table(rows, [Column(True), Column(rank=2), Column(), Column(rank=1)], [])
    if len(trend.alarms) > _MOST:
        page.prose(f"and {len(trend.alarms) - _MOST} more", "  ", "dim")


def _interruptions(page: Page, trend: Trend) -> None:
    if trend.gaps:
        total = sum(max(0.0, g.ended - g.began) for g in trend.gaps)
        page.section("Gaps", f"{len(trend.gaps)}, {_spoken(total)} in all; nothing is interpolated over them")
        for g in trend.gaps[:_MOST]:
            unit = f"{g.unit}: " if g.unit and len(trend.units) > 1 else ""
            page.prose(f"{unit}{_utc(g.began)} to {_utc(g.ended)}, {_spoken(g.ended - g.began)} ({g.why})", "  ")
        if len(trend.gaps) > _MOST:
            page.prose(f"and {len(trend.gaps) - _MOST} more", "  ", "dim")
    if trend.errors:
        page.section("Failed acquisitions", f"{trend.failures}")
        for says, count in trend.errors:
            page.prose(says, f"  {count} × ")
    if trend.events:
        page.section("Events")
        for at, says in trend.events[:_MOST]:
            page.prose(f"{_utc(at)}: {says}", "  ")


def _utc(at: float | None) -> str:
    return "unknown" if at is None else datetime.fromtimestamp(at, UTC).strftime("%Y-%m-%d %H:%M:%S UTC")


def _spoken(seconds: float) -> str:
    """A duration for people: "12 s", "4 min 10 s", "3 h 05 min", "2 d 4 h"."""
    if not math.isfinite(seconds):
        return "an unknown time"
    left = abs(seconds)
    sign = "−" if seconds < 0 else ""
    if left < 59.95:
        return f"{sign}{left:.3g} s"
    whole = round(left)
    if whole < 3600:
        return f"{sign}{whole // 60} min" + (f" {whole % 60:02d} s" if whole % 60 else "")
    if whole < 2 * 86400:
        return f"{sign}{whole // 3600} h" + (f" {whole % 3600 // 60:02d} min" if whole % 3600 // 60 else "")
    return f"{sign}{whole // 86400} d {whole % 86400 // 3600} h"
