"""An explanation as the result record: one JSON object, base SI units, nothing that is not a number."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Mapping
from typing import Any, NoReturn

from benchfit.errors import BenchfitError, Remark, UsageError
from benchfit.explain.result import AsFound, CaptureFacts, Explanation, Miss, PartFound, Quantity, Suspect
from benchfit.show.layout import clean

SCHEMA = 1

MEASURED = (
    "frequency",
    "period",
    "duty",
    "jitter",
    "charge_time",
    "discharge_time",
    "upper",
    "lower",
    "charge_asymptote",
    "charge_time_constant",
    "discharge_asymptote",
    "discharge_time_constant",
    "high",
    "low",
    "rise_time",
    "fall_time",
)
"""Names under ``measured`` in the order in which they are written; one that is not known is null."""


def record(
    explanation: Explanation,
    *,
    acquired: str | None = None,
    explained: str | None = None,
    seq: int | None = None,
) -> dict[str, Any]:
    """The result record of one capture, or of one joint set of captures, as plain dicts, lists and numbers.

    Every name is always there, null where it is not known, but for ``candidates`` (only where no circuit is
    given), ``record`` (only where the sheet has notes), ``as_found`` (only where there is a record of
    before), and the three stamps below.

    Parameters
    ----------
    explanation : Explanation
    acquired : str, optional
        When a live capture was taken (UTC, ISO 8601).
    explained : str, optional
        Which acquisition the explanation speaks of, where it lags behind what is measured.
    seq : int, optional
        Number of the record in a log.

    Returns
    -------
    dict
        Only str, bool, int, finite float, None, list and dict: what is infinite or undefined is None.
    """
    captures = [_capture(c) for c in explanation.captures]
    named = explanation.circuit is not None
    head = {"seq": seq, "acquired": acquired, "explained": explained}
    return {
        **{name: value for name, value in head.items() if value is not None},
        "schema": SCHEMA,
        "capture": captures[0] if len(captures) == 1 else captures,
        "measured": _measured(explanation),
        "circuit": _text(explanation.circuit) if explanation.circuit is not None else None,
        **({} if named else {"candidates": [_plain(vars(c)) for c in explanation.candidates]}),
        "parts": {_text(p.name): _part(p) for p in explanation.parts},
        "unseparated": [[_text(name) for name in group] for group in explanation.unseparated],
        "miss": None
        if explanation.miss is None
        else {k: _miss(explanation.miss.get(k)) for k in ("frequency", "duty")},
        "suspects": [_suspect(s) for s in explanation.suspects],
        "settled": None if explanation.settled is None else bool(explanation.settled),
        "ruled_out": [_plain(vars(r)) for r in explanation.ruled_out],
        "next_readings": [_plain(vars(r)) for r in explanation.next_readings],
        "remedies": [
            {
                "part": _text(r.part),
                "from": _number(r.before),
                "to": _number(r.after),
                "series": _text(r.series),
                "predicts": {k: quantity(r.predicts.get(k)) for k in ("frequency", "duty")},
            }
            for r in explanation.remedies
        ],
        "without_probe": None
        if explanation.without_probe is None
        else {k: quantity(explanation.without_probe.get(k)) for k in ("frequency", "duty")},
        "verdict": explanation.verdict,
        "warnings": remarks(explanation.warnings),
        **({"as_found": _as_found(explanation.as_found)} if explanation.as_found is not None else {}),
        **({"record": _plain(explanation.record_notes)} if explanation.record_notes else {}),
    }


def failure(
    path: str, error: BenchfitError, *, acquired: str | None = None, seq: int | None = None
) -> dict[str, Any]:
    """What stands in a record's place where its capture could not be explained: path, status and sentence."""
    head = {"seq": seq, "acquired": acquired}
    return {
        **{name: value for name, value in head.items() if value is not None},
        "schema": SCHEMA,
        "capture": {"path": _text(path)},
        "error": {"status": error.status, "says": _text(error.says)},
    }


def dumps(record: Mapping[str, Any]) -> str:
    """One line of JSON (RFC 8259) in ASCII.

    Raises
    ------
    ValueError
        Where a number is infinite or undefined: such a record was not made here.
    """
    return json.dumps(record, allow_nan=False)


def loads(text: str, path: str) -> dict[str, Any]:
    """The result record in a text: one object, or the last of one object a line.

    Raises
    ------
    UsageError
        Where it is something else, or of a capture that could not be explained.
    """
    wanted = "give the file that --json FILE wrote of the build before the change"
    for candidate in (text, text.strip().rpartition("\n")[2]):
        try:
            found = json.loads(candidate, parse_constant=_refuse)
            break
        except (ValueError, RecursionError):
            found = None
    if not isinstance(found, dict) or "schema" not in found:
        raise UsageError(f"{path}: this is no result record; {wanted}", path=path)
    if found["schema"] != SCHEMA:
        says = f"a record of schema {found['schema']}, and this version reads schema {SCHEMA}"
        raise UsageError(f"{path}: {clean(says)}; make it anew from its capture", path=path)
    if isinstance(error := found.get("error"), dict):
        says = clean(error.get("says") or "no reason is given")
        raise UsageError(f"{path}: the capture could not be explained then ({says}); {wanted}", path=path)
    if not isinstance(found.get("measured"), dict):
        says = "this record holds nothing that was measured of a build"
        raise UsageError(f"{path}: {says}; {wanted}", path=path)
    return found


