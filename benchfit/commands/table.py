"""Result records as a table: one row each."""

from __future__ import annotations

import csv
import json
import tempfile
from collections.abc import Mapping, Sequence
from typing import Any, TextIO


class Table:
    """A CSV table (RFC 4180 but for plain line ends) of result records; what a record lacks stays empty.

    Numbers are in base SI units with a decimal point; ``X_u`` is the standard uncertainty of ``X``. The
    columns are known when all rows are, until then they lie in a temporary file: a table may be long.
    """

    def __init__(self) -> None:
        self._columns: dict[str, None] = {}
        # The file is gone with the object: there is no block of code that the table lives in.
        self._rows = tempfile.TemporaryFile("w+", encoding="utf-8")  # noqa: SIM115

    def add(self, record: Mapping[str, Any]) -> None:
        """One more row."""
        cells = row(record)
        self._columns.update(dict.fromkeys(cells))
        print(json.dumps(cells), file=self._rows)

    def write(self, file: TextIO) -> None:
        """Write the whole table."""
        writer = csv.DictWriter(file, list(self._columns), restval="", lineterminator="\n")
        writer.writeheader()
        self._rows.seek(0)
        writer.writerows(json.loads(line) for line in self._rows)
        self._rows.close()


def row(record: Mapping[str, Any]) -> dict[str, Any]:
    """One record as plain cells."""
    capture = record.get("capture") or {}
    captures = capture if isinstance(capture, Sequence) else [capture]
    found: dict[str, Any] = {"capture": " ".join(str(one.get("path", "")) for one in captures)}
    found.update({key: record[key] for key in ("seq", "acquired", "circuit", "verdict") if key in record})
    error = record.get("error") or {}
    found["status"] = error.get("status", 0)
    if error:
        found["says"] = error.get("says")
    measured = record.get("measured") or {}
    if "oscillates" in measured:
        found["oscillates"] = measured["oscillates"]
    for name, quantity in measured.items():
        if name != "oscillates":
            found.update(_cells(name, quantity))
    for name, miss in (record.get("miss") or {}).items():
        found[f"{name}_miss"] = (miss or {}).get("miss")
    for name, part in (record.get("parts") or {}).items():
        found.update(_cells(name, part))
        found[f"{name}_deviation"] = part.get("deviation")
    suspects = record.get("suspects") or []
    if suspects:
        found["suspect"] = "+".join(suspects[0]["causes"])
        found["suspect_probability"] = suspects[0]["probability"]
        found["settled"] = record.get("settled")
    found["warnings"] = " ".join(warning["code"] for warning in record.get("warnings") or [])
    return found


def _cells(name: str, quantity: Mapping[str, Any] | None) -> dict[str, Any]:
    quantity = quantity or {}
    return {name: quantity.get("value"), f"{name}_u": quantity.get("u")}
