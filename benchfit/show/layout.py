"""Lines of text that keep their columns: wrapping, aligned tables, bars, colours."""

from __future__ import annotations

import re
import textwrap
import unicodedata
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

Style = Literal["bold", "dim", "good", "bad", "doubt", "plain"]

_CODES = {"bold": "1", "dim": "2", "good": "1;32", "bad": "1;31", "doubt": "1;33"}
_KEEP = "\N{NO-BREAK SPACE}"
_UNITS = r"(?:%|[fpnµmkMGT]?(?:Hz|s|V|Ω|F|A|C|W)|V/µs|V/ms|V/s|°C|ppm|cycles?)"


@dataclass(frozen=True)
class Column:
    """How one column of a table is set.

    ``right``: set flush right. ``rank``: where the table is too wide, columns go by falling rank; those of
    rank 0 stay.
    """

    right: bool = False
    rank: int = 0


def clean(text: object) -> str:
    """Text without anything that a terminal would obey: control and direction codes are written out."""
    return "".join(c if _harmless(c) else f"\\x{ord(c):02x}" for c in str(text))


def _harmless(c: str) -> bool:
    return c.isprintable() or unicodedata.category(c) == "Zs"


def cells(text: str) -> int:
    """Width of a text on a terminal: wide (East Asian) characters take two cells, combining marks none."""
    if text.isascii():
        return len(text)
    wide = sum(unicodedata.east_asian_width(c) in "WF" for c in text)
    return len(text) + wide - sum(unicodedata.combining(c) != 0 for c in text)


def paint(text: str, style: Style, colour: bool) -> str:
    """The text in a style, as an SGR sequence (ECMA-48); unchanged without colour."""
    return f"\x1b[{_CODES[style]}m{text}\x1b[0m" if colour and style in _CODES and text else text


def glued(text: str) -> str:
    """The text with no-break spaces between a number, its sign, its U and its unit."""
    kept = re.sub(rf"(?<=\d) (?={_UNITS}(?![\w/]))", _KEEP, text)
    kept = re.sub(r"(?<=[<>×±+−-]) (?=\d)", _KEEP, kept)
    return kept.replace(" ±", f"{_KEEP}±")


def wrapped(text: str, width: int, first: str = "", rest: str | None = None) -> list[str]:
    """Lines of at most ``width`` cells; a number stays with its unit."""
    kept = glued(text)
    indent = " " * len(first) if rest is None else rest
    lines = textwrap.wrap(
        kept, max(width, len(indent) + 12), initial_indent=first, subsequent_indent=indent,
        break_on_hyphens=False,
    )  # fmt: skip
    return [line.replace(_KEEP, " ") for line in lines]


def shortened(text: str, width: int) -> str:
    """The text, its middle left out where it is longer than ``width``."""
    if len(text) <= width:
        return text
    head = (width - 1) * 2 // 3
    return f"{text[:head]}…{text[len(text) - (width - 1 - head) :]}"


def fitting(
    rows: Sequence[Sequence[str]], columns: Sequence[Column], width: int, indent: int = 2
) -> list[int]:
    """Numbers of the columns that fit into ``width``, those of the highest rank dropped first."""
    shown = [i for i in range(len(columns)) if any(row[i] for row in rows)] or [0]
    widths = [max((cells(row[i]) for row in rows), default=0) for i in range(len(columns))]
    while len(shown) > 1 and indent + sum(widths[i] + 2 for i in shown) - 2 > width:
        most = max(shown, key=lambda i: (columns[i].rank, i))
        if columns[most].rank == 0:
            break
        shown.remove(most)
    return shown


def table(
    rows: Sequence[Sequence[str]],
    columns: Sequence[Column],
    width: int,
    *,
    head: Style = "plain",
    styles: Sequence[Style] = (),
    colour: bool = False,
) -> list[str]:
    """Aligned rows, two cells apart, none wider than ``width``.

    The first column is shortened in its middle where dropping columns does not suffice. ``head`` is the
    style of the first row, ``styles`` those of all rows.
    """
    shown = fitting(rows, columns, width)
    widths = [max((cells(row[i]) for row in rows), default=0) for i in shown]
    widths[0] = min(widths[0], max(6, width - 2 - sum(w + 2 for w in widths[1:])))
    lines = []
    for number, row in enumerate(rows):
        out = []
        for i, w in zip(shown, widths, strict=True):
            text = shortened(row[i], w) if i == shown[0] else row[i]
            pad = " " * (w - cells(text))
            out.append(pad + text if columns[i].right else text + pad)
        style = styles[number] if number < len(styles) else (head if number == 0 else "plain")
        lines.append(paint(("  " + "  ".join(out)).rstrip(), style, colour))
    return lines


def bar(value: float, largest: float, half: int) -> str:
    """A bar about an axis, ``half`` cells to either side, in steps of half a cell."""
    steps = 0 if largest <= 0 else round(2 * half * min(abs(value) / largest, 1.0))
    full, rest = divmod(steps, 2)
    left = right = ""
    if value < 0:
        left = ("▐" if rest else "") + "█" * full
    else:
        right = "█" * full + ("▌" if rest else "")
    return f"{left:>{half}}│{right}"


class Page:
    """Lines in the making, with the width and the colour they are made for."""

    def __init__(self, width: int, colour: bool) -> None:
        self.width, self.colour = width, colour
        self.lines: list[str] = []

    def section(self, title: str, note: str = "") -> None:
        """A heading after an empty line; the note beside it where there is room."""
        if self.lines:
            self.lines.append("")
        note = f"  ({note})" if note and len(title) + len(note) + 4 <= self.width else ""
        self.lines.append(paint(title, "bold", self.colour) + paint(note, "dim", self.colour))

    def prose(self, text: str, first: str = "", style: Style = "plain", rest: str | None = None) -> None:
        """A paragraph that begins with ``first`` and goes on below its end, or after ``rest``."""
        after = " " * len(first) if rest is None else rest
        for line in wrapped(clean(text), self.width, first, after):
            self.lines.append(paint(line, style, self.colour))

    def entry(self, name: str, text: str, names: int = 18) -> None:
        """A name with its description beside it."""
        head = f"  {clean(name):<{names}}  "
        self.prose(text, head, rest=" " * (names + 4))

    def table(
        self, rows: Sequence[Sequence[str]], columns: Sequence[Column], styles: Sequence[Style]
    ) -> None:
        """Aligned rows in the given styles."""
        safe = [[clean(cell) for cell in row] for row in rows]
        self.lines += table(safe, columns, self.width, styles=styles, colour=self.colour)

    def remarks(self, remarks: Iterable[tuple[str, str]]) -> None:
        """Warnings as (code, says), each once, the cautions of a hazard last."""
        once = list(dict.fromkeys(remarks))
        if others := [r for r in once if r[0] != "hazard"]:
            self.section("Warnings")
            for code, says in others:
                self.prose(f"{code}: {says}", "  ", "doubt")
        for _, says in (r for r in once if r[0] == "hazard"):
            self.lines.append("")
            self.prose(f"CAUTION: {says}", style="bad")