def _refuse(word: str) -> NoReturn:
    raise ValueError(word)


def quantity(q: Quantity | None) -> dict[str, Any] | None:
    """{"value", "u", "unit"} of a quantity, with ``u_noise`` where known; None where the value is not."""
    if q is None or _number(q.value) is None:
        return None
    out: dict[str, Any] = {"value": _number(q.value), "u": _number(q.u), "unit": _text(q.unit)}
    if q.u_noise is not None:
        out["u_noise"] = _number(q.u_noise)
    return out


def remarks(warnings: Iterable[Remark]) -> list[dict[str, Any]]:
    """Warnings as [{"code", "says"}], each once, in the order in which they came."""
    once = dict.fromkeys((_text(w.code), _text(w.says)) for w in warnings)
    return [{"code": code, "says": says} for code, says in once]


def _capture(facts: CaptureFacts) -> dict[str, Any]:
    names = ("name", "node", "minimum", "maximum", "resolution")
    return {
        "path": _text(facts.path),
        "samples": int(facts.samples),
        "interval": _number(facts.interval),
        "channels": [{name: _plain(channel.get(name)) for name in names} for channel in facts.channels],
        "cycles": _number(facts.cycles),
    }


def _measured(explanation: Explanation) -> dict[str, Any]:
    names = [*MEASURED, *(name for name in explanation.measured if name not in MEASURED)]
    return {
        "oscillates": bool(explanation.oscillates),
        **{n: quantity(explanation.measured.get(n)) for n in names},
    }


def _part(part: PartFound) -> dict[str, Any]:
    return {
        "value": _number(part.value),
        "u": _number(part.u),
        "unit": _text(part.unit),
        "nominal": _number(part.nominal),
        "limits": None if part.limits is None else [_number(x) for x in part.limits],
        "deviation": _number(part.deviation),
        "within": None if part.within is None else bool(part.within),
        "known_from": _text(part.known_from),
    }


def _miss(miss: Miss | None) -> dict[str, Any] | None:
    if miss is None:
        return None
    return {
        "target": _number(miss.target),
        "built": _number(miss.built),
        "miss": _number(miss.miss),
        "on_paper": _number(miss.on_paper),
        "shares": [
            {"cause": _text(s.cause), "share": _number(s.share), "u": _number(s.u)} for s in miss.shares
        ],
        "unexplained": _number(miss.unexplained),
    }


def _as_found(as_found: AsFound) -> dict[str, Any]:
    def both(side: Mapping[str, Quantity]) -> dict[str, Any]:
        return {name: quantity(side.get(name)) for name in ("frequency", "duty")}

    return {
        "path": _text(as_found.path),
        "verdict": as_found.verdict,
        "changed": [
            {
                "part": _text(c.part),
                "from": _number(c.before),
                "to": _number(c.after),
                "unit": _text(c.unit),
                "known_from": "remedy" if c.is_taken else "build sheet",
            }
            for c in as_found.changed
        ],
        "without_probe": as_found.is_lifted,
        "found": both(as_found.before),
        "predicted": both(as_found.predicted) if as_found.predicted else None,
        "obtained": both(as_found.obtained),
        "effect": as_found.effect,
    }


def _suspect(suspect: Suspect) -> dict[str, Any]:
    return {
        "causes": [_text(name) for name in suspect.causes],
        "change": {_text(name): _number(x) for name, x in suspect.change.items()},
        "probability": _number(suspect.probability),
        "says": _text(suspect.says),
    }


def _number(x: Any) -> float | None:
    """A plain finite float, or None for what is unknown, infinite or undefined."""
    if x is None:
        return None
    x = float(x)
    return x if math.isfinite(x) else None


def _text(text: Any) -> str:
    """Text that any JSON reader takes: undecodable bytes of a file name (lone surrogates) are written out."""
    return str(text).encode("utf-8", "backslashreplace").decode("utf-8")


def _plain(x: Any) -> Any:
    """Mappings, sequences, numpy scalars and text as their plain counterparts."""
    if x is None or isinstance(x, bool):
        return x
    if isinstance(x, str):
        return _text(x)
    if isinstance(x, int):
        return x
    if isinstance(x, Mapping):
        return {_text(k): _plain(v) for k, v in x.items()}
    if isinstance(x, list | tuple):
        return [_plain(v) for v in x]
    return _number(x)
