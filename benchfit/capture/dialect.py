"""Delimiter and decimal mark of a table, decided together on the lines that look like data."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise

from benchfit.capture.cells import NUMBER, TEXT, kind

_BRACKETED = re.compile(r"\s*[(\[{][^()\[\]{}]*\d[^()\[\]{}]*[)\]}][,;]?\s*")
_WHOLE = re.compile(r"[+-]?\d+")
_FRACTION = re.compile(r"\d+([eE][+-]?\d+)?")
_BLANKS = re.compile(r"[ \t]+")
_BRACKETS = b"()[]{}"
# More columns than this is no capture, and a garbled line can have any number of separators.
MOST_COLUMNS = 256


@dataclass(frozen=True)
class Dialect:
    """How the cells of a row are written.

    ``delimiter`` is one character (a blank stands for any run of blanks and tabs), ``decimal`` the decimal
    mark; ``quoted`` where cells stand in double quotes, ``bracketed`` where rows stand in brackets.
    """

    delimiter: str
    decimal: str
    quoted: bool = False
    bracketed: bool = False

    def cells(self, line: str) -> tuple[str, ...]:
        """Cells of a line without blanks and quotes around them."""
        if self.bracketed and (bare := line.strip().rstrip(",; ")).startswith(("(", "[", "{")):
            # Brackets around the row only: a header may have its units in some.
            line = bare[1:-1] if bare.endswith((")", "]", "}")) else bare[1:]
        if self._quotes_commas:
            line = _unquoted(line, _INSIDE)
        if self.delimiter == " ":
            stripped = line.strip()
            return (
                tuple(cell.strip('"') for cell in _BLANKS.split(stripped)[:MOST_COLUMNS]) if stripped else ()
            )
        cells = line.split(self.delimiter)[:MOST_COLUMNS]
        return tuple(cell.replace(_INSIDE, ",").strip().strip('"').strip() for cell in cells)

    def plain(self, text: bytes) -> bytes:
        """A block of the file as the C engine of pandas reads it, with ``engine_delimiter``."""
        if self.bracketed:
            text = text.translate(None, _BRACKETS)
        if b'"' in text:
            if not self._quotes_commas:
                return text.replace(b'"', b"")
            inside = "." if self.decimal == "," else " "
            return _unquoted(text.decode("latin-1"), inside).encode("latin-1")
        return text

    @property
    def _quotes_commas(self) -> bool:
        return self.quoted and self.delimiter == ","

    @property
    def engine_delimiter(self) -> str:
        """The ``sep`` with which the C engine of pandas splits what ``plain`` returns."""
        return r"\s+" if self.delimiter == " " else self.delimiter

    @property
    def engine_decimal(self) -> str:
        """The ``decimal`` with which the C engine of pandas reads what ``plain`` returns."""
        return "." if self._quotes_commas else self.decimal

    @property
    def says(self) -> str:
        """Name of the delimiter in words."""
        name = {",": "comma", ";": "semicolon", "\t": "tab", " ": "blanks", "|": "bar", ":": "colon"}[
            self.delimiter
        ]
        extras = [", cells in quotes"] * self.quoted + [", rows in brackets"] * self.bracketed
        return name + "".join(extras)


_QUOTED = re.compile(r'"([^"\n]*)"')
# Stands for a comma inside quotes while the others part the cells.
_INSIDE = "\x1f"


def _unquoted(text: str, inside: str) -> str:
    """``text`` without quotes, ``inside`` in place of the commas between them."""
    return _QUOTED.sub(lambda found: found[1].replace(",", inside), text).replace('"', "")


@dataclass(frozen=True)
class _Vote:
    rows: int
    purity: float
    columns: int

    @property
    def weight(self) -> float:
        return self.rows * self.purity**2 * (1.0 if self.columns > 1 else 0.5)


def decide(lines: Sequence[str]) -> Dialect | None:
    """The dialect under which most of ``lines`` are rows of numbers; None where under none any line is.

    Each candidate is judged by the rows with numbers in them and by how much else stands in these rows:
    a decimal comma taken for a separator leaves pieces that are no numbers.
    """
    quoted = sum('"' in line for line in lines) > len(lines) // 2
    bracketed = sum(_BRACKETED.match(line) is not None for line in lines) > len(lines) // 2
    # First come, first served among equals.
    pairs = [
        ("\t", "."),
        (";", "."),
        (",", "."),
        ("\t", ","),
        (";", ","),
        (" ", "."),
        (" ", ","),
        ("|", "."),
        ("|", ","),
    ]
    if quoted:
        pairs.append((",", ","))
    votes = {}
    for delimiter, decimal in pairs:
        if delimiter in " ," or any(delimiter in line for line in lines):
            candidate = Dialect(delimiter, decimal, quoted, bracketed)
            votes[candidate] = _vote(candidate, lines)
    points = Dialect(",", ".", quoted, bracketed)
    if _comma_is_decimal(votes, lines) or _fraction_split(points, lines):
        del votes[points]
    best = max(votes, key=lambda candidate: votes[candidate].weight)
    if votes[best].weight == 0:
        return None
    if (
        votes[best].columns == 1
        and best.delimiter == " "
        and not any(" " in line.strip() for line in lines[-8:])
    ):
        # One column needs no separator; that of the lines above it may be looked for.
        return Dialect("," if best.decimal == "." else ";", best.decimal, quoted, bracketed)
    return best


def _vote(dialect: Dialect, lines: Sequence[str]) -> _Vote:
    rows = numbers = others = columns = 0
    for line in lines:
        kinds = [kind(cell, dialect.decimal) for cell in dialect.cells(line)]
        found = kinds.count(NUMBER)
        if found:
            rows += 1
            numbers += found
            others += kinds.count(TEXT)
            columns = max(columns, found)
    return _Vote(rows, numbers / (numbers + others) if numbers else 0.0, columns)


def _comma_is_decimal(votes: Mapping[Dialect, _Vote], lines: Sequence[str]) -> bool:
    """Whether almost every line has a semicolon or a tab that leaves nothing but numbers with decimal commas.

    The comma would then win by the number of its columns, which are halves of numbers.
    """
    return any(
        vote.purity > 0.9
        for dialect, vote in votes.items()
        if dialect.decimal == "," and dialect.delimiter in "\t;|" and vote.rows > 0.8 * len(lines)
        if sum(dialect.delimiter in line for line in lines) > 0.9 * len(lines)
    )


def _fraction_split(dialect: Dialect, lines: Sequence[str]) -> bool:
    """Whether two columns of whole numbers are one column with a decimal comma: "1,05" and "-0,98".

    A fraction shows itself by an exponent, by zeros in front with an even length, or by many digits behind
    whole numbers of few digits that go up and down.
    """
    lines = lines[len(lines) // 2 :] if len(lines) > 16 else lines
    pairs = [cells for cells in map(dialect.cells, lines) if len(cells) == 2 and _WHOLE.fullmatch(cells[0])]
    pairs = [cells for cells in pairs if _FRACTION.fullmatch(cells[1])]
    if len(pairs) < max(8, 0.8 * len(lines)):
        return False
    fractions = [b for _, b in pairs]
    if any("e" in b.lower() for b in fractions):
        return True
    if any(len(b) > 1 and b[0] == "0" for b in fractions) and len({len(b) for b in fractions}) == 1:
        return True
    wholes = [int(a) for a, _ in pairs]
    wander = any(b < a for a, b in pairwise(wholes)) and any(b > a for a, b in pairwise(wholes))
    return (
        wander
        and all(len(a.lstrip("+-")) <= 2 for a, _ in pairs)
        and sorted(map(len, fractions))[len(pairs) // 2] >= 4
    )
