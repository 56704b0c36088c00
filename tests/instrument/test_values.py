"""Over real sockets: what is read equals what was digitised, in every language, encoding and block form."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from benchfit.errors import InstrumentError
from benchfit.instrument import SCPI_1999, Dialect, Session
from tools.loopback import CircuitSource, LoopbackScope, PatternSource
from tools.loopback.builds import BUILDS

Serve = Callable[..., LoopbackScope]
FORMATS = {
    "uint8": "U8",
    "int8": "I8",
    "uint16": "U16",
    "int16": "I16",
    "float32": "F32",
    "float64": "F64",
    "ascii": "ASC",
}


def check(scope: LoopbackScope, session: Session, exact: bool) -> None:
    source = scope.instrument.source
    for _ in range(3):
        acquisition = session.acquire()
        capture = acquisition.capture
        assert capture is not None
        assert [channel.name for channel in capture.channels] == list(session.channels)
        for channel in capture.channels:
            digitised = scope.instrument.record[channel.name]
            truth = digitised.volts
            if exact:
                assert np.array_equal(channel.values, truth)
            else:
                np.testing.assert_allclose(channel.values, truth, rtol=2e-7, atol=0)
            assert channel.values.dtype == np.float64
            assert channel.unit == "V"
            assert channel.resolution == pytest.approx(digitised.step, rel=1e-4)
        assert capture.interval == pytest.approx(source.span / 1000, rel=1e-12)
        assert capture.start == pytest.approx(-source.span / 4, rel=1e-12)
        assert capture.path == scope.resource
        assert capture.notes["instrument"].startswith("Benchfit,")
        assert capture.notes["acquired"] == acquisition.stamp


def test_scpi_1999(serve: Serve) -> None:
    scope = serve()
    with Session(scope.resource, ["CH1", "CH2"]) as session:
        # float32 holds nine significant digits.
        check(scope, session, exact=False)


@pytest.mark.parametrize("block", ["DEF", "IND"])
@pytest.mark.parametrize("order", ["little", "big"])
@pytest.mark.parametrize("encoding", FORMATS)
def test_every_encoding(serve: Serve, named_fields: Dialect, encoding: str, order: str, block: str) -> None:
    once = (f"REC:FORM {FORMATS[encoding]}", f"REC:ORD {order}", f"REC:BLOC {block}")
    dialect = replace(named_fields, once=once, encoding=encoding, byte_order=order)  # type: ignore[arg-type]
    scope = serve()
    with Session(scope.resource, ["CH1", "CH2"], dialect=dialect) as session:
        check(scope, session, exact=encoding not in ("float32", "int16", "uint16"))


def test_an_indefinite_block_without_announced_length(serve: Serve, named_fields: Dialect) -> None:
    fields = ("", "x_increment", "x_origin", "y_increment", "y_origin", "y_reference", "")
    dialect = replace(named_fields, once=("REC:FORM U8", "REC:BLOC IND"), fields=fields)
    scope = serve()
    with Session(scope.resource, ["CH1", "CH2"], dialect=dialect) as session:
        check(scope, session, exact=True)


def test_scpi_1999_in_ascii_and_as_integers(serve: Serve) -> None:
    scope = serve()
    ascii_dialect = replace(SCPI_1999, once=("FORM ASC",), encoding="ascii")
    with Session(scope.resource, ["CH1"], dialect=ascii_dialect) as session:
        check(scope, session, exact=False)
    codes = replace(SCPI_1999, once=("FORM INT,16", "FORM:BORD NORM"), encoding="int16", byte_order="big")
    with Session(scope.resource, ["CH1"], dialect=codes) as session:
        capture = session.acquire().capture
        assert capture is not None
        # Without a y_increment the volts are the raw codes.
        raw = scope.instrument.record["CH1"].codes.astype(int) - 128
        assert np.array_equal(capture.channels[0].values, raw)


def test_an_origin_in_steps(serve: Serve, named_fields: Dialect) -> None:
    dialect = replace(named_fields, y_origin_unit="step")
    scope = serve()
    with Session(scope.resource, ["CH1"], dialect=dialect) as session:
        capture = session.acquire().capture
    assert capture is not None
    digitised = scope.instrument.record["CH1"]
    expected = (digitised.codes - 0.0 - digitised.origin) * digitised.step
    assert np.allclose(capture.channels[0].values, expected, rtol=1e-12)


def test_x_reference_moves_the_start(serve: Serve, named_fields: Dialect) -> None:
    fields = ("points", "x_increment", "x_reference", "y_increment", "y_origin", "y_reference", "")
    scope = serve()
    with Session(scope.resource, ["CH1"], dialect=replace(named_fields, fields=fields)) as session:
        capture = session.acquire().capture
    assert capture is not None
    digitised = scope.instrument.record["CH1"]
    assert capture.start == pytest.approx((0 - digitised.start) * digitised.interval, rel=1e-12)


def test_a_large_block_full_of_line_ends(serve: Serve, named_fields: Dialect) -> None:
    scope = serve(PatternSource(samples=400_000))
    for dialect in (SCPI_1999, named_fields):
        with Session(scope.resource, ["CH2"], dialect=dialect) as session:
            capture = session.acquire().capture
            assert capture is not None
            assert (scope.instrument.record["CH2"].codes == 0x0A).any()
            np.testing.assert_allclose(
                capture.channels[0].values, scope.instrument.record["CH2"].volts, rtol=2e-7, atol=0
            )
            assert session.acquire().number == 2


def test_no_interval_is_said(serve: Serve, named_fields: Dialect) -> None:
    fields = ("points", "", "x_origin", "y_increment", "y_origin", "y_reference", "")
    scope = serve()
    with Session(scope.resource, ["CH1"], dialect=replace(named_fields, fields=fields)) as session:
        capture = session.acquire().capture
    assert capture is not None
    assert capture.interval == 1.0
    assert [remark.code for remark in capture.warnings] == ["layout-guessed"]


@pytest.mark.parametrize("circuit", sorted(BUILDS))
def test_every_circuit_can_be_on_the_bench(circuit: str) -> None:
    from tools.bench.rigs import RIGS

    node = RIGS[circuit].nodes[0]
    source = CircuitSource(circuit, BUILDS[circuit], {"CH1": node}, samples=500, cycles=4)
    record = source.digitise(1)["CH1"]
    assert np.ptp(record.codes.astype(int)) > 50, "the waveform should fill the screen"


def test_an_unknown_channel_is_the_instruments_own_error(serve: Serve, named_fields: Dialect) -> None:
    dialect = replace(named_fields, timeout=0.5)
    scope = serve()
    with (
        Session(scope.resource, ["CH7"], dialect=dialect) as session,
        pytest.raises(InstrumentError) as caught,
    ):
        session.acquire()
    assert '-224,"Illegal parameter value' in caught.value.says
