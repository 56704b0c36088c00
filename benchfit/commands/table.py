"""Result records as a table: one row each."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from typing import Any


def as_csv(records: Sequence[Mapping[str, Any]]) -> str:
    """A CSV table (RFC 4180 but for plain line ends) of result records; what a record lacks stays empty.

    Numbers are in base SI units with a decimal point; ``X_u`` is the standard uncertainty of ``X``.
    """
    rows = [row(record) for record in records]
    columns = list(dict.fromkeys(name for one in rows for name in one))
    text = io.StringIO()
    writer = csv.DictWriter(text, columns, restval="", lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return text.getvalue()


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
