"""A file with samples in it -> a Capture (first, plain version: one table, one header)."""

from __future__ import annotations

import io
import re
from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np

from benchfit.capture.model import Capture, Channel
from benchfit.errors import CaptureError, Remark

_NUMBER = re.compile(r"[+-]?(\d+([.,]\d*)?|[.,]\d+)([eE][+-]?\d+)?")
_UNIT = re.compile(r"^(?P<name>.*?)\s*(?:\bin\s+|[\[(])(?P<unit>[^\[\]()]+?)[\])]?$")
_SCALES = {"s": 1.0, "sec": 1.0, "second": 1.0, "ms": 1e-3, "us": 1e-6, "ns": 1e-9, "v": 1.0, "volt": 1.0, "mv": 1e-3,
           "ampere": 1.0, "a": 1.0}


def read(
    path: str | Path,
    also: Sequence[str | Path] = (),
    *,
    columns: Mapping[str, int | str] | None = None,
    interval: float | None = None,
    frame: int | None = None,
    limit: int | None = None,
    stdin: io.BufferedIOBase | None = None,
) -> Capture:
    """The capture in ``path``. Raises CaptureError."""
    import pandas

    where = str(path)
    try:
        text = Path(path).read_bytes().decode("utf-8-sig", errors="strict")
    except UnicodeDecodeError:
        text = Path(path).read_bytes().decode("latin-1")
    except OSError as fault:
        raise CaptureError(f"{where}: cannot be opened ({fault.strerror}).", path=where) from None
    lines = text.splitlines()
    probe = [line for line in lines if line.strip()][-20:]
    if not probe:
        raise CaptureError(f"{where}: the file is empty.", path=where)
    sep = next((s for s in (";", "\t", ",") if all(s in line for line in probe)), ",")
    decimal = "," if sep != "," and any("," in line for line in probe) else "."

    def cells(line: str) -> list[str]:
        return [cell.strip() for cell in line.split(sep)]

    def numeric(line: str) -> bool:
        row = [c for c in cells(line) if c]
        return bool(row) and all(_NUMBER.fullmatch(c) for c in row)

    first = next((k for k, line in enumerate(lines) if numeric(line)), None)
    if first is None:
        raise CaptureError(f"{where}: no row of numbers was found.", path=where)
    table = pandas.read_csv(io.StringIO("\n".join(lines[first:])), header=None, sep=sep, decimal=decimal, dtype=float)
    table = table.dropna(axis=1, how="all")
    head = [cells(line.lstrip("# ")) for line in lines[:first] if line.strip()]
    marks: list[Remark] = []
    names, units = _header(head, table.shape[1])
    if len(head) == 2 and [c.lower() for c in head[0][2:4]] == ["start", "increment"]:
        start, interval = float(head[1][2]), interval or float(head[1][3])
        time_column = None
    elif interval is not None:
        start, time_column = 0.0, None
    else:
        t = table.iloc[:, 0].to_numpy(dtype=float) * _SCALES.get(units[0].lower(), 1.0)
        time_column = 0
        stamps = np.unique(t)
        if np.any(np.diff(t) < 0) or stamps.size < 2:
            raise CaptureError(f"{where}: no time column; give the time between samples with --interval.", path=where)
        start, interval = float(stamps[0]), float((stamps[-1] - stamps[0]) / (stamps.size - 1))
        if 2 * stamps.size == t.size:
            table = (table.iloc[::2].reset_index(drop=True) + table.iloc[1::2].reset_index(drop=True)) / 2
            marks.append(Remark("envelope", "every stamp stands twice: read as minimum and maximum of an interval."))
    channels = []
    for k in range(table.shape[1]):
        if k != time_column:
            values = table.iloc[:, k].to_numpy(dtype=float) * _SCALES.get(units[k].lower(), 1.0)
            steps = np.diff(np.unique(values))
            channels.append(Channel(names[k] or f"CH{len(channels) + 1}", units[k] or "V", values,
                                    float(steps[steps > 1e-9].min()) if np.any(steps > 1e-9) else 0.0))
    return Capture(where, float(interval), start, tuple(channels), tuple(marks), {"delimiter": sep, "decimal": decimal})


def _header(head: list[list[str]], count: int) -> tuple[list[str], list[str]]:
    names, units = [""] * count, [""] * count
    for row in head[-2:]:
        for k, cell in enumerate(row[:count]):
            if cell.lower().strip("()[]") in _SCALES:
                units[k] = {"volt": "V", "second": "s", "ampere": "A"}.get(cell.lower(), cell.strip("()[]"))
            elif found := _UNIT.match(cell):
                names[k], units[k] = found["name"], found["unit"]
            else:
                names[k] = cell
    return names, units
