"""What a bus layer does behind one's back, each trap with a test.

The traps were measured on pyvisa 1.16.2 with pyvisa-py 0.8.1; a test that shows the trap itself says so.
"""

from __future__ import annotations

import logging
import socket
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import replace

import pytest

from benchfit.errors import InstrumentError
from benchfit.instrument import SCPI_1999, Dialect, Session, list_resources
from benchfit.instrument.link import Link
from tools.loopback import LoopbackScope, PatternSource

Serve = Callable[..., LoopbackScope]
Answer = Callable[[socket.socket, bytes], None]


@pytest.fixture
def peer() -> Iterator[Callable[[Answer], str]]:
    """A peer that answers each line as the test says; gives its resource string."""
    open_sockets: list[socket.socket] = []

    def start(answer: Answer) -> str:
        listener = socket.socket()
        listener.bind(("127.0.0.1", 0))
        listener.listen()
        open_sockets.append(listener)

        def serve() -> None:
            while True:
                try:
                    connection, _ = listener.accept()
                except OSError:
                    return
                open_sockets.append(connection)
                threading.Thread(target=talk, args=(connection,), daemon=True).start()

        def talk(connection: socket.socket) -> None:
            waiting = b""
            try:
                while data := connection.recv(4096):
                    waiting += data
                    while b"\n" in waiting:
                        line, waiting = waiting.split(b"\n", 1)
                        answer(connection, line)
            except OSError:
                pass

        threading.Thread(target=serve, daemon=True).start()
        return f"TCPIP::127.0.0.1::{listener.getsockname()[1]}::SOCKET"

    yield start
    for each in open_sockets:
        each.close()


def kind_of(error: pytest.ExceptionInfo[InstrumentError]) -> object:
    assert error.value.status == 4
    assert "\n" not in error.value.says
    return error.value.facts["kind"]


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def test_a_socket_has_line_ends_without_being_told(serve: Serve) -> None:
    """Unset, pyvisa's read waits its whole time-out for a line end."""
    scope = serve()
    began = time.monotonic()
    with Link(scope.resource, timeout=5.0) as link:
        assert link.query("*IDN?").startswith("Benchfit")
    assert time.monotonic() - began < 2.0


def test_a_data_byte_like_a_line_end_does_not_end_a_block(serve: Serve) -> None:
    scope = serve(PatternSource(samples=5000))
    with Link(scope.resource) as link:
        link.write("RUN:ONE")
        assert link.query("*OPC?") == "1"
        data = link.query_data("REC:DATA?")
    assert data.count(b"\n") > 10
    assert data == scope.instrument.record["CH1"].codes.tobytes()


def test_no_line_end_is_left_over_after_a_block(serve: Serve) -> None:
    """With pyvisa's expect_termination=False the next query returns an empty string."""
    scope = serve(reply_end=b"\r\n")
    for end in ("\n", "\r\n"):
        with Link(scope.resource, read_termination=end) as link:
            link.write("RUN:ONE")
            for _ in range(3):
                link.query_data("REC:DATA?")
                assert link.query("*OPC?") == "1"


def test_a_line_end_too_many_is_not_taken_for_an_answer(peer: Callable[[Answer], str]) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        replies = {
            b"*IDN?": b"x", b"SYST:ERR?": b'0,"No error"', b"*OPC?": b"1\n", b"SENS:SWE:TINT?": b"1e-6",
            b"SENS:SWE:OFFS:TIME?": b"0", b"TRAC? CH1": b"#14" + bytes(4),
        }  # fmt: skip
        if line in replies:
            connection.sendall(replies[line] + b"\n")

    resource = peer(answer)
    session = Session(resource, ["CH1"], dialect=replace(SCPI_1999, timeout=0.3))
    with session, pytest.raises(InstrumentError) as caught:
        session.acquire()
    assert kind_of(caught) == "unreadable"
    assert "x_increment" in caught.value.says


def test_a_truncated_block_is_named_with_what_came(serve: Serve) -> None:
    """pyvisa reports a bare time-out and loses the bytes."""
    scope = serve(PatternSource(samples=10_000), rates={"cut": 1.0})
    with Link(scope.resource, timeout=0.3) as link:
        link.write("RUN:ONE")
        with pytest.raises(InstrumentError) as caught:
            link.query_data("REC:DATA?")
    assert kind_of(caught) == "short-block"
    assert (
        "10,000 bytes stopped after 4,996" in caught.value.says or "stopped after 4,99" in caught.value.says
    )
    assert '"REC:DATA?"' in caught.value.says


