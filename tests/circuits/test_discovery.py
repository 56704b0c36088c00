"""A new circuit is one new file."""

from __future__ import annotations

import sys

import pytest

from benchfit import circuits

BUCKET = '''
"""A bucket that tips over: water runs in at a steady rate until it is full, and out at once."""

from benchfit.circuits.lag import lag, parasitics, phase
from benchfit.circuits.model import Circuit, Cycle, Node, Part


def _cycle(p):
    feed = lag(p, (1 / p["R"], p["supply"]))
    empty = lag(p, (1 / p["r_tip"], 0.0 * p["supply"]))
    return Cycle((
        phase(feed, p["V_full"], rising=True, before=empty),
        phase(empty, 0.1 * p["V_full"], rising=False, before=feed),
    ))


CIRCUIT = Circuit(
    name="tipping-bucket", title="a bucket",
    parts=(Part("supply", "V", "head"), Part("R", "Ω", "pipe"), Part("C", "F", "bucket", kind="capacitor"),
           Part("V_full", "V", "full", kind="threshold"), Part("r_tip", "Ω", "spout", "log", "10 Ω ± 10 %"),
           *parasitics("R")),
    nodes=(Node("capacitor", "timing", "the bucket", True),),
    cycle=_cycle, likeness=lambda seen: 0.01,
)
'''
SHEET = """
circuit = "tipping-bucket"
[parts]
supply = "10 V"
R = "10k"
C = "1u"
V_full = "6 V"
"""


@pytest.fixture
def bucket(tmp_path, monkeypatch):
    (tmp_path / "tipping_bucket.py").write_text(BUCKET, encoding="utf-8")
    monkeypatch.setattr(circuits, "__path__", [*circuits.__path__, str(tmp_path)])
    circuits._all.cache_clear()
    yield
    circuits._all.cache_clear()
    sys.modules.pop("benchfit.circuits.tipping_bucket", None)


@pytest.mark.usefixtures("bucket")
def test_a_new_file_is_a_circuit_without_another_being_touched():
    """Known by name, read in a sheet, predicted from: R·C·ln[(10 − 0.6)/(10 − 6)], then r·C·ln 10."""
    from math import log

    from benchfit.pipeline import predict
    from benchfit.sheet.model import Sheet

    assert "tipping-bucket" in circuits.names()
    period = predict(Sheet.parse(SHEET))["predicted"]["period"]["value"]
    assert period == pytest.approx(0.01 * log(9.4 / 4) + 1e-5 * log(6 / 0.6), rel=1e-9)


def test_the_eleven_and_no_more():
    assert circuits.names() == (
        "current-ramp", "gas-lamp", "gate-pair", "op-amp", "programmable-unijunction", "schmitt-inverter",
        "timer-555", "triangle", "trigger-diode", "two-transistor", "unijunction",
    )  # fmt: skip
    with pytest.raises(KeyError):
        circuits.get("tipping-bucket")
