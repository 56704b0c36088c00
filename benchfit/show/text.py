"""An explanation as a bench user reads it: the verdict first, then what it rests on."""

from __future__ import annotations

from benchfit.explain.result import Explanation, PartFound, Quantity
from benchfit.show import words
from benchfit.show.design import render_circuit, render_prediction
from benchfit.show.layout import Column, Page, Style, bar, clean, paint, shortened

__all__ = ["render", "render_circuit", "render_prediction"]

_MOST_SUSPECTS = 5
_MOST_RULED_OUT = 3


def render(explanation: Explanation, *, width: int = 80, colour: bool = False) -> str:
    """The printed report of one explanation, no line wider than ``width`` (60 at least).

    Verdict, what a change did, measured against target, budget of the miss, suspects, parts, what cannot be
    told apart, next readings, remedies, warnings and cautions; a section of which nothing is known is left
    out. With ``colour`` the lines hold SGR sequences. No newline at the end.
    """
    page = Page(max(width, 60), colour)
    _heading(page, explanation)
    _as_found(page, explanation)
    _measured(page, explanation)
    _budgets(page, explanation)
    _suspects(page, explanation)
    _parts(page, explanation)
    _readings(page, explanation)
    _remedies(page, explanation)
    page.remarks(words.said_warnings(explanation))
    return "\n".join(page.lines)


def _heading(page: Page, explanation: Explanation) -> None:
    title, *rest = [*words.identity(explanation), ""]
    head = ", ".join(x for x in (title, *rest) if x)
    if head:
        page.prose(head, style="bold")
    for facts in explanation.captures:
        cycles = "" if not facts.cycles else f", {words.count(facts.cycles)} cycles"
        tail = f", {words.count(facts.samples)} samples{cycles}"
        page.lines.append(
            paint(shortened(clean(facts.path), page.width - len(tail)) + tail, "dim", page.colour)
        )
    page.lines.append("")
    styles: dict[str | None, Style] = {"pass": "good", "fail": "bad", "conditional": "doubt"}
    page.prose(words.verdict_sentence(explanation), style=styles.get(explanation.verdict, "bold"))
    page.prose(words.blame_sentence(explanation), style="bold")


def _as_found(page: Page, explanation: Explanation) -> None:
    if explanation.as_found is None:
        return
    lifted = "; probe lifted" if explanation.as_found.is_lifted else ""
    page.section("As found, as left", f"± U, k = 2{lifted}")
    rows = [["", words.label("frequency"), words.label("duty")], *words.as_left_rows(explanation.as_found)]
    if len(rows) > 1:
        page.table(rows, [Column(), Column(True), Column(True)], ["dim"])
    good: dict[str | None, Style] = {"as predicted": "good", "partly": "doubt", "not by this change": "bad"}
    what, *effect = words.as_left_sentences(explanation.as_found)
    page.prose(what, "  ")
    for says in effect:
        page.prose(says, "  ", good.get(explanation.as_found.effect, "plain"))


def _measured(page: Page, explanation: Explanation) -> None:
    measured = explanation.measured

    def get(name: str) -> str:
        return words.amount(name, measured.get(name))

    rows = [["", "built", "target", "miss"]]
    for name in ("frequency", "duty"):
        rows += _target_row(explanation, name)
    rows += [[words.label(name), get(name), "", ""] for name in ("period", "jitter") if get(name)]
    extra = [n for n in measured if n not in words.LABELS and get(n)]
    rows += [[words.label(name), get(name), "", ""] for name in extra]
    if len(rows) > 1:
        page.section("Measured", "± U, k = 2")
        if not any(row[2] for row in rows[1:]):
            rows = [[*row[:2], "", ""] for row in rows[1:]]
        page.table(rows, [Column(), Column(True), Column(True, 2), Column(True, 1)], [])
    pairs = [
        ("charge", "discharge", [("lasts", "charge_time", "discharge_time"), ("ends at", "upper", "lower"),
         ("heads for", "charge_asymptote", "discharge_asymptote"),
         ("time constant", "charge_time_constant", "discharge_time_constant")]),
        ("high", "low", [("output level", "high", "low"), ("rise, fall time", "rise_time", "fall_time")]),
    ]  # fmt: skip
    for left, right, names in pairs:
        block = [[text, get(a), get(b)] for text, a, b in names if get(a) or get(b)]
        if block:
            head = ["", *(h if any(row[i] for row in block) else "" for i, h in ((1, left), (2, right)))]
            page.table([head, *block], [Column(), Column(True), Column(True)], ["dim"])


def _target_row(explanation: Explanation, name: str) -> list[list[str]]:
    found = words.amount(name, explanation.measured.get(name))
    miss = (explanation.miss or {}).get(name)
    if not found and miss is None:
        return []
    if miss is None:
        return [[words.label(name), found, "", ""]]
    target = words.plain_amount(name, miss.target, words.units(name))
    rows = [[words.label(name), found or "unknown", target, words.change(miss.miss)]]
    lifted = (explanation.without_probe or {}).get(name)
    if lifted is not None:
        off = lifted.value / miss.target - 1 if miss.target else None
        rows.append(["  without the probe", words.amount(name, lifted), "", words.change(off)])
    return rows


