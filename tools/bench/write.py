"""Records as CSV files, in a few of the layouts that instruments write."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path

from tools.bench.chain import Record

Rows = list[list[str]]


def _volts(value: float) -> str:
    return f"{value:.5g}"


def _stamp(record: Record, i: int) -> str:
    return f"{record.start + i * record.interval:.9g}"


def _columns(record: Record, names: Mapping[str, str]) -> Rows:
    columns = [record.channels[node] for node in names]
    return [[_stamp(record, i), *(_volts(c[i]) for c in columns)] for i in range(columns[0].size)]


def unit_in_header(record: Record, names: Mapping[str, str]) -> str:
    """One header row, the unit inside the cell."""
    head = ["Time (s)", *(f"{name} (V)" for name in names.values())]
    return "\n".join(",".join(row) for row in [head, *_columns(record, names)]) + "\n"


def unit_row(record: Record, names: Mapping[str, str]) -> str:
    """A row of names, then a row of units; three-digit exponents and a comma at each row's end."""
    head = [["x-axis", *names.values()], ["second", *("Volt" for _ in names)]]
    body = [[f"{float(cell):+.6E}" for cell in row] for row in _columns(record, names)]
    return "\n".join(",".join(row) + "," for row in [*head, *body]) + "\n"


def start_and_increment(record: Record, names: Mapping[str, str]) -> str:
    """Sequence number and values; start and increment stand in the header."""
    head = [
        ["X", *names.values(), "Start", "Increment"],
        ["Sequence", *("Volt" for _ in names), f"{record.start:.9E}", f"{record.interval:.9E}"],
    ]
    body = [[str(i), *row[1:]] for i, row in enumerate(_columns(record, names))]
    return "\n".join(",".join(row) for row in [*head, *body]) + "\n"


def decimal_comma(record: Record, names: Mapping[str, str]) -> str:
    """Semicolons and decimal commas; names, units, a blank row; times in milliseconds; a byte order mark."""
    head = [["Time", *names.values()], ["(ms)", *("(V)" for _ in names)], []]
    times = [
        f"{1e3 * (record.start + i * record.interval):.9g}" for i in range(next(iter(record.channels.values())).size)
    ]
    body = [[t, *row[1:]] for t, row in zip(times, _columns(record, names), strict=True)]
    text = [";".join(cell.replace(".", ",") for cell in row) for row in [*head, *body]]
    return "\ufeff" + "\r\n".join(text) + "\r\n"


LAYOUTS: dict[str, Callable[[Record, Mapping[str, str]], str]] = {
    "unit in header": unit_in_header,
    "unit row": unit_row,
    "start and increment": start_and_increment,
    "decimal comma": decimal_comma,
}


def write(path: Path, record: Record, names: Mapping[str, str], layout: str = "unit in header") -> None:
    """Write a record; ``names`` maps each node to the channel's name in the file."""
    path.write_bytes(LAYOUTS[layout](record, names).encode("utf-8"))
