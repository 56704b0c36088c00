"""Rows of numbers -> arrays, by the C engine of pandas; lines it cannot take are looked at one by one."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.cells import (
    EMPTY,
    NUMBER,
    OVERLOAD,
    OVERLOAD_WORDS,
    SCPI_INFINITY,
    SCPI_NOT_A_NUMBER,
    TEXT,
    is_overload,
    kind,
    number,
)
from benchfit.capture.dialect import Dialect
from benchfit.capture.page import Page, is_comment, is_mostly_digits
from benchfit.capture.source import Source

# Below this size a file is read in one block anyway, and pandas would not split it over its threads.
_WHOLE_FILE = 5 << 20
_FEW_LINES = 64
_MOST_BREAKS = 10_000
_LINE_ENDS = re.compile(r"\r\n|\n|\r")

Floats = NDArray[np.float64]
# Overload words as cells, and the number that stands for infinity, without a decimal mark.
_WORDS = sorted((re.escape(word.encode()) for word in OVERLOAD_WORDS), key=len, reverse=True)
_OVERLOADS = re.compile(rb"(?i)(?<=[,;\t |])[+-]?(?![\d. ])(?:" + b"|".join(_WORDS) + rb")(?=[,;\t\r\n |])")
_INFINITY = b"99E36"


@dataclass(frozen=True)
class Table:
    """Columns of a table as read.

    ``columns`` by column number, shape (rows,), NaN where there was no number; ``overloaded`` where an
    overload word or an infinity stood. ``left_out`` counts rows that were no rows of the table, ``unread``
    cells that were no numbers; ``example`` shows the first of either. ``breaks`` are lines of text between
    rows: (row that follows, text). ``cut`` is true where the last row was not written to its end,
    ``is_complete`` where it is known that every cell is a number in range.
    """

    columns: dict[int, Floats]
    overloaded: dict[int, NDArray[np.bool_]]
    left_out: int = 0
    unread: int = 0
    example: str = ""
    breaks: tuple[tuple[int, str], ...] = ()
    cut: bool = False
    is_complete: bool = False

    @property
    def rows(self) -> int:
        """Number of rows."""
        return next((int(values.size) for values in self.columns.values()), 0)


@dataclass
class _Work:
    """What is gathered while blocks go by."""

    dialect: Dialect
    width: int
    wanted: tuple[int, ...]
    selected: bool
    time: int | None
    wide_rows: int
    encoding: str
    line: int
    rows: int = 0
    pieces: list[list[Floats]] = field(default_factory=list)
    overloads: list[tuple[int, int]] = field(default_factory=list)
    left_out: int = 0
    unread: int = 0
    example: str = ""
    breaks: list[tuple[int, str]] = field(default_factory=list)
    cut: bool = False

    def keep(self, columns: list[Floats]) -> None:
        self.pieces.append(columns)
        self.rows += int(columns[0].size)

    def note(self, line: int, text: str) -> None:
        self.example = self.example or f'line {line}: "{text.strip()[:40]}"'


def read_table(source: Source, page: Page, wanted: Sequence[int], time: int | None, wide_rows: int = 1) -> Table:
    """The ``wanted`` columns of the table on ``page``, read to the end of the file.

    ``time`` is the column without which a row has no place; without one, a spoilt row keeps its place as
    NaN. The first ``wide_rows`` rows may have further filled cells. Raises CaptureError at the limits.
    """
    assert page.dialect is not None
    wanted = tuple(wanted)
    selected = bool(page.textual) or page.width > 2 * len(wanted) + 4
    work = _Work(
        page.dialect,
        max(page.width, max(wanted) + 1),
        wanted,
        selected,
        time,
        wide_rows,
        source.encoding,
        page.first,
    )
    if source.is_plain and (source.size or 0) >= _WHOLE_FILE and not selected:
        whole = _whole(source, page, work)
        if whole is not None:
            return Table(dict(zip(wanted, whole, strict=True)), {}, cut=work.cut, is_complete=True)
    for block in source.blocks(source.head.offsets[page.first]):
        lines = block.count(b"\n")
        body, last = (block, b"") if block.endswith(b"\n") else _split_last(block)
        _block(work, body, lines)
        if last:
            _careful(work, last, unended=True, before=body[-4096:])
        work.line += lines
        source.check_values(work.rows * len(wanted))
    columns = []
    for k in range(len(wanted)):
        columns.append(np.concatenate([piece[k] for piece in work.pieces]) if work.pieces else np.empty(0))
        for piece in work.pieces:
            piece[k] = _NOTHING
    return _finished(work, columns)


_NOTHING: Floats = np.empty(0)


def _finished(work: _Work, columns: list[Floats]) -> Table:
    overloaded: dict[int, NDArray[np.bool_]] = {}
    for row, place in work.overloads:
        mask = overloaded.setdefault(work.wanted[place], np.zeros(columns[place].size, dtype=bool))
        mask[row] = True
    for place, values in enumerate(columns):
        columns[place] = _out_of_range(values, work.wanted[place], overloaded)
    return Table(
        dict(zip(work.wanted, columns, strict=True)), overloaded, work.left_out, work.unread, work.example,
        tuple(work.breaks), work.cut,
    )  # fmt: skip


def _out_of_range(values: Floats, column: int, overloaded: dict[int, NDArray[np.bool_]]) -> Floats:
    """Infinities and the numbers by which SCPI stands for them become NaN."""
    if _is_sound(values):
        return values
    with np.errstate(invalid="ignore", over="ignore"):
        beyond = np.abs(values) >= SCPI_INFINITY
        nothing = np.isclose(np.abs(values), SCPI_NOT_A_NUMBER, rtol=1e-5)
    mask = overloaded.setdefault(column, np.zeros(values.size, dtype=bool))
    mask |= beyond & ~nothing
    if not mask.any():
        del overloaded[column]
    return np.where(beyond, np.nan, values)


def _engine(work: _Work) -> dict[str, object]:
    return {
        "sep": work.dialect.engine_delimiter, "decimal": work.dialect.engine_decimal, "header": None,
        "names": range(work.width), "dtype": "float64", "engine": "c", "quoting": csv.QUOTE_NONE,
    }  # fmt: skip


def _whole(source: Source, page: Page, work: _Work) -> list[Floats] | None:
    """All columns of a plain file in one call, which pandas spreads over threads; None where it cannot."""
    import pandas

    source.check_lines()
    try:
        frame = pandas.read_csv(source.path, skiprows=page.first, **_engine(work))
    except (ValueError, OverflowError):
        return None
    source.check_values(frame.shape[0] * len(work.wanted))
    columns = _columns(frame, work)
    if columns is None or not all(_is_sound(values) for values in columns):
        return None
    with open(source.path, "rb") as file:
        file.seek(max(0, (source.size or 0) - 4096))
        body, last = _split_last(file.read())
    if last and _is_cut(work, last, body):
        work.cut = True
        columns = [values[:-1] for values in columns]
    return columns


def _columns(frame: object, work: _Work) -> list[Floats] | None:
    import pandas

    assert isinstance(frame, pandas.DataFrame)
    if not isinstance(frame.index, pandas.RangeIndex):  # rows longer than the names made a column the index
        return None
    return [frame[column].to_numpy() for column in work.wanted]


def _is_sound(values: Floats) -> bool:
    """Whether all values are finite and in range, told in one pass from the sum of their squares."""
    with np.errstate(over="ignore", invalid="ignore"):
        return bool(np.dot(values, values) < (0.9 * SCPI_INFINITY) ** 2)


def _has_gaps(values: Floats) -> bool:
    return not _is_sound(values) and not bool(np.all(np.isfinite(values)))


def _block(work: _Work, block: bytes, lines: int) -> None:
    """Add a block of whole lines: at once where all are rows of the table, else in ever smaller parts."""
    if not block.strip():
        return
    quick = _quick(work, block) if lines > 4 else None
    if quick is not None:
        work.keep(quick)
    elif lines <= _FEW_LINES:
        _careful(work, block)
    else:
        start = 0
        for part in range(1, 9):
            end = len(block) if part == 8 else block.find(b"\n", len(block) * part // 8) + 1
            if end > start:
                piece = block[start:end]
                count = piece.count(b"\n")
                _block(work, piece, min(count, lines - 1))
                work.line += count
                start = end
        work.line -= block.count(b"\n")


def _quick(work: _Work, block: bytes) -> list[Floats] | None:
    import pandas

    if b"\0" in block:
        return None
    text = work.dialect.plain(block)
    options = _engine(work)
    if work.selected:
        options["usecols"] = list(work.wanted)
    try:
        frame = pandas.read_csv(io.BytesIO(text), encoding="latin-1", **options)
    except (ValueError, OverflowError):
        with_numbers = _OVERLOADS.sub(_INFINITY, text)
        # Only where words were replaced can a second look end better.
        return _quick(work, with_numbers) if with_numbers != text else None
    columns = _columns(frame, work)
    if columns is None:
        return None
    if work.selected or any(_has_gaps(values) for values in columns):
        separator = work.dialect.engine_delimiter
        if len(separator) > 1 or text.count(separator.encode()) != frame.shape[0] * (work.width - 1):
            return None
    # Views would keep the whole block of pandas alive.
    return [values.copy() for values in columns] if work.selected else columns


def _careful(work: _Work, block: bytes, unended: bool = False, before: bytes = b"") -> None:
    """Add the lines of a block one by one, with every departure noted."""
    text = block.decode("latin-1" if work.encoding == "latin-1" else "utf-8", "replace")
    rows: list[list[float]] = []
    lines = _LINE_ENDS.split(text)
    for offset, line in enumerate(lines):
        if not line.strip(" \t,;\x1a\ufeff"):
            continue
        if unended and offset == len(lines) - 1 and _is_cut(work, line.encode("utf-8", "replace"), before):
            work.cut = True
            continue
        row = _row(work, line, work.line + offset + 1, work.rows + len(rows))
        if row is not None:
            rows.append(row)
    if rows:
        array = np.array(rows, dtype=np.float64)
        work.keep([np.ascontiguousarray(array[:, k]) for k in range(array.shape[1])])


def _row(work: _Work, line: str, number_of_line: int, row: int) -> list[float] | None:
    cells = work.dialect.cells(line)
    decimal = work.dialect.decimal
    kinds = [kind(cells[column], decimal) if column < len(cells) else "" for column in work.wanted]
    if NUMBER not in kinds and OVERLOAD not in kinds and not (TEXT in kinds and is_mostly_digits(line)):
        if any(cells) and len(work.breaks) < _MOST_BREAKS:
            work.breaks.append((row, line.strip()))
        return None
    short = "" in kinds
    long = row >= work.wide_rows and any(cells[work.width :])
    spoilt = work.time is not None and kinds[work.wanted.index(work.time)] in (TEXT, EMPTY, OVERLOAD)
    if short or long or spoilt or is_comment(line):
        work.left_out += 1
        work.note(number_of_line, line)
        return None if work.time is not None else [np.nan] * len(work.wanted)
    values = []
    for place, (column, what) in enumerate(zip(work.wanted, kinds, strict=True)):
        values.append(number(cells[column], decimal))
        if what == OVERLOAD and is_overload(cells[column]):
            work.overloads.append((row, place))
        elif what == TEXT:
            work.unread += 1
            work.note(number_of_line, line)
    return values


def _split_last(block: bytes) -> tuple[bytes, bytes]:
    cut = block.rfind(b"\n") + 1
    return block[:cut], block[cut:]


def _is_cut(work: _Work, last: bytes, before: bytes) -> bool:
    """Whether the last line, which has no end, stops before its row does.

    Told by its cells: fewer than the rows before have, no number, or a shape (exponent, number of decimals)
    that no row before has although all of those agree.
    """
    decimal = work.dialect.decimal
    earlier = [work.dialect.cells(line.decode("latin-1")) for line in before.split(b"\n")[1:-1] if line.strip()][-40:]
    cells = work.dialect.cells(last.decode("latin-1"))
    if len(cells) <= max(work.wanted) or kind(cells[max(work.wanted)], decimal) == TEXT:
        return True
    end = max((k for k, cell in enumerate(cells) if cell), default=-1)
    if end < max(work.wanted) and all(len(row) > max(work.wanted) and row[max(work.wanted)] for row in earlier):
        return True
    shapes = {_shape(row[end], decimal) for row in earlier if end < len(row)}
    return len(earlier) >= 8 and len(shapes) == 1 and _shape(cells[end], decimal) not in shapes


def _shape(cell: str, decimal: str) -> tuple[int, int]:
    mantissa, _, exponent = cell.lower().partition("e")
    return len(mantissa.partition(decimal)[2]), len(exponent.lstrip("+-"))