def test_a_late_reply_never_answers_a_later_question(peer: Callable[[Answer], str]) -> None:
    """pyvisa returns the old reply as the new one."""
    asked = []

    def answer(connection: socket.socket, line: bytes) -> None:
        asked.append(line)
        if asked.count(line) == 1 and line == b"SENS:SWE:TINT?":
            time.sleep(0.5)
            connection.sendall(b"0.125\n")
            return
        replies = {
            b"*IDN?": b"x", b"SYST:ERR?": b'0,"No error"', b"*OPC?": b"1", b"SENS:SWE:TINT?": b"1e-6",
            b"SENS:SWE:OFFS:TIME?": b"0", b"TRAC? CH1": b"#14" + bytes(4),
        }  # fmt: skip
        if line in replies:
            connection.sendall(replies[line] + b"\n")

    session = Session(peer(answer), ["CH1"], dialect=replace(SCPI_1999, timeout=0.3))
    with session:
        with pytest.raises(InstrumentError) as caught:
            session.acquire()
        assert kind_of(caught) == "timeout"
        time.sleep(0.4)
        capture = session.acquire().capture
        assert capture is not None
        assert capture.interval == 1e-6
        assert session.connections == 2
        assert session.faults == {"timeout": 1}


def test_the_trap_of_the_late_reply_is_still_there(peer: Callable[[Answer], str]) -> None:
    """The trap itself, in bare pyvisa: if this fails, the bus layer has changed."""
    import pyvisa

    def answer(connection: socket.socket, line: bytes) -> None:
        if line == b"OLD?":
            time.sleep(0.3)
        connection.sendall(line + b" answered\n")

    visa = pyvisa.ResourceManager("@py").open_resource(peer(answer), open_timeout=1000)
    visa.read_termination = visa.write_termination = "\n"  # type: ignore[attr-defined]
    visa.timeout = 100
    with pytest.raises(pyvisa.errors.VisaIOError):
        visa.query("OLD?")  # type: ignore[attr-defined]
    time.sleep(0.4)
    assert visa.query("NEW?") == "OLD? answered"  # type: ignore[attr-defined]
    visa.close()


def test_a_peer_that_closes_is_noticed_at_once(serve: Serve) -> None:
    """pyvisa-py spins through the whole time-out, and again, and then raises a bare BrokenPipeError."""
    scope = serve(rates={"closing": 1.0})
    began = time.monotonic()
    with Link(scope.resource, timeout=20.0) as link:
        link.write("RUN:ONE")
        with pytest.raises(InstrumentError) as caught:
            for _ in range(5):
                link.query("*OPC?")
    assert kind_of(caught) == "disconnected"
    assert time.monotonic() - began < 3.0


def test_a_broken_pipe_is_one_of_our_errors(serve: Serve) -> None:
    scope = serve()
    link = Link(scope.resource, timeout=0.3)
    assert link.query("*OPC?") == "1"
    scope.stop()
    for _ in range(3):
        with pytest.raises(InstrumentError) as caught:
            link.query("*OPC?")
        assert kind_of(caught) == "disconnected"
    link.close()
    link.close()


def test_opening_proves_nothing() -> None:
    """A SOCKET opens without an error although nobody listens; connected means that *IDN? was answered."""
    resource = f"TCPIP::127.0.0.1::{free_port()}::SOCKET"
    link = Link(resource, timeout=0.5)
    link.close()
    session = Session(resource, ["CH1"])
    with pytest.raises(InstrumentError) as caught:
        session.connect()
    assert kind_of(caught) == "refused"
    assert not session.is_connected


@pytest.mark.parametrize(
    ("resource", "kind", "says"),
    [
        ("nonsense", "resource-name", "TCPIP::192.0.2.7::5025::SOCKET"),
        ("TCPIP::127.0.0.1::x::SOCKET", "resource-name", "VISA resource string"),
        ("TCPIP::no.such.host.invalid::5025::SOCKET", "unreachable", "cannot be opened"),
    ],
)
def test_what_cannot_be_opened_is_told_apart(resource: str, kind: str, says: str) -> None:
    with pytest.raises(InstrumentError) as caught:
        Link(resource, timeout=0.5)
    assert kind_of(caught) == kind
    assert says in caught.value.says
    assert caught.value.says.startswith(resource)


@pytest.mark.parametrize(
    ("resource", "module"), [("USB0::1::2::3::INSTR", "usb"), ("ASRL/dev/ttyS9::INSTR", "serial")]
)
def test_a_missing_driver_is_named(resource: str, module: str) -> None:
    """pyvisa-py raises ValueError with an install hint; with the driver there, the instrument is missing."""
    import importlib.util

    with pytest.raises(InstrumentError) as caught:
        Link(resource, timeout=0.5)
    if importlib.util.find_spec(module) is None:
        assert kind_of(caught) == "no-driver"
        assert "benchfit[wires]" in caught.value.says
    else:
        assert kind_of(caught) in ("unreachable", "disconnected")


