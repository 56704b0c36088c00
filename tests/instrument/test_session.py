"""Sessions: reconnection with growing pauses, schedules, giving up, and a run full of faults."""

from __future__ import annotations

import gc
import threading
import time
import tracemalloc
from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime

import pytest

from benchfit.errors import InstrumentError
from benchfit.instrument import SCPI_1999, Acquisition, Dialect, Session, iso
from benchfit.instrument.faults import KINDS
from tools.loopback import KINDS as MISBEHAVIOURS
from tools.loopback import LoopbackScope, Misbehaviour, PatternSource

Serve = Callable[..., LoopbackScope]
QUICK = (0.0, 0.02, 0.05, 0.1)

# What a misbehaviour may be called; "" where the acquisition can succeed all the same.
NAMES = {
    "late": {"timeout", "short-block"},
    "silent": {"timeout"},
    "cut": {"short-block", "timeout"},
    "short": {"short-block", "wrong-length", "timeout"},
    "long": {"wrong-length"},
    "garbage": {"unreadable", "timeout"},
    "closing": {"disconnected"},
    "refusing": {"disconnected", "refused"},
    "slow": {"timeout", "short-block", ""},
    "error": {"instrument-error"},
    "left-over": {"unreadable", "wrong-length", "timeout", ""},
}


def fault_run(
    serve: Serve, dialect: Dialect, count: int, rate: float, seed: int, timeout: float = 0.15
) -> tuple[list[Acquisition], LoopbackScope, Session, float]:
    """``count`` acquisitions with every misbehaviour at ``rate``; the longest gap between two of them (s)."""
    scope = serve(
        PatternSource(samples=400),
        rates=dict.fromkeys(MISBEHAVIOURS, rate),
        misbehave={"seed": seed, "late_by": 1.7 * timeout, "refuse_for": 0.05, "trickle": 30.0},
    )
    session = Session(scope.resource, ["CH1", "CH2"], dialect=replace(dialect, timeout=timeout), pauses=QUICK)
    done, longest, last = [], 0.0, time.monotonic()
    for acquisition in session.acquisitions(count=count):
        now = time.monotonic()
        longest, last = max(longest, now - last), now
        done.append(acquisition)
        if acquisition.capture is not None:
            # The instrument has taken no other record since: what came must be of its last one.
            source = scope.instrument.source
            assert isinstance(source, PatternSource)
            for channel in acquisition.capture.channels:
                number = source.number_in(channel.values, channel.name)
                assert number == scope.instrument.number % 256, "a value from another acquisition"
            assert acquisition.capture.interval == source.interval
    return done, scope, session, longest


def check_fault_run(done: list[Acquisition], scope: LoopbackScope, session: Session) -> None:
    committed = scope.instrument.misbehaviour.committed
    failed = [acquisition for acquisition in done if acquisition.error is not None]
    kinds = Counter(str(acquisition.error.facts["kind"]) for acquisition in failed if acquisition.error)
    assert kinds == session.faults
    assert set(kinds) <= set(KINDS)
    # Every fault is named, by a name that fits one that was committed; no fault is named that was not.
    possible = Counter(name for _, kind in committed for name in NAMES[kind])
    # While it refuses, each new attempt fails too.
    again = 8 * sum(1 for _, kind in committed if kind == "refusing")
    for kind, times in kinds.items():
        extra = again if kind in ("refused", "disconnected") else 0
        assert times <= possible[kind] + extra, (kind, kinds, Counter(kind for _, kind in committed))
    must_fail = sum(1 for _, kind in committed if "" not in NAMES[kind])
    assert must_fail <= len(failed)
    for acquisition in failed:
        assert acquisition.error is not None
        assert "\n" not in acquisition.error.says
        assert scope.resource in acquisition.error.says


@pytest.mark.parametrize("language", ["SCPI-1999", "named fields"])
def test_a_short_run_with_every_fault(serve: Serve, named_fields: Dialect, language: str) -> None:
    dialect = SCPI_1999 if language == "SCPI-1999" else named_fields
    done, scope, session, longest = fault_run(serve, dialect, count=50, rate=0.05, seed=7)
    assert len(done) == 50
    check_fault_run(done, scope, session)
    assert sum(1 for acquisition in done if acquisition.capture is not None) >= 15
    assert longest < 4 * 0.15 + 1.0


@pytest.mark.long
@pytest.mark.timeout(900)
@pytest.mark.parametrize("language", ["SCPI-1999", "named fields"])
def test_a_thousand_acquisitions_with_every_fault_at_five_percent(
    serve: Serve, named_fields: Dialect, language: str
) -> None:
    dialect = SCPI_1999 if language == "SCPI-1999" else named_fields
    done, scope, session, longest = fault_run(serve, dialect, count=1000, rate=0.05, seed=11)
    assert len(done) == 1000
    check_fault_run(done, scope, session)
    committed = Counter(kind for _, kind in scope.instrument.misbehaviour.committed)
    assert set(committed) == set(MISBEHAVIOURS), "every kind of fault must have occurred"
    assert min(committed.values()) >= 20
    assert longest < 4 * 0.15 + 2.0
    print(f"\n{language}: committed {dict(committed)}; named {dict(session.faults)}; longest {longest:.2f} s")


