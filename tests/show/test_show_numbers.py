"""The page on what the numbers mean speaks of everything that is printed."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from show_examples import ALL, PREDICTION, lot

from benchfit.show.lot import lot_of
from benchfit.show.lot_text import render_lot
from benchfit.show.record import MEASURED
from benchfit.show.text import render, render_prediction
from benchfit.show.words import VERDICTS

PAGE = Path(__file__).parents[2] / "docs" / "numbers.md"
TEXT = PAGE.read_text(encoding="utf-8")


@pytest.mark.parametrize("name", MEASURED)
def test_every_measured_quantity_is_explained(name: str) -> None:
    assert f"`{name}`" in TEXT


@pytest.mark.parametrize("word", VERDICTS.values())
def test_every_verdict_is_explained(word: str) -> None:
    assert re.search(rf"^\| {word} \|", TEXT, re.M)


def test_every_row_and_column_of_the_reports_is_explained() -> None:
    """Row and column names of budgets, parts, lots and predictions, read from what is printed."""
    printed = "\n".join(render(make()) for make in ALL.values()) + render_lot(lot_of(lot()), width=120)
    printed += render_prediction(PREDICTION)
    for word in (
        *(
            "on paper",
            "unexplained",
            "probe",
            "others",
            "known from",
            "nominal",
            "limits",
            "lasts",
            "ends at",
        ),
        *("heads for", "time constant", "output level", "period jitter, rms", "interval", "mean off by"),
        *("outside", "worst case", "root sum of squares, ± 2 u", "95 % of builds", "share", "at its low"),
        *("is off on average", "Known from the sheet rather than the capture"),
        "Cannot be told apart by this capture",
    ):
        assert word in printed, f"{word} is no longer printed"
        assert word in TEXT, f"{word} is not explained in {PAGE.name}"