@pytest.mark.parametrize("library", ["@nobody", "/no/such/libvisa.so"])
def test_a_missing_library_is_named(library: str) -> None:
    with pytest.raises(InstrumentError) as caught:
        Link("TCPIP::127.0.0.1::5025::SOCKET", library=library)
    assert kind_of(caught) == "no-library"
    assert "--visa-library" in caught.value.says


def test_a_setting_is_restored_after_an_error_in_a_block(serve: Serve) -> None:
    """pyvisa's own helper does not restore the read line end when the body raises."""
    scope = serve(PatternSource(samples=3000), rates={"cut": 1.0})
    with Link(scope.resource, timeout=0.3) as link:
        link.write("RUN:ONE")
        with pytest.raises(InstrumentError):
            link.query_data("REC:DATA?")
        began = time.monotonic()
        assert link.query("SYST:ERR?") == '0,"No error"'
        assert time.monotonic() - began < 0.25, "the line end no longer ends a read"


@pytest.mark.parametrize("timeout", [0.0, -1.0, float("inf"), float("nan")])
def test_a_time_out_is_a_time(timeout: float) -> None:
    """pyvisa takes milliseconds; below 1 means at once, None for ever."""
    with pytest.raises(InstrumentError, match="above 0"):
        Link("TCPIP::127.0.0.1::5025::SOCKET", timeout=timeout)


def test_an_answer_that_trickles_in_ends_with_the_time_out(serve: Serve) -> None:
    """pyvisa-py looks at its clock only while nothing arrives: a trickle would hold it for ever."""
    scope = serve(PatternSource(samples=4000), rates={"slow": 1.0}, misbehave={"trickle": 40.0})
    for question in ("REC:DATA?", "REC:HEAD?"):
        with Link(scope.resource, timeout=0.4) as link:
            link.write("RUN:ONE")
            began = time.monotonic()
            with pytest.raises(InstrumentError) as caught:
                for _ in range(5):
                    (link.query_data if "DATA" in question else link.query)(question)
        assert kind_of(caught) in ("timeout", "short-block")
        assert time.monotonic() - began < 2.0


def test_a_slow_block_that_advances_is_waited_for(peer: Callable[[Answer], str]) -> None:
    """A time-out is for silence; a long block over a slow line may take many of them."""

    def answer(connection: socket.socket, line: bytes) -> None:
        connection.sendall(b"#540000")
        for _ in range(8):
            time.sleep(0.1)
            connection.sendall(bytes(5000))
        connection.sendall(b"\n")

    with Link(peer(answer), timeout=0.4) as link:
        assert len(link.query_data("D?")) == 40_000


def test_babble_without_a_line_end_is_cut_off(peer: Callable[[Answer], str]) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        for _ in range(200):
            connection.sendall(b"x" * 4096)

    with Link(peer(answer), timeout=5.0) as link, pytest.raises(InstrumentError) as caught:
        link.query("*IDN?")
    assert kind_of(caught) == "unreadable"


def test_the_time_out_says_what_may_be_wrong(serve: Serve) -> None:
    scope = serve(reply_end=b"\r")
    with Link(scope.resource, timeout=0.3) as link, pytest.raises(InstrumentError) as caught:
        link.query("*IDN?")
    assert kind_of(caught) == "timeout"
    for part in ('"*IDN?"', "0.3 s", "LF out and LF in", "read_termination", "\\x0d"):
        assert part in caught.value.says


def test_closing_one_session_leaves_the_others(serve: Serve) -> None:
    """The manager is shared: closing it would close every session."""
    scope = serve()
    with Session(scope.resource, ["CH1"]) as kept:
        kept.acquire()
        with Session(scope.resource, ["CH1"]) as other:
            other.acquire()
        assert kept.acquire().capture is not None
        assert kept.connections == 1


def test_commands_do_not_wait_for_acknowledgements(serve: Serve, named_fields: Dialect) -> None:
    """Two small segments in a row cost 40 ms where the socket delays; pyvisa-py cannot switch it off."""
    scope = serve()
    with Session(scope.resource, ["CH1", "CH2"], dialect=named_fields) as session:
        session.acquire()
        began = time.monotonic()
        for _ in range(50):
            session.acquire()
        assert time.monotonic() - began < 50 * 0.04


