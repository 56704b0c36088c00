"""What a burn-in's log says as a JSON record, and the log's records as a table."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from datetime import UTC, datetime
from typing import Any

from benchfit.burnin.result import AlarmSeen, Departure, GapSeen, QuantityTrend, Trend, UnitTrend

SCHEMA = 1
NOISES = {2: "white phase", 1: "flicker phase", 0: "white", -1: "flicker", -2: "random walk"}
"""Power-law noises by their exponent."""


def record(trend: Trend) -> dict[str, Any]:
    """The trend as plain dicts, lists and numbers (contract, section 8), rates per hour.

    With several units ``quantities``, ``causes`` and ``stability`` stand under ``units``, one entry a unit.
    """
    one = trend.units[0] if len(trend.units) == 1 else None
    started = trend.started or 0.0
    found: dict[str, Any] = {
        "schema": SCHEMA,
        "run": {
            "title": trend.title,
            "circuit": trend.circuit,
            "started": _iso(trend.started),
            "ended": _iso(trend.ended),
            "records": trend.records,
            "failures": trend.failures,
            "gaps": [_gap(g) for g in trend.gaps],
            "notes": list(trend.notes),
            "closed": trend.is_closed,
            "events": [{"at": _iso(at), "says": says} for at, says in trend.events],
            "errors": [{"says": says, "records": count} for says, count in trend.errors],
        },
        "quantities": _quantities(one, started) if one else {},
        "causes": _causes(one) if one else [],
        "unexplained": _number(one.unexplained) if one else None,
        "stability": _stability(one) if one else [],
        "alarms": [_alarm(a) for a in trend.alarms],
    }
    if one is None:
        found["units"] = {
            unit.unit: {
                "records": unit.records,
                "failures": unit.failures,
                "quantities": _quantities(unit, started),
                "causes": _causes(unit),
                "unexplained": _number(unit.unexplained),
                "stability": _stability(unit),
            }
            for unit in trend.units
        }
        found["departures"] = [_departure(d) for d in trend.departures]
    return found


def _gap(gap: GapSeen) -> dict[str, Any]:
    unit = {"unit": gap.unit} if gap.unit else {}
    return {"from": _iso(gap.began), "to": _iso(gap.ended), "why": gap.why, **unit}


def _alarm(alarm: AlarmSeen) -> dict[str, Any]:
    return {
        "seq": alarm.seq,
        "acquired": _iso(alarm.acquired),
        **({"unit": alarm.unit} if alarm.unit else {}),
        "quantity": alarm.quantity,
        "value": _number(alarm.value),
        "limit": _number(alarm.limit),
        "text": alarm.text,
        "cleared": alarm.cleared,
    }


def _quantities(unit: UnitTrend, started: float) -> dict[str, Any]:
    return {name: _quantity(q, started) for name, q in unit.quantities.items()}


def _quantity(q: QuantityTrend, started: float) -> dict[str, Any]:
    def rate(value: float, u: float | None = None) -> dict[str, Any] | None:
        if not math.isfinite(value):
            return None
        return {
            "value": value * 3600,
            "u": _number(None if u is None else u * 3600),
            "unit": per_hour(q.unit),
        }

    found: dict[str, Any] = {
        "unit": q.unit,
        "records": q.records,
        "first": _number(q.first),
        "last": _number(q.last),
        "mean": _number(q.mean),
        "u": _number(q.u),
        "drift": rate(q.drift, q.u_drift),
        "drift_model": q.law,
        "probability": _number(q.probability),
        "runner_up": {"drift_model": q.runner_up[0], "probability": q.runner_up[1]},
        "change": None
        if not math.isfinite(q.change)
        else {"value": q.change, "u": _number(q.u_change), "unit": q.unit},
        "drift_now": rate(q.drift_now),
        "scatter": _number(q.scatter),
        "wander": _number(q.wander),
        "stray": q.left_out,
    }
    if math.isfinite(q.parameter):
        name = {"settling": "time_constant", "logarithmic": "age_at_start"}.get(q.law or "")
        if name:
            found[name] = {"value": q.parameter, "u": _number(q.u_parameter), "unit": "s"}
        else:
            found["step_at"] = _iso(started + q.parameter)
    if q.leaving is not None:
        ends = {"at": q.leaving.at, "earliest": q.leaving.earliest, "latest": q.leaving.latest}
        found["leaves"] = {
            "limits": [_number(q.leaving.low), _number(q.leaving.high)],
            "limit": _number(q.leaving.limit),
            **{name: _iso(None if t is None else started + t) for name, t in ends.items()},
            "why": q.leaving.why,
        }
    return found


def per_hour(unit: str) -> str:
    """The unit of a drift: "Hz/h", "1/h" for a ratio."""
    return f"{unit or '1'}/h"


def _causes(unit: UnitTrend) -> list[dict[str, Any]]:
    return [
        {
            "cause": c.cause, "share": _number(c.share), "u": _number(c.u),
            "frequency_change": _number(c.frequency_change), "change": _number(c.change), "unit": c.unit,
            "unseparated": list(c.either),
        }
        for c in unit.causes
    ]  # fmt: skip


def _stability(unit: UnitTrend) -> list[dict[str, Any]]:
    return [
        {
            "averaging_time": d.averaging_time, "adev": _number(d.adev), "u": _number(d.u),
            "interval": [_number(d.low), _number(d.high)], "noise": NOISES[d.noise],
        }
        for d in unit.stability
    ]  # fmt: skip


def _departure(d: Departure) -> dict[str, Any]:
    return {
        "unit": d.unit, "quantity": d.quantity, "departs": d.is_departing, "drift_model": d.law,
        "change": {"value": d.change, "u": _number(d.u_change), "unit": "1"},
        "drift": {"value": d.drift * 3600, "u": _number(d.u_drift * 3600), "unit": "1/h"},
        "level": {"value": d.level, "u": _number(d.u_level), "unit": "1"}, "off": d.is_off,
    }  # fmt: skip


def _number(x: float | None) -> float | None:
    return float(x) if x is not None and math.isfinite(x) else None


def _iso(at: float | None) -> str | None:
    if at is None:
        return None
    return datetime.fromtimestamp(at, UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def csv_lines(names: Sequence[str], rows: Iterable[Mapping[str, Any]], *, has_units: bool) -> Iterator[str]:
    """The records as CSV (RFC 4180), a line at a time: each quantity with its u beside it, empty where
    unknown.

    ``rows``: dicts of seq, acquired (Unix time), unit, status, error, values, u.
    """
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")

    def line(cells: Sequence[Any]) -> str:
        out.seek(0)
        out.truncate()
        writer.writerow(cells)
        return out.getvalue()

    head = ["seq", "acquired", *(["unit"] if has_units else []), "status", "error"]
    yield line([*head, *(cell for name in names for cell in (name, f"{name}_u"))])
    for row in rows:
        cells: list[Any] = [row["seq"], _iso(row["acquired"])]
        cells += [row["unit"]] if has_units else []
        cells += [row["status"], row["error"]]
        for value, u in zip(row["values"], row["u"], strict=True):
            cells += ["" if value != value else value, "" if u != u else f"{u:.6g}"]
        yield line(cells)
