"""One capture's answer as a self-contained HTML page: no script, nothing fetched, fit for print."""

from __future__ import annotations

import os
import re
from pathlib import Path
from typing import TYPE_CHECKING, Any

from benchfit.errors import UsageError
from benchfit.explain.result import AsFound, CaptureFacts, Explanation
from benchfit.quantity import si
from benchfit.show import words
from benchfit.show.layout import clean, glued

if TYPE_CHECKING:
    from benchfit.capture.model import Capture
    from benchfit.cycle.constants import CycleConstants

Table = dict[str, Any]

_SPANS = ("minimum", "maximum", "resolution")


def report(
    explanation: Explanation,
    constants: CycleConstants | None,
    capture: Capture | None,
    path: str | os.PathLike[str],
    *,
    acquired: str | None = None,
) -> None:
    """Write the page of one explanation; the file appears whole or not at all.

    Parameters
    ----------
    explanation, constants, capture
        What was found; without a capture the page has no drawings of waveforms.
    path : path-like
    acquired : str, optional
        When the capture was taken (UTC, ISO 8601).

    Raises
    ------
    UsageError
        Where the file cannot be written.
    """
    write(path, page(explanation, constants, capture, acquired=acquired))


def page(
    explanation: Explanation,
    constants: CycleConstants | None = None,
    capture: Capture | None = None,
    *,
    acquired: str | None = None,
) -> str:
    """The page of one explanation as text."""
    title = explanation.title or explanation.circuit or Path(explanation.captures[0].path).name
    return rendered(
        "report.html",
        title=clean(title),
        verdict=explanation.verdict,
        sentences=[typeset(words.verdict_sentence(explanation)), typeset(words.blame_sentence(explanation))],
        rule=words.RULE if explanation.verdict else "",
        identity=_identity(explanation, acquired),
        cautions=[typeset(says) for code, says in words.said_warnings(explanation) if code == "hazard"],
        warnings=[
            (clean(code), typeset(says))
            for code, says in words.said_warnings(explanation)
            if code != "hazard"
        ],
        captures=[_capture_table(c, len(explanation.captures) > 1) for c in explanation.captures],
        measured=_measured(explanation),
        budgets=_budgets(explanation),
        suspects=_suspects(explanation),
        settled=explanation.settled,
        ruled_out=[(clean(r.cause), typeset(r.by)) for r in explanation.ruled_out],
        parts=_parts(explanation),
        apart=[clean(words.listed(group)) for group in explanation.unseparated],
        readings=[
            (typeset(words.reading(explanation, r)), f"+{100 * r.would_settle:.0f} %")
            for r in explanation.next_readings
        ],
        remedies=_remedies(explanation),
        before=_before(explanation.as_found),
        figures=_figures(explanation, constants, capture),
    )