def test_a_refused_command_is_told_with_the_time_out(serve: Serve, named_fields: Dialect) -> None:
    """Most time-outs are commands that the instrument does not know: its error queue says so."""
    dialect = replace(named_fields, preamble="REC:HEDA?", timeout=0.3)
    scope = serve()
    with (
        Session(scope.resource, ["CH1"], dialect=dialect) as session,
        pytest.raises(InstrumentError) as caught,
    ):
        session.acquire()
    assert kind_of(caught) == "timeout"
    assert '-113,"Undefined header;REC:HEDA?"' in caught.value.says


def test_a_refused_setting_is_told_on_connecting(serve: Serve, named_fields: Dialect) -> None:
    dialect = replace(named_fields, once=("*CLS", "REC:FORM U7"))
    scope = serve()
    with pytest.raises(InstrumentError) as caught:
        Session(scope.resource, ["CH1"], dialect=dialect).connect()
    assert kind_of(caught) == "instrument-error"
    assert "-224" in caught.value.says
    assert "setup.once" in caught.value.says


def test_an_error_from_before_is_not_ours(serve: Serve) -> None:
    scope = serve()
    scope.instrument.errors.append('-350,"Queue overflow"')
    with Session(scope.resource, ["CH1"]) as session:
        assert session.acquire().capture is not None


def test_an_acquisition_that_never_completes(peer: Callable[[Answer], str]) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        replies = {b"*IDN?": b"x", b"SYST:ERR?": b'+0,"No error"', b"DONE?": b"0"}
        if line in replies:
            connection.sendall(replies[line] + b"\n")

    dialect = Dialect(name="slow", data="D?", each=("GO",), wait="DONE?", timeout=0.3)
    session = Session(peer(answer), ["CH1"], dialect=dialect)
    with session, pytest.raises(InstrumentError) as caught:
        session.acquire()
    assert kind_of(caught) == "timeout"
    assert "trigger" in caught.value.says


def test_channels_on_different_axes_are_refused(peer: Callable[[Answer], str]) -> None:
    def answer(connection: socket.socket, line: bytes) -> None:
        name = line.decode()
        if name.startswith("X?"):
            connection.sendall(b"1e-6\n" if name.endswith("CH1") else b"2e-6\n")
        elif name.startswith("D?"):
            connection.sendall(b"#14" + bytes(4) + b"\n")
        elif name == "SYST:ERR?":
            connection.sendall(b'0,"No error"\n')
        else:
            connection.sendall(b"x\n")

    dialect = Dialect(
        name="two clocks", data="D? {channel}", encoding="int8", queries={"x_increment": "X? {channel}"}
    )
    session = Session(peer(answer), ["CH1", "CH2"], dialect=dialect)
    with session, pytest.raises(InstrumentError) as caught:
        session.acquire()
    assert kind_of(caught) == "axes"
    assert "CH1 and CH2" in caught.value.says


def test_another_instrument_in_its_place_is_noticed(peer: Callable[[Answer], str]) -> None:
    names = iter([b"ONE", b"OTHER", b"ONE"])

    def answer(connection: socket.socket, line: bytes) -> None:
        replies = {b"SYST:ERR?": b'0,"No error"'}
        if line == b"*IDN?":
            connection.sendall(next(names) + b"\n")
        elif line in replies:
            connection.sendall(replies[line] + b"\n")
        elif line == b"D?":
            connection.sendall(b"#0\n")

    session = Session(
        peer(answer), ["CH1"], dialect=Dialect(name="d", data="D?", encoding="int8", timeout=0.4)
    )
    with session:
        session.connect()
        with pytest.raises(InstrumentError):
            session.acquire()
        with pytest.raises(InstrumentError) as caught:
            session.acquire()
        assert kind_of(caught) == "identity"
        assert "'OTHER'" in caught.value.says


def test_an_empty_list_says_why(recwarn: pytest.WarningsRecorder) -> None:
    found, reasons = list_resources()
    assert isinstance(found, tuple)
    import importlib.util

    if importlib.util.find_spec("usb") is None:
        assert any(reason.startswith("USB INSTR: Please install PyUSB") for reason in reasons)
    assert not recwarn.list, "the bus layer's warnings stay inside"


def test_traffic_is_logged_without_the_data(serve: Serve, caplog: pytest.LogCaptureFixture) -> None:
    scope = serve(PatternSource(samples=50_000))
    level = caplog.at_level(logging.DEBUG, "benchfit.instrument.traffic")
    with level, Session(scope.resource, ["CH1"]) as session:
        session.acquire()
    lines = [record.getMessage() for record in caplog.records]
    assert any("<- TRAC? CH1" in line for line in lines)
    assert any("-> 200000 bytes of data" in line for line in lines)
    assert max(map(len, lines)) < 200
