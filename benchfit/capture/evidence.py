"""What the families of layouts judge a file by, and what they answer."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from benchfit.capture import header, settings
from benchfit.capture.header import Header, Title
from benchfit.capture.page import Page
from benchfit.capture.settings import Settings

# Rows of a table that may have settings beside them; some twenty were met.
MOST_BESIDE = 60


@dataclass(frozen=True)
class Evidence:
    """What the first lines of a file show: the page, its header, the settings above and beside the table."""

    page: Page
    header: Header
    above: Settings
    beside: Settings


@dataclass(frozen=True)
class Layout:
    """How a table is to be understood.

    ``titles`` by column; ``interval`` and ``start`` (s) where the file states them outside the rows, with
    ``stated`` saying where; ``horizontal`` is the unit that a setting gives for time; ``time_is_first`` where
    the layout has its time in the first column of numbers; ``has_no_stamps`` where it has none.
    """

    titles: tuple[Title, ...]
    settings: Settings
    interval: float | None = None
    start: float | None = None
    stated: str = ""
    horizontal: str = ""
    time_is_first: bool = False
    has_no_stamps: bool = False


@dataclass(frozen=True)
class Claim:
    """A family's claim on a file: how strong (0 to 1), why, and the layout or the sentence of refusal."""

    strength: float
    reasons: tuple[str, ...] = ()
    layout: Layout | None = None
    refusal: str = ""


@dataclass(frozen=True)
class Family:
    """One entry of the registry: ``judge`` answers with a claim where a file is of the family."""

    name: str
    judge: Callable[[Evidence], Claim | None]


def gather(page: Page) -> Evidence:
    """Evidence from the first lines of a file."""
    found = header.find(page)
    lines = [k for k in range(page.first) if k not in found.rows]
    rows = [page.rows[k] if k < len(page.rows) else () for k in lines]
    above = settings.from_lines([page.lines[k] for k in lines], rows)
    top = page.rows[page.first : page.first + MOST_BESIDE]
    outside = tuple(k for k in range(max((len(row) for row in top), default=0)) if k not in page.numeric)
    return Evidence(page, found, above, settings.from_cells(top, outside, page.decimal))
