"""--as-found: the record of before is read, or refused in one sentence; what the change did is shown."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from benchfit.commands.main import main

SAMPLES = Path(__file__).resolve().parents[2] / "sample_captures"
HIVE = str(SAMPLES / "hive_scale_clock.csv")
BUILD = ["--build", str(SAMPLES / "hive_scale_clock.toml")]
GOOD = {"schema": 1, "capture": {"path": "then.csv"}, "measured": {"oscillates": True}}


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (None, "--as-found before.json: cannot be read: No such file"),
        ("", "before.json: this is no result record; give the file that --json FILE wrote"),
        ("time,volts\n1,2\n", "before.json: this is no result record"),
        ("[1, 2]", "before.json: this is no result record"),
        ('{"a": 1}', "before.json: this is no result record"),
        ('{"schema": 1, "measured": {"frequency": NaN}}', "before.json: this is no result record"),
        ('{"schema": 2, "measured": {}}', "a record of schema 2, and this version reads schema 1"),
        ('{"schema": 1, "predicted": {}}', "this record holds nothing that was measured of a build"),
        ('{"schema": 1, "error": {"says": "no such\\nfile"}}', "could not be explained then (no such"),
        (json.dumps(GOOD) + "\n" + json.dumps(GOOD)[:40], "before.json: this is no result record"),
        ("[" * 100_000, "before.json: this is no result record"),
    ],
)  # fmt: skip
def test_what_is_no_record_is_refused(asked, capsys, text, says):
    """Status 2 and one sentence with the file's name, before any capture is read."""
    if text is not None:
        Path("before.json").write_text(text)
    assert main(["a.csv", "--as-found", "before.json"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert says in err
    assert err.count("\n") == 1
    assert asked.captures == []


def test_it_belongs_to_one_build(asked, capsys):
    """Several captures are several builds, unless they are joint."""
    Path("before.json").write_text(json.dumps(GOOD))
    assert main(["a.csv", "b.csv", "--as-found", "before.json"]) == 2
    assert "--as-found is the record of one build" in capsys.readouterr().err
    assert main(["a.csv", "b.csv", "--joint", "--as-found", "before.json"]) == 0


def test_the_last_of_several_lines_counts(asked, capsys):
    """As poll writes them, one a line; an object over several lines is one record too."""
    failed = {**GOOD, "error": {"says": "x"}}
    Path("before.json").write_text(f"{json.dumps(failed)}\n{json.dumps(GOOD)}\n\n")
    assert main(["a.csv", "--as-found", "before.json"]) == 0
    Path("before.json").write_text(json.dumps(GOOD, indent=2))
    assert main(["a.csv", "--as-found", "before.json"]) == 0


def test_report_record_and_page_say_what_the_change_did(capsys):
    """The same capture again stands for a change that did nothing."""
    assert main([HIVE, *BUILD, "--json", "before.json"]) == 0
    assert "As found, as left" not in capsys.readouterr().out
    words = ["--as-found", "before.json", "--json", "after.json", "--report", "r.html"]
    assert main([HIVE, *BUILD, *words]) == 0
    out = capsys.readouterr().out
    assert "As found, as left" in out
    assert "The change did not do what was predicted of it." in out
    seen = json.loads(Path("after.json").read_text())["as_found"]
    assert (seen["effect"], seen["path"]) == ("not by this change", HIVE)
    page = Path("r.html").read_text(encoding="utf-8")
    assert "<h2>What the change did</h2>" in page
    assert "<h2>As left</h2>" in page


def test_a_record_of_another_build_is_refused(capsys):
    """One circuit, one build."""
    assert main([HIVE, *BUILD, "--json", "before.json"]) == 0
    other = str(SAMPLES / "rain_gauge_ticker.csv")
    capsys.readouterr()
    words = [other, "--build", str(SAMPLES / "rain_gauge_ticker.toml"), "--as-found", "before.json"]
    assert main(words) == 2
    assert "the record as found is of a circuit op-amp" in capsys.readouterr().err
