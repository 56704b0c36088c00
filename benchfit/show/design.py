"""What should be: a circuit as it is, and what a build should do before power is applied, as text."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from benchfit.quantity import si
from benchfit.show import words
from benchfit.show.layout import Column, Page, bar

if TYPE_CHECKING:
    from benchfit.circuits.model import Circuit, Part


def render_prediction(prediction: Mapping[str, Any], *, width: int = 80, colour: bool = False) -> str:
    """The printed form of a prediction record.

    What the build should do, how far its tolerances let it stray and which of them matter, within which
    limits it runs, how to capture it, and what to beware of.
    """
    page = Page(max(width, 60), colour)
    heading = ", ".join(str(x) for x in (prediction.get("title"), prediction.get("circuit")) if x)
    page.prose(heading, style="bold")
    page.lines.append("")
    page.prose(_should(prediction), style="bold")
    _predicted(page, prediction)
    _bands(page, prediction)
    _tolerances(page, prediction)
    _margins(page, prediction)
    _advice(page, prediction.get("capture_advice"))
    page.remarks((w["code"], w["says"]) for w in prediction.get("warnings") or ())
    return "\n".join(page.lines)


def render_circuit(circuit: Circuit, *, width: int = 80, colour: bool = False) -> str:
    """One circuit for people: drawing, nodes, parts with their defaults, equations, what can hurt."""
    page = Page(max(width, 60), colour)
    page.prose(f"{circuit.name}: {circuit.title}", style="bold")
    if circuit.drawing:
        page.lines += ["", *(f"  {line}".rstrip() for line in circuit.drawing.splitlines())]
    page.section("Nodes to probe")
    for node in circuit.nodes:
        loads = " (a probe here loads the circuit)" if node.loads else ""
        page.entry(node.name, f"{node.says}{loads}")
    own = [p for p in circuit.parts if p.kind != "parasitic"]
    page.section("Parts", "with the default, or the tolerance taken where none is given")
    for part in own:
        page.entry(part.name, f"{part.says} ({_default(part)})")
    for sets in circuit.alternatives:
        page.prose(f"Give {words.listed([words.listed(names) for names in sets], 'or')}.", "  ")
    stray = [p for p in circuit.parts if p.kind == "parasitic"]
    if stray:
        page.section("Parasitics", "absent unless the capture shows them or the sheet gives them")
        for part in stray:
            page.entry(part.name, part.says)
    if circuit.equations:
        page.section("Equations")
        for equation in circuit.equations:
            page.prose(equation, "  ", rest=" " * 6)
    for hazard in circuit.hazards:
        page.lines.append("")
        page.prose(f"CAUTION: {hazard}", style="bad")
    return "\n".join(page.lines)


def _default(part: Part) -> str:
    unit = part.unit or "ratio"
    if part.nominal is None:
        return f"{unit}; {'optional' if part.optional else 'to be given'}; ± {part.tolerance}"
    return f"{unit}; {'follows other parts ' if part.base is not None else ''}{part.nominal}"


def _should(prediction: Mapping[str, Any]) -> str:
    predicted = prediction.get("predicted") or {}
    if not prediction.get("oscillates"):
        says = [
            w["says"] for w in prediction.get("warnings") or () if w["code"] in ("no-oscillation", "latch-up")
        ]
        return " ".join(["Should not oscillate.", *says[:1]])
    runs = _value("frequency", predicted.get("frequency"))
    text = f"Should run at {runs}" if runs else "Should oscillate"
    band = (prediction.get("band") or {}).get("frequency")
    if band and None not in band:
        text += f", anywhere from {si(band[0], 'Hz')} to {si(band[1], 'Hz')} within its tolerances"
    miss = (prediction.get("miss") or {}).get("frequency")
    if miss and miss.get("on_paper") is not None:
        target = f" of {si(miss['target'], 'Hz')}" if miss.get("target") else ""
        off = float(miss["on_paper"])
        side = "above" if off > 0 else "below"
        on = "on" if abs(off) < 5e-5 else f"{words.change(abs(off)).lstrip('+')} {side}"
        text += f"; on paper {on} its target{target}"
    return text + "."


def _value(name: str, q: Mapping[str, Any] | None) -> str:
    if not q or q.get("value") is None:
        return ""
    return words.plain_amount(name, float(q["value"]), str(q.get("unit", "")))


def _predicted(page: Page, prediction: Mapping[str, Any]) -> None:
    predicted = prediction.get("predicted") or {}
    rows = [[words.label(name), text] for name, q in predicted.items() if (text := _value(name, q))]
    if rows:
        page.section("Predicted", "of the nominal parts")
        page.table(rows, [Column(), Column(True)], [])


def _bands(page: Page, prediction: Mapping[str, Any]) -> None:
    """How far frequency and duty may stray: three answers, from the gloomiest on."""
    kinds = [
        ("worst case", "band"),
        ("root sum of squares, ± 2 u", "root_sum_square"),
        ("95 % of builds", "monte_carlo"),
    ]
    rows = []
    for text, key in kinds:
        ranges = [_range(name, (prediction.get(key) or {}).get(name)) for name in ("frequency", "duty")]
        if any(ranges):
            rows.append([text, *ranges])
    if rows:
        page.section("Spread over the tolerances")
        page.table(
            [["", "frequency", "duty cycle"], *rows], [Column(), Column(True), Column(True, 1)], ["dim"]
        )
    running = (prediction.get("monte_carlo") or {}).get("oscillates")
    if running is not None and running < 0.9995:
        page.prose(f"{words.chance(1 - running)} of such builds would not oscillate.", "  ", "bad")


def _range(name: str, band: Sequence[float | None] | None) -> str:
    if not band or band[0] is None or band[1] is None:
        return ""
    low, high = (words.plain_amount(name, x, words.units(name)) for x in band)
    return f"{low} to {high}"


def _tolerances(page: Page, prediction: Mapping[str, Any]) -> None:
    """What each tolerance does to the frequency, the worst first."""
    shares = ((prediction.get("miss") or {}).get("frequency") or {}).get("shares") or []
    moves = {c["part"]: c for c in prediction.get("contributions") or ()}
    known = {s["cause"]: float(s["share"]) for s in shares if s.get("share")}
    shown = sorted((n for n, x in known.items() if x >= 0.005), key=lambda n: -known[n])[:8]
    if not shown:
        return
    page.section("What each tolerance does to the frequency", "share of the variance")
    largest, half = known[shown[0]], 16
    rows = [["", "share", "at its low limit", "at its high limit", ""]]
    for name in shown:
        move = moves.get(name, {})
        ends = [words.change(move.get(key)) for key in ("at_low", "at_high")]
        rows.append([name, words.chance(known[name]), *ends, bar(known[name], largest, half)[half + 1 :]])
    columns = [Column(), Column(True), Column(True, 2), Column(True, 2), Column(rank=3)]
    page.table(rows, columns, ["dim"])


def _margins(page: Page, prediction: Mapping[str, Any]) -> None:
    rows = []
    for m in prediction.get("margins") or ():
        ends = [
            f"{side} {si(float(m[side]), m['unit'])}"
            for side in ("above", "below")
            if m.get(side) is not None
        ]
        rows.append(f"{m['part']} {' and '.join(ends)}")
    if rows:
        page.section("It runs while")
        for text in rows:
            page.prose(text, "  ")


def _advice(page: Page, advice: Any) -> None:
    if not advice:
        return
    page.section("How to capture it")
    if isinstance(advice, str):
        page.prose(advice, "  ")
        return
    items = advice.items() if isinstance(advice, Mapping) else (("", x) for x in advice)
    for name, value in items:
        if text := _advised(name, value):
            page.entry(str(name).replace("_", " "), text) if name else page.prose(text, "  - ")


def _advised(name: str, value: Any) -> str:
    """One piece of advice as text: sentences as they are, lists joined, times with their prefix."""
    if value is None or value == "" or value == []:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int | float):
        seconds = "time" in name or "interval" in name
        return si(float(value), "s" if seconds else "") if math.isfinite(value) else ""
    if isinstance(value, Mapping):
        if "value" in value:
            return _value("", value)
        return ", ".join(f"{k} {_advised(str(k), v)}" for k, v in value.items())
    if isinstance(value, list | tuple):
        return ", ".join(_advised(name, v) for v in value)
    return str(value)
