"""The top of a file as cells: where the table begins, which of its columns hold numbers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from benchfit.capture.cells import EMPTY, NUMBER, OVERLOAD, TEXT, kind
from benchfit.capture.dialect import MOST_COLUMNS, Dialect, decide

COMMENT_MARKS = ("#", "%", "//", "!", "'", "*", "--")
# Lines of the head that are looked at; the longest preambles met have some sixty.
MOST_LINES = 600
_JUDGED = 250


@dataclass(frozen=True)
class Page:
    """The head of a file, cut into cells.

    Attributes
    ----------
    lines, rows : lines of the head, and each as cells under ``dialect``
    dialect : None where no line holds a number
    first : number (from 0) of the first row of the table; ``len(lines)`` where there is no table
    numeric : columns that hold numbers in the body of the table
    textual : columns that hold something else there
    width : cells in a row of the table
    whole : whether the head is the whole file
    """

    lines: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    dialect: Dialect | None
    first: int
    numeric: tuple[int, ...]
    textual: tuple[int, ...]
    width: int
    whole: bool

    @property
    def above(self) -> tuple[str, ...]:
        """Lines above the table."""
        return self.lines[: self.first]

    @property
    def decimal(self) -> str:
        """Decimal mark of the table."""
        return self.dialect.decimal if self.dialect else "."

    @property
    def body(self) -> tuple[tuple[str, ...], ...]:
        """Rows of the table in the head, spoilt ones too, so that each row has its place; blank ones not."""
        return tuple(row for row in self.rows[self.first :] if any(row))

    def column(self, index: int) -> list[str]:
        """Cells of a column in ``body``, "" where a row is short."""
        return [row[index] if index < len(row) else "" for row in self.body]


def look(lines: Sequence[str], whole: bool) -> Page:
    """The page that the first ``lines`` of a file make."""
    lines = tuple(lines[:MOST_LINES])
    filled = [line for line in lines if line.strip() and not is_comment(line)]
    dialect = decide(filled[-_JUDGED:]) if filled else None
    if dialect is not None and not _has_table(filled[-_JUDGED:], dialect):
        dialect = decide(filled[: 2 * _JUDGED])
    if dialect is None:
        return Page(lines, (), None, len(lines), (), (), 0, whole)
    rows = tuple(dialect.cells(line) for line in lines)
    numeric, textual = _columns(rows, lines, dialect)
    if not numeric:
        return Page(lines, rows, dialect, len(lines), (), (), 0, whole)
    first = _first(rows, lines, numeric, dialect.decimal)
    widths = sorted(len(row) for row in rows[first:] if _fits(row, numeric, dialect.decimal))
    width = widths[len(widths) // 2] if widths else 0
    return Page(lines, rows, dialect, first, numeric, textual, width, whole)


def is_comment(line: str) -> bool:
    """Whether a line begins with a mark of comments and is no number by that."""
    stripped = line.lstrip()
    return stripped.startswith(COMMENT_MARKS) and not stripped.startswith("'0")


def uncommented(line: str) -> str:
    """``line`` without its mark of comments."""
    stripped = line.strip()
    for mark in COMMENT_MARKS:
        if stripped.startswith(mark):
            return stripped.lstrip(mark[0]).strip()
    return stripped


def _has_table(lines: Sequence[str], dialect: Dialect) -> bool:
    found = sum(any(kind(cell, dialect.decimal) == NUMBER for cell in dialect.cells(line)) for line in lines)
    return found > len(lines) // 2


def _columns(
    rows: Sequence[Sequence[str]], lines: Sequence[str], dialect: Dialect
) -> tuple[tuple[int, ...], tuple[int, ...]]:
    """Columns with numbers and columns with text, judged by the later half of the rows that have numbers.

    The first rows may carry settings beside the table, which end after some twenty rows.
    """
    kinds = [
        [kind(cell, dialect.decimal) for cell in row]
        for row, line in zip(rows, lines, strict=True)
        if row and not is_comment(line)
    ]
    kinds = [row for row in kinds if NUMBER in row]
    body = kinds[len(kinds) // 2 :] if len(kinds) >= 8 else kinds
    numeric, textual = [], []
    for column in range(min(MOST_COLUMNS, max((len(row) for row in body), default=0))):
        met = [row[column] if column < len(row) else EMPTY for row in body]
        numbers, words = met.count(NUMBER) + met.count(OVERLOAD), met.count(TEXT)
        if words > 0.2 * len(met) or words > numbers:
            textual.append(column)
        elif numbers > 0.1 * len(met) and not _beside_a_key(body, column, numbers):
            numeric += [column] * any(column < len(row) and row[column] == NUMBER for row in kinds)
    return tuple(numeric), tuple(textual)


def _beside_a_key(body: Sequence[Sequence[str]], column: int, numbers: int) -> bool:
    """Whether the numbers of a column are values of the words to their left, on a few rows only."""
    keyed = sum(
        column < len(row) and row[column] == NUMBER and column > 0 and row[column - 1] == TEXT for row in body
    )
    return keyed == numbers < len(body)


def _fits(row: Sequence[str], numeric: Sequence[int], decimal: str) -> bool:
    kinds = [kind(row[column], decimal) if column < len(row) else EMPTY for column in numeric]
    return TEXT not in kinds and NUMBER in kinds


def _first(rows: Sequence[Sequence[str]], lines: Sequence[str], numeric: Sequence[int], decimal: str) -> int:
    """Number of the first row of the table: walking up from its body until rows no longer fit.

    A lone misfit with a table above it is damage inside the table, not the header.
    """
    fits = [
        _fits(row, numeric, decimal) and not is_comment(line) for row, line in zip(rows, lines, strict=True)
    ]
    runs = _runs(fits, lines)
    longest = max(runs, key=lambda run: run[1] - run[0], default=None)
    if longest is None:
        return len(rows)
    first = longest[0]
    for start, end in reversed([run for run in runs if run[1] <= longest[0]]):
        between = [line for line in lines[end:first] if line.strip()]
        complete = all(_is_complete(row, numeric, decimal) for row in rows[start:end] if row)
        spoilt = len(numeric) > 1 or all(is_mostly_digits(line) for line in between)
        if len(between) <= 4 and (end - start >= 8 or (complete and spoilt)):
            first = start
        else:
            break
    first = _with_spoilt_rows(rows, lines, first)
    return _below_header(rows, first, numeric)


def _with_spoilt_rows(rows: Sequence[Sequence[str]], lines: Sequence[str], first: int) -> int:
    """``first``, or a row or two above it that are rows of the table with a character spoilt."""
    width = len(rows[first])
    for _ in range(2):
        above = next((k for k in range(first - 1, -1, -1) if lines[k].strip()), -1)
        if (
            above < 0
            or len(rows[above]) != width
            or not all(is_mostly_digits(cell) for cell in rows[above] if cell)
        ):
            break
        first = above
    return first


def is_mostly_digits(line: str) -> bool:
    """Whether a line is a row of numbers with a character or two spoilt, rather than a name or a setting."""
    bare = "".join(line.split())
    return sum(character in "0123456789.,;eE+-" for character in bare) > 0.7 * len(bare)


def _is_complete(row: Sequence[str], numeric: Sequence[int], decimal: str) -> bool:
    return not any(row) or all(
        column < len(row) and kind(row[column], decimal) == NUMBER for column in numeric
    )


def _runs(fits: Sequence[bool], lines: Sequence[str]) -> list[tuple[int, int]]:
    """First and past-the-last line of each stretch of fitting lines; blank lines do not end a stretch."""
    runs: list[tuple[int, int]] = []
    start: int | None = None
    last = 0
    for index, fit in enumerate(fits):
        if fit:
            start = index if start is None else start
            last = index
        elif lines[index].strip() and start is not None:
            runs.append((start, last + 1))
            start = None
    if start is not None:
        runs.append((start, last + 1))
    return runs


def _below_header(rows: Sequence[Sequence[str]], first: int, numeric: Sequence[int]) -> int:
    """``first``, or the row below it where that row is names 1, 2, … under an empty first cell."""
    row = rows[first]
    names = [row[column] for column in numeric[1:] if column < len(row)]
    if (
        numeric
        and numeric[0] < len(row)
        and not row[numeric[0]]
        and names
        and names == [str(k + 1) for k in range(len(names))]
    ):
        return first + 1
    return first
