"""Dialect files: read whole, and every mistake named with its file, its key and what would be accepted."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import pytest

from benchfit.errors import SheetError
from benchfit.instrument import SCPI_1999, Dialect

LEAST = '[read]\ndata = "D? {channel}"\nencoding = "uint8"\n'


def test_the_shipped_dialect(named_fields: Dialect) -> None:
    assert named_fields.name == "header of named fields"
    assert named_fields.once == ("*CLS", "REC:FORM U8")
    assert named_fields.each == ("RUN:ONE",)
    assert named_fields.wait == "*OPC?"
    assert named_fields.before == ("REC:SEL {channel}",)
    assert named_fields.fields == (
        "points", "x_increment", "x_origin", "y_increment", "y_origin", "y_reference", "",
    )  # fmt: skip
    assert (named_fields.encoding, named_fields.byte_order, named_fields.timeout) == ("uint8", "little", 5.0)
    assert (named_fields.identify, named_fields.errors) == ("*IDN?", "SYST:ERR?")


def test_the_built_in_language() -> None:
    # SCPI-1999 volume 2; the order is that of the contract between the program and its users.
    assert SCPI_1999.once == ("FORM REAL,32", "FORM:BORD SWAP")
    assert (SCPI_1999.each, SCPI_1999.wait) == (("INIT",), "*OPC?")
    assert list(SCPI_1999.queries.values()) == ["SENS:SWE:TINT?", "SENS:SWE:OFFS:TIME?"]
    assert SCPI_1999.data == "TRAC? {channel}"
    assert (SCPI_1999.encoding, SCPI_1999.byte_order) == ("float32", "little")


def test_what_is_left_out_has_defaults() -> None:
    dialect = Dialect.parse(LEAST, path="least.toml")
    assert dialect == replace(
        Dialect(name="least.toml", data="D? {channel}", encoding="uint8"), path="least.toml"
    )


@pytest.mark.parametrize(
    ("text", "seconds"), [('"5 s"', 5.0), ('"500 ms"', 0.5), ('"1.5s"', 1.5), ("2", 2.0)]
)
def test_timeout(text: str, seconds: float) -> None:
    assert Dialect.parse(f"timeout = {text}\n{LEAST}").timeout == pytest.approx(seconds)


@pytest.mark.parametrize(
    ("text", "key", "says"),
    [
        (f"time_out = 3\n{LEAST}", "time_out", "did you mean timeout"),
        (f"timeout = 0\n{LEAST}", "timeout", "above 0"),
        (f"timeout = true\n{LEAST}", "timeout", "above 0"),
        (f'timeout = "5 V"\n{LEAST}', "timeout", "above 0"),
        (f'timeout = "-1 s"\n{LEAST}', "timeout", "above 0"),
        (f'[setup]\nonec = ["*CLS"]\n{LEAST}', "setup.onec", "did you mean once"),
        (f'[setup]\nonce = "*CLS"\n{LEAST}', "setup.once", "list"),
        (f'[setup]\nwait = ["*OPC?"]\n{LEAST}', "setup.wait", "text in quotes"),
        (f"setup = 5\n{LEAST}", "setup", "section"),
        (f'[setpu]\nonce = []\n{LEAST}', "setpu", "did you mean setup"),
        ('[read]\ndata = "D?"\nencoding = "unit8"\n', "read.encoding", "did you mean uint8"),
        ('[read]\ndata = "D?"\n', "read.encoding", "ascii, int8"),
        ('[read]\nencoding = "int8"\n', "read.data", "missing"),
        (f'{LEAST}byte_order = "middle"\n', "read.byte_order", "little, big"),
        (f'{LEAST}y_origin_unit = "steps"\n', "read.y_origin_unit", "did you mean step"),
        (f'{LEAST}preamble = "H?"\n', "read.preamble", "fields"),
        (f'{LEAST}fields = ["points"]\n', "read.fields", "preamble"),
        (f'{LEAST}preamble = "H?"\nfields = ["x_incremnt"]\n', "read.fields", "did you mean x_increment"),
        (f'{LEAST}preamble = "H?"\nfields = ["points", "points"]\n', "read.fields", "twice"),
        (f'{LEAST}[read.queries]\nx_step = "X?"\n', "read.queries.x_step", "known"),
        (
            f'{LEAST}preamble = "H?"\nfields = ["points"]\n[read.queries]\npoints = "P?"\n',
            "read.fields",
            "twice",
        ),
        (f'write_termination = "END"\n{LEAST}', "write_termination", "\\r\\n"),
        (f'[serial]\nbaud_rate = "fast"\n{LEAST}', "serial.baud_rate", "above 0"),
        (f'[serial]\nparity = "oddly"\n{LEAST}', "serial.parity", "none, odd"),
        ("name = \n", "", "not TOML"),
    ],
)  # fmt: skip
def test_mistakes_are_named(text: str, key: str, says: str) -> None:
    with pytest.raises(SheetError) as caught:
        Dialect.parse(text, path="bench.toml")
    assert caught.value.facts["key"] == key
    assert caught.value.facts["path"] == "bench.toml"
    assert caught.value.status == 2
    assert caught.value.says.startswith("bench.toml: ")
    assert says in caught.value.says
    assert "\n" not in caught.value.says


def test_a_missing_file(tmp_path: Path) -> None:
    with pytest.raises(SheetError, match=re.escape(str(tmp_path / "no.toml"))):
        Dialect.load(tmp_path / "no.toml")
    (tmp_path / "bad.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(SheetError, match="UTF-8"):
        Dialect.load(tmp_path / "bad.toml")