def rendered(template: str, **values: Any) -> str:
    """A template of this room filled in, everything escaped but the drawings."""
    import jinja2

    from benchfit.show.inline import custom_properties

    light, dark = custom_properties()
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("benchfit.show", "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template(template).render(light=light, dark=dark, **values)


def write(path: str | os.PathLike[str], text: str) -> None:
    """Write a page; the file appears whole or not at all."""
    target = Path(path)
    partial = target.with_name(f"{target.name}.part")
    try:
        partial.write_text(text, encoding="utf-8", newline="\n")
        partial.replace(target)
    except OSError as error:
        partial.unlink(missing_ok=True)
        raise UsageError(
            f"the report {target} cannot be written: {error.strerror or error}", path=str(target)
        ) from error


def typeset(text: str) -> str:
    """A sentence or a number of our own for a page: numbers whole, minus signs proper."""
    return glued(re.sub(r"(?<![\w.])-(?=\d)", "−", clean(text)))


def _identity(explanation: Explanation, acquired: str | None) -> list[tuple[str, str]]:
    rows = [("circuit", explanation.circuit or ""), ("captured", acquired or "")]
    rows += list(explanation.record_notes.items())
    return [(clean(k), clean(v)) for k, v in rows if v]


def _capture_table(facts: CaptureFacts, several: bool) -> Table:
    rows = [
        [
            clean(c.get("name")),
            clean(c.get("node") or "not assigned"),
            *(_volts(c.get(k)) for k in ("minimum", "maximum", "resolution")),
        ]
        for c in facts.channels
    ]
    length = si(facts.samples * facts.interval, "s")
    step = si(facts.interval, "s")
    cycles = f", {words.count(facts.cycles)} cycles" if facts.cycles else ""
    return {
        "path": clean(facts.path),
        "says": typeset(f"{words.count(facts.samples)} samples every {step}, {length} in all{cycles}"),
        "rows": rows,
        "several": several,
    }


def _volts(x: object) -> str:
    return si(float(x), "V") if isinstance(x, int | float) else ""


def _measured(explanation: Explanation) -> list[list[str]]:
    """Rows of (quantity, built ± U, target, miss), the lines without the probe below their own."""
    rows = []
    for name in [*words.LABELS, *(n for n in explanation.measured if n not in words.LABELS)]:
        built = words.amount(name, explanation.measured.get(name))
        miss = (explanation.miss or {}).get(name)
        target = words.plain_amount(name, miss.target, words.units(name)) if miss else ""
        if built or miss:
            off = words.change(miss.miss) if miss else ""
            rows.append([words.label(name), built or "unknown", target, off])
        if miss and (explanation.without_probe or {}).get(name):
            q, lifted = words.judged(explanation, name)
            rows.append(
                [
                    f"{words.label(name)}, without the probe",
                    words.amount(name, q),
                    target,
                    words.change(lifted),
                ]
            )
    return [[typeset(cell) for cell in row] for row in rows]


def _budgets(explanation: Explanation) -> list[Table]:
    found = []
    for name in ("frequency", "duty"):
        miss = (explanation.miss or {}).get(name)
        rows = words.budget_rows(miss, most=40)
        if miss is None or not rows:
            continue
        digits = words.share_decimals(rows)
        cells = [
            [clean(c), typeset(words.share(x, digits)), words.share_half(u, digits).lstrip("± ")]
            for c, x, u in rows
        ]
        total = typeset(words.share(miss.miss, digits))
        found.append({"name": words.label(name), "rows": cells, "miss": total})
    return found


def _suspects(explanation: Explanation) -> list[tuple[str, str, str, float]]:
    """(causes, what it says, probability in words, in per cent)."""
    return [
        (
            clean(words.accused(s)),
            clean(words.charge(s)),
            words.chance(s.probability),
            round(100 * s.probability, 1),
        )
        for s in explanation.suspects
    ]


def _parts(explanation: Explanation) -> list[list[Any]]:
    rows = []
    for p in explanation.parts:
        if p.value is None or not words.resolved(p):
            continue
        limits = "" if p.limits is None else f"{si(p.limits[0], p.unit)} to {si(p.limits[1], p.unit)}"
        nominal = si(p.nominal, p.unit) if p.nominal is not None else "absent"
        cells = [p.name, nominal, limits, si(p.value, p.unit, p.u), words.change(p.deviation), p.known_from]
        rows.append([[clean(p.name), *(typeset(c) for c in cells[1:])], p.within])
    return rows


def _remedies(explanation: Explanation) -> list[list[str]]:
    """(what to change, frequency then, duty cycle then), one row for each way."""
    unit = {p.name: p.unit for p in explanation.parts}
    rows = []
    for way in words.ways(explanation.remedies):
        what = ", with ".join(words.exchange(r, unit.get(r.part, "")) for r in way)
        rows.append(
            [typeset(what), *(words.amount(n, way[0].predicts.get(n)) for n in ("frequency", "duty"))]
        )
    return rows


def _before(as_found: AsFound | None) -> Table | None:
    if as_found is None:
        return None
    return {
        "rows": [[typeset(cell) for cell in row] for row in words.as_left_rows(as_found)],
        "sentences": [typeset(says) for says in words.as_left_sentences(as_found)],
        "path": clean(as_found.path),
        "is_lifted": as_found.is_lifted,
    }


def _figures(
    explanation: Explanation, constants: CycleConstants | None, capture: Capture | None
) -> dict[str, Any]:
    """The drawings, by kind, as SVG that needs no escaping; those that would be empty are left out."""
    import markupsafe

    from benchfit.show.inline import inline_svg
    from benchfit.show.plot import TITLES, Kind, plot

    kinds: list[Kind] = []
    if capture is not None:
        kinds.append("capture")
        if constants is not None and constants.oscillates and constants.turns.size >= 2:
            kinds += ["cycle", "slopes"] if constants.phases else ["cycle"]
            kinds += ["periods"] if constants.turns.size >= 4 else []
    budgets = {"frequency": "budget", "duty": "duty-budget"}
    kinds += [k for n, k in budgets.items() if words.budget_rows((explanation.miss or {}).get(n))]  # type: ignore[misc]
    out: dict[str, Any] = {}
    for kind in kinds:
        figure = plot(explanation, constants, capture, kind=kind, heading=False)
        title = TITLES[kind][0].upper() + TITLES[kind][1:]
        out[kind] = {
            "title": title,
            "svg": markupsafe.Markup(inline_svg(figure, f"figure-{kind}", title, _says(explanation, kind))),
        }
    return out


_SHOWS = {
    "capture": "The captured voltage against time with the fitted charge and discharge, turning levels and "
    "asymptotes; below it what the fit leaves over.",
    "cycle": "All cycles laid over each other with the curve of the build and that of the nominal parts.",
    "slopes": "Rate of change of the voltage against the voltage, charge and discharge, with the straight "
    "line of one exponential.",
    "periods": "The duration of every single cycle against its number.",
}


def _says(explanation: Explanation, kind: str) -> str:
    """What a drawing shows, for whoever cannot see it."""
    if kind in ("budget", "duty-budget"):
        rows = words.budget_rows(
            (explanation.miss or {}).get("duty" if kind == "duty-budget" else "frequency")
        )
        steps = ", ".join(f"{cause} {words.share(x)} %" for cause, x, _ in rows)
        return f"Steps from the target to what was built: {steps}."
    return _SHOWS[kind]
