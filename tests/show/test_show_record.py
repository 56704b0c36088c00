"""The result record: its names are the contract's, its numbers are numbers, its text is text."""

from __future__ import annotations

import json
import math
import re
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from show_examples import ALL, facts, fault_settled, healthy, joint, no_sheet, no_target

from benchfit.errors import CaptureError, Remark
from benchfit.explain.result import (
    Explanation,
    Miss,
    NextReading,
    PartFound,
    Quantity,
    Remedy,
    RuledOut,
    Share,
    Suspect,
)
from benchfit.show.record import MEASURED, dumps, failure, record

SHARED = Path(__file__).parents[2].parent / "shared" / "contract.md"

QUANTITY = {"value", "u", "unit", "u_noise"}
SCHEMA = {
    "schema": set(),
    "capture": {
        "path",
        "samples",
        "interval",
        "channels",
        "name",
        "node",
        "minimum",
        "maximum",
        "resolution",
        "cycles",
    },
    "measured": {"oscillates", *MEASURED} | QUANTITY,
    "circuit": set(),
    "parts": {"NAME", "value", "u", "unit", "nominal", "limits", "deviation", "within", "known_from"},
    "unseparated": set(),
    "miss": {
        "frequency",
        "duty",
        "target",
        "built",
        "miss",
        "on_paper",
        "shares",
        "cause",
        "share",
        "u",
        "unexplained",
    },
    "suspects": {"causes", "change", "NAME", "probability", "says"},
    "settled": set(),
    "ruled_out": {"cause", "by"},
    "next_readings": {"reading", "node_or_part", "would_settle"},
    "remedies": {"part", "from", "to", "series", "predicts", "frequency", "duty"} | QUANTITY,
    "without_probe": {"frequency", "duty"} | QUANTITY,
    "verdict": set(),
    "warnings": {"code", "says"},
}
"""Section 5 of the interface as restated here: every name that may stand under each top-level name."""


def keys(x: Any, names: set[str]) -> set[str]:
    """All names used anywhere in x; those of parts are NAME."""
    if isinstance(x, dict):
        own = {"NAME" if k in names else k for k in x}
        return own.union(*(keys(v, names) for v in x.values()))
    if isinstance(x, list):
        return set().union(*(keys(v, names) for v in x))
    return set()


def numbers(x: Any) -> list[Any]:
    """All leaves of a record."""
    if isinstance(x, dict):
        return [n for v in x.values() for n in numbers(v)]
    if isinstance(x, list):
        return [n for v in x for n in numbers(v)]
    return [x]


def refuse(token: str) -> float:
    raise AssertionError(f"not a JSON number: {token}")


@pytest.mark.parametrize("name", ALL)
def test_every_example_uses_only_the_schemas_names(name: str) -> None:
    """Nothing stands in a record that the interface does not name, and no top-level name is missing."""
    made = record(ALL[name]())
    extra = {"candidates"} if made["circuit"] is None else set()
    assert set(made) - {"record", "as_found"} == set(SCHEMA) | extra
    assert ("as_found" in made) == (ALL[name]().as_found is not None)
    names = set(made["parts"]).union(*(s["causes"] for s in made["suspects"]))
    for row, allowed in SCHEMA.items():
        assert keys(made[row], names) <= allowed, row


@pytest.mark.parametrize("name", ALL)
def test_every_example_survives_a_strict_reader(name: str) -> None:
    """A reader that refuses NaN and Infinity gets the same record back, from plain ASCII."""
    made = record(ALL[name]())
    line = dumps(made)
    assert line.isascii()
    assert "\n" not in line
    assert json.loads(line, parse_constant=refuse) == made
    assert {type(x) for x in numbers(made)} <= {float, int, str, bool, type(None)}


@pytest.mark.skipif(
    not SHARED.exists(), reason="the interface page (a folder 'shared' beside the repository) is absent"
)
def test_the_schema_is_the_interface_pages() -> None:
    """The names restated above are those in the braces of the page's own listing."""
    listing = SHARED.read_text(encoding="utf-8").split("## 5.")[1].split("```text")[1].split("```")[0]
    rows: dict[str, str] = {}
    row = ""
    for line in listing.splitlines():
        line = line.split("#")[0]
        if start := re.match(r"([a-z_]+)\s", line):
            row = start[1]
            rows[row] = line[start.end() :]
        elif row:
            rows[row] += line
    assert set(rows) == set(SCHEMA)
    for row, text in rows.items():
        inner = re.sub(r"\([^)]*\)|…", "", "".join(re.findall(r"[{\[](.*)[}\]]", text)))
        found = set(re.findall(r"[A-Za-z_]+", inner)) - {"q", "true", "x", "lo", "hi", "circuit", "score"}
        expected = SCHEMA[row] - (QUANTITY if row in {"measured", "remedies", "without_probe"} else set())
        assert found - {"NAME"} == expected - {"NAME"}, row


