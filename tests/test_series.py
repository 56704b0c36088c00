"""Captures that belong together: what must be found was fixed with them, in ``tools/make_series.py``."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import benchfit
from tools.make_series import main as make_all

FOLDER = Path(__file__).resolve().parents[1] / "sample_captures"
HIVE = benchfit.Sheet.load(FOLDER / "hive_scale_clock.toml")


def test_they_are_made_anew_to_the_byte(tmp_path):
    make_all(tmp_path)
    made = [path for path in tmp_path.rglob("*") if path.is_file()]
    assert len(made) == 2 + 2 + 12
    for path in made:
        assert path.read_bytes() == (FOLDER / path.relative_to(tmp_path)).read_bytes(), path.name


def test_a_known_capacitor_tells_c_from_r():
    """One capture cannot; with a second one, 10 nF across the capacitor, it is C."""
    captures = [benchfit.read(FOLDER / f"hive_scale_clock{tail}.csv") for tail in ("", "_with_10n")]
    assert not benchfit.explain(captures[0], HIVE).explanation.settled
    joint = benchfit.Sheet.load(FOLDER / "hive_scale_clock_joint.toml")
    found = benchfit.explain(captures=captures, sheet=joint).explanation
    assert found.settled
    assert found.suspects[0].causes == ("C",)
    assert found.suspects[0].change["C"] == pytest.approx(27.72 / 22 - 1, abs=0.03)
    part = next(p for p in found.parts if p.name == "C")
    assert part.value == pytest.approx(27.72e-9, abs=2.5 * (part.u or 0))


def test_the_change_did_it():
    """The record of before names the remedy, the capture after it the result."""
    before = benchfit.explain(benchfit.read(FOLDER / "hive_scale_clock.csv"), HIVE)
    after = benchfit.explain(benchfit.read(FOLDER / "hive_scale_clock_as_left.csv"), HIVE, as_found=before)
    seen = after.explanation.as_found
    assert seen is not None
    assert seen.effect == "as predicted"
    assert [c.part for c in seen.changed] == ["C"]
    assert after.explanation.verdict == "pass"


def test_the_lot_is_off_by_its_capacitors():
    """The reel is found, and the one unit with a fault of its own is left out of it."""
    sheet = benchfit.Sheet.load(FOLDER / "frost_alarm_lot.toml")
    results = benchfit.explain_lot(sorted((FOLDER / "frost_alarm_lot").glob("*.csv")), sheet)
    lot = benchfit.lot_of(results)
    assert lot.apart == ("unit_09.csv",)
    assert dict(lot.causes)["RB"] == 1
    spread = lot.spread("C")
    assert spread is not None
    assert spread.is_off
    # The reel's true mean over the eleven units, from the table of what was built.
    assert spread.off == pytest.approx(12.610 / 12 - 1, abs=2 * (spread.off_u or 0))
    assert "C is off on average" in str(lot)


def test_the_lots_command_line(capsys):
    """As a bench user types it; the pattern is expanded here."""
    from benchfit.commands.main import main

    pattern = str(FOLDER / "frost_alarm_lot" / "unit_0[1-3].csv")
    assert main([pattern, "--build", str(FOLDER / "frost_alarm_lot.toml"), "--json", "-"]) == 0
    records = [json.loads(line) for line in capsys.readouterr().out.splitlines()]
    assert [Path(r["capture"]["path"]).name for r in records] == ["unit_01.csv", "unit_02.csv", "unit_03.csv"]