@pytest.mark.parametrize("kind", sorted(MISBEHAVIOURS))
def test_each_fault_has_its_name(serve: Serve, named_fields: Dialect, kind: str) -> None:
    for dialect in (SCPI_1999, named_fields):
        scope = serve(
            PatternSource(samples=400),
            rates={kind: 1.0},
            misbehave={"late_by": 0.3, "refuse_for": 0.05, "trickle": 20.0},
        )
        session = Session(scope.resource, ["CH1"], dialect=replace(dialect, timeout=0.15), pauses=(0.0,))
        with session:
            session.connect()
            try:
                session.acquire()
                found = ""
            except InstrumentError as error:
                found = str(error.facts["kind"])
        assert found in NAMES[kind]


def test_killed_and_restarted_it_goes_on_by_itself(serve: Serve) -> None:
    scope = serve()
    session = Session(scope.resource, ["CH1"], pauses=QUICK)
    stop = threading.Event()
    states = []
    for acquisition in session.acquisitions(stop=stop, count=200):
        states.append(acquisition.error is None)
        if len(states) == 3:
            scope.stop()
        if states[3:].count(False) == 4 and not scope.connections > 1:
            scope.start()
        if states[-1] and False in states:
            break
        time.sleep(0.001)
    assert states[:3] == [True] * 3
    assert states[-1], "it must go on once the instrument is back"
    assert session.connections == 2
    assert set(session.faults) <= {"disconnected", "refused"}


def test_pauses_grow_and_start_anew(serve: Serve) -> None:
    scope = serve()
    session = Session(scope.resource, ["CH1"], pauses=(0.0, 0.1, 0.4))
    session.acquire()
    assert session.pause == 0.0
    scope.stop()
    pauses = []
    for _ in range(5):
        with pytest.raises(InstrumentError):
            session.acquire()
        pauses.append(session.pause)
    assert pauses == [0.0, 0.1, 0.4, 0.4, 0.4]
    scope.start()
    session.acquire()
    scope.stop()
    with pytest.raises(InstrumentError):
        session.acquire()
    assert session.pause == 0.0
    session.close()


def test_the_first_connection_must_succeed() -> None:
    session = Session("TCPIP::127.0.0.1::9::SOCKET", ["CH1"], dialect=replace(SCPI_1999, timeout=0.3))
    with pytest.raises(InstrumentError) as caught:
        next(session.acquisitions(count=3))
    assert caught.value.status == 4


def test_it_gives_up_without_a_capture(serve: Serve) -> None:
    scope = serve()
    session = Session(scope.resource, ["CH1"], pauses=(0.0, 0.05))
    done = []
    with pytest.raises(InstrumentError) as caught:
        for acquisition in session.acquisitions(give_up=0.4):
            done.append((time.monotonic(), acquisition.error))
            if len(done) == 2:
                scope.stop()
    assert caught.value.facts["kind"] == "gave-up"
    assert "0.4 s" in caught.value.says
    assert done[0][1] is None
    assert done[-1][0] - done[1][0] <= 0.5


def test_a_schedule_is_kept(serve: Serve) -> None:
    scope = serve()
    with Session(scope.resource, ["CH1"]) as session:
        began = time.monotonic()
        starts = []
        for _ in session.acquisitions(every=0.1, count=5):
            starts.append(time.monotonic() - began)
            time.sleep(0.02)
    assert starts[-1] == pytest.approx(0.4, abs=0.09)


def test_counting_includes_the_failed_ones(serve: Serve) -> None:
    scope = serve(rates={"error": 1.0})
    session = Session(scope.resource, ["CH1"], pauses=(0.0,))
    done = list(session.acquisitions(count=4))
    assert [acquisition.number for acquisition in done] == [1, 2, 3, 4]
    assert all(acquisition.error is not None and "-222" in acquisition.error.says for acquisition in done)
    assert session.faults == {"instrument-error": 4}


def test_stopping_ends_a_pause(serve: Serve) -> None:
    scope = serve()
    stop = threading.Event()
    session = Session(scope.resource, ["CH1"])
    began = time.monotonic()
    threading.Timer(0.2, stop.set).start()
    for _ in session.acquisitions(every=30.0, stop=stop):
        pass
    assert time.monotonic() - began < 5.0
    assert not session.is_connected


def test_acquired_is_when_it_was_complete(serve: Serve) -> None:
    scope = serve(duration=0.2)
    with Session(scope.resource, ["CH1"]) as session:
        session.connect()
        before = datetime.now(UTC)
        acquisition = session.acquire()
        after = datetime.now(UTC)
    assert (acquisition.acquired - before).total_seconds() > 0.19
    assert acquisition.acquired <= after
    assert acquisition.stamp == iso(acquisition.acquired)
    assert datetime.fromisoformat(acquisition.stamp).tzinfo is not None
    assert acquisition.stamp.endswith("Z")


@pytest.mark.long
@pytest.mark.timeout(900)
def test_memory_stays_flat_over_ten_thousand_acquisitions(serve: Serve, named_fields: Dialect) -> None:
    scope = serve(PatternSource(samples=1000), misbehaviour=Misbehaviour({"error": 0.01, "closing": 0.01}))
    session = Session(scope.resource, ["CH1", "CH2"], dialect=named_fields, pauses=(0.0,))
    sizes = []
    tracemalloc.start()
    try:
        for acquisition in session.acquisitions(count=10_000):
            if acquisition.number in (1000, 10_000):
                scope.instrument.misbehaviour.committed.clear()
                gc.collect()
                sizes.append(tracemalloc.get_traced_memory()[0])
    finally:
        tracemalloc.stop()
    # A process of 50 MB may grow by 5 %; this is a twentieth of that, 11 bytes an acquisition (Python keeps
    # some attribute names that the bus library makes up for each connection, up to a limit).
    assert sizes[1] - sizes[0] < 100_000, sizes