@pytest.mark.parametrize(
    "name", ["healthy", "fault_settled", "unsettled", "joint", "cancelling", "probe_loads"]
)
def test_the_shares_of_a_record_add_up(name: str) -> None:
    """on_paper + all shares + unexplained = miss to 1e-9, read back from the text."""
    made = json.loads(dumps(record(ALL[name]())))
    for budget in made["miss"].values():
        if budget is not None:
            total = budget["on_paper"] + sum(s["share"] for s in budget["shares"]) + budget["unexplained"]
            assert abs(total - budget["miss"]) < 1e-9


def test_capture_is_an_object_for_one_and_a_list_for_a_joint_set() -> None:
    assert isinstance(record(healthy())["capture"], dict)
    assert [c["path"] for c in record(joint())["capture"]] == ["tide-beeper.csv", "tide-beeper +10n.csv"]


def test_what_is_not_known_is_null() -> None:
    """No target: no miss, no verdict, no remedy; no sheet: no circuit, but candidates."""
    without = record(no_target())
    assert without["miss"] is None
    assert without["verdict"] is None
    assert without["remedies"] == []
    bare = record(no_sheet())
    assert bare["circuit"] is None
    assert bare["candidates"][0] == {"circuit": "trigger-diode", "score": 0.61}
    assert record(fault_settled())["measured"]["rise_time"] is None


def test_stamps_of_live_records_stand_first() -> None:
    made = record(healthy(), acquired="2031-05-04T10:00:00Z", explained="2031-05-04T09:59:58Z", seq=7)
    assert list(made)[:4] == ["seq", "acquired", "explained", "schema"]
    assert "acquired" not in record(healthy())


def test_notes_of_the_sheet_are_passed_on() -> None:
    assert record(fault_settled())["record"] == {"unit": "0017", "ambient": "23 °C"}


def test_a_failure_stands_in_a_records_place() -> None:
    made = failure("lost\udcff.csv", CaptureError("lost.csv is empty; export it again"), seq=3)
    assert json.loads(dumps(made)) == {
        "seq": 3,
        "schema": 1,
        "capture": {"path": "lost\\udcff.csv"},
        "error": {"status": 3, "says": "lost.csv is empty; export it again"},
    }


def test_a_warning_is_said_once() -> None:
    same = Remark("few-cycles", "2 cycles")
    made = record(
        Explanation((facts("a.csv"),), True, {}, "op-amp", warnings=(same, Remark("clipped", "x"), same))
    )
    assert [w["code"] for w in made["warnings"]] == ["few-cycles", "clipped"]


any_float = st.floats(allow_nan=True, allow_infinity=True)
maybe = st.none() | any_float
words = st.text(max_size=8)
quantities = st.builds(Quantity, any_float, maybe, words, maybe)
explanations = st.builds(
    Explanation,
    captures=st.lists(
        st.just(facts("a.csv")) | st.builds(facts, words, cycles=maybe), min_size=1, max_size=2
    ).map(tuple),
    oscillates=st.booleans(),
    measured=st.dictionaries(st.sampled_from(MEASURED), st.none() | quantities),
    circuit=st.none() | words,
    parts=st.lists(
        st.builds(
            PartFound,
            words,
            maybe,
            maybe,
            words,
            maybe,
            st.none() | st.tuples(any_float, any_float),
            maybe,
            st.none() | st.booleans(),
            words,
        ),
        max_size=3,
    ).map(tuple),
    miss=st.none()
    | st.dictionaries(
        st.sampled_from(["frequency", "duty"]),
        st.builds(
            Miss,
            any_float,
            maybe,
            maybe,
            maybe,
            st.lists(st.builds(Share, words, any_float, maybe), max_size=3).map(tuple),
            maybe,
        ),
    ),
    suspects=st.lists(
        st.builds(
            Suspect,
            st.lists(words, max_size=2).map(tuple),
            st.dictionaries(words, any_float, max_size=2),
            any_float,
            words,
        ),
        max_size=3,
    ).map(tuple),
    settled=st.none() | st.booleans(),
    ruled_out=st.lists(st.builds(RuledOut, words, words), max_size=2).map(tuple),
    next_readings=st.lists(st.builds(NextReading, words, words, any_float), max_size=2).map(tuple),
    remedies=st.lists(
        st.builds(
            Remedy,
            words,
            any_float,
            any_float,
            words,
            st.dictionaries(st.sampled_from(["frequency", "duty"]), quantities),
        ),
        max_size=2,
    ).map(tuple),
    without_probe=st.none() | st.dictionaries(st.sampled_from(["frequency", "duty"]), quantities),
    warnings=st.lists(st.builds(Remark, words, words), max_size=2).map(tuple),
    record_notes=st.dictionaries(words, words, max_size=2),
)


@given(explanations)
@settings(deadline=None, max_examples=80)
def test_no_explanation_whatever_puts_nan_into_a_record(explanation: Explanation) -> None:
    """Whatever the earlier stages hand on, a strict reader takes the record and every number is finite."""
    made = record(explanation)
    assert json.loads(dumps(made), parse_constant=refuse) == made
    assert all(math.isfinite(x) for x in numbers(made) if isinstance(x, float))


def test_a_record_not_made_here_is_refused_if_it_holds_nan() -> None:
    with pytest.raises(ValueError):
        dumps({"schema": 1, "value": float("nan")})