def _budgets(page: Page, explanation: Explanation) -> None:
    for name, miss in (explanation.miss or {}).items():
        rows = words.budget_rows(miss)
        if miss is None or not rows or not words.misses(explanation, name):
            continue
        page.section(f"Miss budget, {words.label(name)}", "shares in % of the target, ± U")
        digits = words.share_decimals(rows)
        cells = [[cause, words.share(x, digits), words.share_half(u, digits)] for cause, x, u in rows]
        cells.append(["miss", words.share(miss.miss, digits), ""])
        largest = max(abs(x) for _, x, _ in rows)
        used = sum(max(len(row[i]) for row in cells) for i in range(3)) + 8
        half = min(16, (page.width - used - 1) // 2)
        bars = [bar(x, largest, half) if half >= 4 else "" for _, x, _ in rows]
        styles: list[Style] = ["plain" for _ in rows]
        styles.append("bold")
        full = [[*c, b] for c, b in zip(cells, [*bars, ""], strict=True)]
        page.table(full, [Column(), Column(True), Column(True, 1), Column(rank=2)], styles)


def _suspects(page: Page, explanation: Explanation) -> None:
    suspects = explanation.suspects
    if suspects:
        page.section("Suspects" + ("" if explanation.settled else ", not settled"))
        shown = [s for s in suspects[:_MOST_SUSPECTS] if s.probability >= 0.01] or list(suspects[:1])
        for number, suspect in enumerate(shown):
            head = f"  {words.chance(suspect.probability):>6}  "
            page.prose(words.charge(suspect), head, "bold" if number == 0 else "plain")
        if rest := suspects[len(shown) :]:
            together = words.chance(sum(s.probability for s in rest))
            page.prose(f"{len(rest)} more, together", f"  {together:>6}  ", "dim")
    if explanation.ruled_out:
        if not suspects:
            page.section("Looked for and not found")
        for out in explanation.ruled_out[:_MOST_RULED_OUT]:
            page.prose(f"{out.cause}: {out.by}", "      no  ", "dim")
        if (more := len(explanation.ruled_out) - _MOST_RULED_OUT) > 0:
            page.prose(f"{more} more", "      no  ", "dim")


def _parts(page: Page, explanation: Explanation) -> None:
    known = words.told(explanation)
    if known:
        page.section("Parts as built")
        rows = [["", "built", "nominal", "off", "limits", "known from"]]
        styles: list[Style] = ["dim"]
        for part in known:
            nominal = (
                words.plain_amount("", part.nominal, part.unit) if part.nominal is not None else "absent"
            )
            limits = {True: "inside", False: "outside", None: ""}[part.within]
            rows.append(
                [part.name, _found(part), nominal, words.change(part.deviation), limits, part.known_from]
            )
            styles.append("bad" if part.within is False else "plain")
        columns = [Column(), Column(True), Column(True, 3), Column(True), Column(rank=1), Column(rank=2)]
        page.table(rows, columns, styles)
    apart = [words.listed(group) for group in explanation.unseparated]
    grouped = {name for group in explanation.unseparated for name in group} | {p.name for p in known}
    sheet = [p.name for p in explanation.parts if p.known_from == "build sheet" and p.nominal is not None]
    taken = [name for name in sheet if name not in grouped]
    if (apart or taken) and not known:
        page.section("Parts")
    if taken:
        page.prose(f"Known from the sheet rather than the capture: {', '.join(taken)}.", "  ", "dim")
    for group in apart:
        page.prose(
            f"Cannot be told apart by this capture: {group}; only their combined effect is known.", "  "
        )


def _found(part: PartFound) -> str:
    if part.value is None:
        return ""
    return words.amount("", Quantity(part.value, part.u, part.unit))


def _readings(page: Page, explanation: Explanation) -> None:
    if useful := words.worthwhile(explanation):
        page.section("Read next", "how much surer it would make the answer")
        for r in useful:
            page.prose(words.reading(explanation, r), f"  {f'+{100 * r.would_settle:.0f} %':>6}  ")


def _remedies(page: Page, explanation: Explanation) -> None:
    if not explanation.remedies:
        return
    page.section("What would bring it onto its target")
    unit = {p.name: p.unit for p in explanation.parts}
    for way in words.ways(explanation.remedies):
        what = " with ".join(words.exchange(r, unit.get(r.part, "")) for r in way)
        then = [words.amount(name, way[0].predicts.get(name)) for name in ("frequency", "duty")]
        page.prose(f"{what}: {', duty cycle '.join(t for t in then if t)}", "  ", rest=" " * 4)
