"""Over HiSLIP, a bus whose messages have an END: the same values, and blocks with or without a line end."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest

from benchfit.errors import InstrumentError
from benchfit.instrument import SCPI_1999, Dialect, Session
from benchfit.instrument.link import Link
from tests.instrument.hislip_bench import HislipBench
from tools.loopback import Misbehaviour, PatternSource
from tools.loopback.language import Instrument


@pytest.fixture(params=[b"\n", b""], ids=["line end", "no line end"])
def bench(request: pytest.FixtureRequest) -> Iterator[HislipBench]:
    running = HislipBench(Instrument(PatternSource(samples=5000), Misbehaviour()), end=request.param)
    yield running
    running.stop()


@pytest.mark.parametrize("block", ["DEF", "IND"])
def test_values_in_the_dialect(bench: HislipBench, named_fields: Dialect, block: str) -> None:
    dialect = replace(named_fields, once=("*CLS", "REC:FORM U8", f"REC:BLOC {block}"))
    with Session(bench.resource, ["CH1", "CH2"], dialect=dialect) as session:
        for _ in range(3):
            capture = session.acquire().capture
            assert capture is not None
            for channel in capture.channels:
                assert np.array_equal(channel.values, bench.instrument.record[channel.name].volts)


def test_values_in_scpi_1999(bench: HislipBench) -> None:
    with Session(bench.resource, ["CH1", "CH2"]) as session:
        capture = session.acquire().capture
        assert capture is not None
        for channel in capture.channels:
            np.testing.assert_allclose(
                channel.values, bench.instrument.record[channel.name].volts, rtol=2e-7, atol=0
            )


def test_numbers_as_text(bench: HislipBench) -> None:
    with Session(
        bench.resource, ["CH1"], dialect=replace(SCPI_1999, once=("FORM ASC",), encoding="ascii")
    ) as session:
        capture = session.acquire().capture
        assert capture is not None
        np.testing.assert_allclose(
            capture.channels[0].values, bench.instrument.record["CH1"].volts, rtol=1e-8, atol=0
        )


@pytest.mark.parametrize(
    ("spoil", "kind"),
    [
        (lambda reply: reply[:-9] if reply[:1] == b"#" else reply, "short-block"),
        (lambda reply: reply + b"1234" if reply[:1] == b"#" else reply, "wrong-length"),
        (lambda reply: reply[:3] if reply[:1] == b"#" else reply, "short-block"),
        (lambda reply: b"what" if reply[:1] == b"#" else reply, "unreadable"),
    ],
    ids=["short", "long", "header only", "text"],
)
def test_spoilt_blocks_are_named(bench: HislipBench, named_fields: Dialect, spoil, kind: str) -> None:
    bench.spoil = spoil
    with (
        Session(bench.resource, ["CH1"], dialect=named_fields) as session,
        pytest.raises(InstrumentError) as caught,
    ):
        session.acquire()
    assert caught.value.facts["kind"] == kind


def test_a_closed_connection_is_named(bench: HislipBench) -> None:
    link = Link(bench.resource, timeout=0.5)
    assert link.query("*OPC?") == "1"
    bench.stop()
    with pytest.raises(InstrumentError) as caught:
        link.query("*OPC?")
    assert caught.value.facts["kind"] in ("disconnected", "timeout")
    link.close()
