"""A lot as a self-contained HTML page."""

from __future__ import annotations

import os
from typing import Any

from benchfit.show import lot_text, words
from benchfit.show.layout import clean
from benchfit.show.lot import Lot
from benchfit.show.report import rendered, typeset, write


def report_lot(lot: Lot, path: str | os.PathLike[str]) -> None:
    """Write the page of a lot; the file appears whole or not at all.

    Raises
    ------
    UsageError
        Where the file cannot be written.
    """
    write(path, page_lot(lot))


def page_lot(lot: Lot) -> str:
    """The page of a lot as text."""
    return rendered(
        "lot.html",
        title=clean(lot.title or lot.circuit or "Lot"),
        identity=[(k, clean(v)) for k, v in (("circuit", lot.circuit), ("units", str(len(lot.units)))) if v],
        sentences=[typeset(s) for s in lot_text.sentences(lot)],
        rule=words.RULE if lot.verdicts else "",
        units=[_unit_row(lot_text.unit_line(u), u.verdict) for u in lot.units if not u.error],
        failures=[(clean(u.name), clean(u.error)) for u in lot.failures],
        spreads=[[typeset(cell) for cell in row] for row in lot_text.spread_rows(lot)],
        apart=[clean(name) for name in lot.apart],
        together=[clean(lot_text.apart_sentence(group)) for group in lot.together],
        off=[typeset(lot_text.off_sentence(s)) for s in lot_text.off_parts(lot)],
        outside=[(clean(s.name), [clean(n) for n in s.outside]) for s in lot.spreads if s.outside],
        causes=[(clean(cause), n) for cause, n in lot.causes],
        selections=[
            (typeset(lot_text.selection(e)), [clean(n) for n in names]) for e, names in lot.selections
        ],
        figures=_figures(lot),
    )


def _unit_row(cells: list[str], verdict: str | None) -> list[Any]:
    name, *rest = cells
    return [clean(name), *(typeset(cell) for cell in rest), verdict or ""]


def _figures(lot: Lot) -> list[dict[str, Any]]:
    import markupsafe

    from benchfit.show.inline import inline_svg
    from benchfit.show.lot_charts import plot_lot

    found = []
    f = lot.spread("frequency")
    if f is not None and f.count > 1:
        says = f"{f.count} units around a mean of {lot_text.spread_rows(lot)[0][1]}."
        figure = plot_lot(lot, kind="frequency")
        found.append(
            (
                "Frequencies of the units",
                inline_svg(figure, "figure-frequency", "Frequencies of the units", says),
            )
        )
    if any(s.limits is not None for s in lot.spreads):
        says = "Each unit's deviation of each part from its nominal, with the sheet's limits."
        found.append(
            (
                "Parts of the units",
                inline_svg(plot_lot(lot, kind="parts"), "figure-parts", "Parts of the units", says),
            )
        )
    return [{"title": title, "svg": markupsafe.Markup(svg)} for title, svg in found]
