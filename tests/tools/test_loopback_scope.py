"""The loopback instrument itself: its language, its faults, its trimmer, and the script that starts it."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from benchfit.instrument import Session
from tools import loopback_scope
from tools.loopback import KINDS, CircuitSource, Misbehaviour, PatternSource, Trimmer
from tools.loopback.builds import BUILDS
from tools.loopback.language import Instrument
from tools.loopback.misbehave import parse_rates

ROOT = Path(__file__).resolve().parents[2]


def say(instrument: Instrument, message: str) -> list[bytes]:
    return [bytes(reply) for reply in instrument.execute(message)]


@pytest.mark.parametrize(
    "command",
    [
        # SCPI-1999 volume 1, 5.1 and 6.2.1: short and long forms, any case, a leading colon, optional words.
        "SYST:ERR?", "SYSTEM:ERROR?", "syst:err:next?", ":System:Error:NEXT?",
    ],
)  # fmt: skip
def test_short_and_long_forms(command: str) -> None:
    instrument = Instrument(PatternSource(), Misbehaviour())
    assert say(instrument, command) == [b'0,"No error"']


@pytest.mark.parametrize("command", ["SYSTE:ERR?", "SYST:ERRO?", "SYST:ERR", "SYST:NEXT?", "FORMATS ASC"])
def test_other_forms_are_undefined_headers(command: str) -> None:
    # SCPI-1999 volume 2, 21.8.9: -113, "Undefined header".
    instrument = Instrument(PatternSource(), Misbehaviour())
    assert say(instrument, command) == []
    assert say(instrument, "SYST:ERR?")[0].startswith(b"-113")
    assert say(instrument, "SYST:ERR?") == [b'0,"No error"']


def test_several_commands_in_one_message() -> None:
    instrument = Instrument(PatternSource(samples=4), Misbehaviour())
    replies = say(instrument, "FORM REAL,32; FORM:BORD SWAP;INIT;*OPC?;TRAC? CH1")
    assert replies[0] == b"1"
    assert replies[1][:4] == b"#216"
    volts = np.frombuffer(replies[1][4:], "<f4")
    np.testing.assert_allclose(volts, instrument.record["CH1"].volts, rtol=1e-7)


def test_data_before_an_acquisition_are_an_error() -> None:
    instrument = Instrument(PatternSource(), Misbehaviour())
    assert say(instrument, "TRAC? CH1") == []
    assert say(instrument, "SYST:ERR?")[0].startswith(b"-230")


def test_a_trimmer_turns_there_and_back() -> None:
    trimmer = Trimmer("R", 1e3, 5e3, at=0.0, turn=60.0)
    assert [trimmer.value(t) for t in (0, 15, 30, 45, 60)] == pytest.approx([1e3, 3e3, 5e3, 3e3, 1e3])
    assert Trimmer("R", 1e3, 5e3, at=0.25).value(99.0) == 2e3


def test_parts_drift_and_the_trimmer_obeys() -> None:
    now = [0.0]
    trimmer = Trimmer("R", 40e3, 55e3, at=0.0)
    source = CircuitSource(
        "op-amp", BUILDS["op-amp"], {"CH1": "capacitor"}, samples=400, drift={"C": -0.02}, trimmer=trimmer,
        clock=lambda: now[0],
    )  # fmt: skip
    assert source.now()["R"] == 40e3
    first = source._waves().period
    now[0] = 3600.0
    assert source.now()["C"] == pytest.approx(98e-9)
    assert source._waves().period == pytest.approx(0.98 * first, rel=1e-6)
    instrument = Instrument(source, Misbehaviour())
    instrument.execute("BENC:TURN 1.0")
    assert source.now()["R"] == 55e3
    instrument.execute("BENC:TURN 7")
    assert say(instrument, "SYST:ERR?")[0].startswith(b"-224")


def test_rates() -> None:
    assert parse_rates("late=5%, cut=0.01") == {"late": 0.05, "cut": 0.01}
    assert sum(parse_rates("5%").values()) == pytest.approx(0.05)
    assert set(parse_rates("5%")) == set(KINDS)
    for wrong in ({"odd": 0.1}, {"late": 0.7, "cut": 0.7}):
        with pytest.raises(ValueError):
            Misbehaviour(wrong)


def test_faults_come_at_their_rate() -> None:
    """Of 4,000 acquisitions with ten replies each; 5 sigma of the binomial."""
    misbehaviour = Misbehaviour({"late": 0.1, "error": 0.05}, seed=1)
    for number in range(4000):
        misbehaviour.plan(number)
        for _ in range(10):
            misbehaviour.for_reply(is_block=False)
    kinds = [kind for _, kind in misbehaviour.committed]
    assert abs(kinds.count("late") - 400) < 5 * (4000 * 0.1 * 0.9) ** 0.5
    assert abs(kinds.count("error") - 200) < 5 * (4000 * 0.05 * 0.95) ** 0.5


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["--trim", "R"], "NAME=VALUE"),
        (["--trim", "R=1k"], "R=1k..20k"),
        (["--trim", "Q=1k..2k"], "no part of this op-amp"),
        (["--drift", "Q=1%"], "no part of this op-amp"),
        (["--part", "R=soon"], "not a value"),
        (["--channel", "CH1=nowhere"], "no node"),
        (["--fault", "odd=1%"], "no such fault"),
        (["--part", "R_leak=1k"], "does not oscillate"),
    ],
)
def test_what_it_refuses(words: list[str], says: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert loopback_scope.main(["--port", "0", *words]) == 2
    assert says in capsys.readouterr().err


@pytest.mark.skipif(os.name == "nt", reason="Windows has no SIGINT to send to one process")
def test_the_script_by_itself() -> None:
    command = [sys.executable, "tools/loopback_scope.py", "--port", "0", "--samples", "300", "--instant"]
    process = subprocess.Popen(
        command, cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        stdin=subprocess.DEVNULL, start_new_session=True,
    )  # fmt: skip
    assert process.stdout is not None
    line = process.stdout.readline()
    resource = line.split(": ")[0]
    assert resource.startswith("TCPIP::127.0.0.1::")
    try:
        with Session(resource, ["CH1", "CH2"]) as session:
            capture = session.acquire().capture
        assert capture is not None
        assert capture.samples == 300
    finally:
        process.send_signal(signal.SIGINT)
        assert process.wait(timeout=10) == 0
        process.communicate()
