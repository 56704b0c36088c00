"""Before power is applied: ``circuits``, ``sheet`` and ``predict``."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest

from benchfit import circuits
from benchfit.commands.main import main
from benchfit.sheet import Sheet


def test_circuits_lists_them_all(capsys):
    """A name and a title each."""
    assert main(["circuits"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert [line.split()[0] for line in lines] == list(circuits.names())


@pytest.mark.parametrize("name", circuits.names())
def test_circuits_describes_one(name, capsys):
    """Its parts, nodes and equations."""
    assert main(["circuits", name]) == 0
    out = capsys.readouterr().out
    circuit = circuits.get(name)
    for word in (
        *(part.name for part in circuit.parts),
        *(node.name for node in circuit.nodes),
        *circuit.equations,
    ):
        assert word in out


@pytest.mark.parametrize("name", circuits.names())
def test_the_starter_sheet_runs_as_it_stands(name, capsys):
    """It reads, predicts, and is on its own target; every comment that holds a key reads as well."""
    assert main(["sheet", name]) == 0
    text = capsys.readouterr().out
    Path("starter.toml").write_text(text, encoding="utf-8")
    sheet = Sheet.load("starter.toml")
    assert sheet.circuit is circuits.get(name)
    assert main(["predict", "starter.toml", "--json", "-"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    prediction = json.loads(out)
    assert prediction["oscillates"]
    assert prediction["predicted"]["frequency"]["value"] == pytest.approx(
        sheet.target_frequency.nominal, rel=6e-3
    )
    for part in circuits.get(name).parts:
        assert part.nominal == "absent" or re.search(rf"^(# )?{part.name} = ", text, re.MULTILINE)
    commented = re.sub(r"^# (?=\[|\w+ = \"[^…])", "", text, flags=re.MULTILINE)
    commented = re.sub(r"^(V_diode|R_charge|R_discharge) = .*$", "", commented, flags=re.MULTILINE)
    assert Sheet.parse(commented).probes


def test_predict_prints_and_writes(capsys):
    """Text for people, JSON in a file beside it; overrides count."""
    assert main(["sheet", "op-amp"]) == 0
    Path("s.toml").write_text(capsys.readouterr().out, encoding="utf-8")
    assert main(["predict", "s.toml", "--json", "p.json", "--set", "parts.C=1u"]) == 0
    out = capsys.readouterr().out
    record = json.loads(Path("p.json").read_text())
    assert record["predicted"]["frequency"]["value"] == pytest.approx(45.5, rel=1e-3)
    assert "45.51 Hz" in out
    with pytest.raises(json.JSONDecodeError):
        json.loads(out)
