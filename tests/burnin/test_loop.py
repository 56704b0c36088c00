"""The burn-in itself, with sources, clocks and explanations that the tests make up."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Iterator
from datetime import UTC, datetime
from types import SimpleNamespace

import pytest

from benchfit.burnin import loop
from benchfit.burnin.alarms import Limit, Raised
from benchfit.burnin.clock import now
from benchfit.burnin.loop import Burnin, Plan
from benchfit.burnin.reader import LogReader
from benchfit.burnin.source import Arrival, FolderSource, InstrumentSource
from benchfit.errors import CaptureError, InstrumentError, UsageError

from .conftest import capture, record

TWO = Limit("frequency", -0.02, 0.02, True, "2 %")


class Script:
    """A source that gives what it was told to: frequencies, or errors."""

    name = "script"
    is_paced = True
    pause = 0.0

    def __init__(self, rows):
        self.rows = iter(rows)

    def open(self):
        """Nothing to do."""

    def close(self):
        """Nothing to do."""

    def arrivals(self) -> Iterator[Arrival]:
        """The next one."""
        row = next(self.rows)
        at = now()
        if isinstance(row, Exception):
            yield Arrival(at.wall, "script", error=row, steady=at.steady)
        else:
            yield Arrival(at.wall, "script", SimpleNamespace(frequency=row), steady=at.steady)


def explain(given):
    """The record of a scripted capture; a string is an error that the explanation makes."""
    if isinstance(given.frequency, str):
        raise ValueError(given.frequency)
    return record(given.frequency)


def run(log, rows, plan, **more):
    """Run a script; why it ended, what was logged, what was said."""
    logged, said = [], []
    sources = more.pop("sources", None) or {"": Script(rows)}
    burnin = Burnin(plan, sources, log, more.pop("explain", explain), logged.append, said.append, **more)
    return burnin.run(), logged, said


def test_a_count_counts_failed_records_too(log_at):
    """Failures are records with their error and status; the run goes on."""
    rows = [12.0, InstrumentError("no reply"), "division by zero", 12.1]
    why, logged, _ = run(log_at(), rows, Plan(0.0, count=4, keep="none"))
    assert why == "completed"
    assert [entry.seq for entry in logged] == [1, 2, 3, 4]
    assert logged[1].record["error"] == {"status": 4, "says": "no reply"}
    assert "division by zero" in logged[2].record["error"]["says"]
    assert logged[2].record["error"]["status"] == 3
    assert logged[3].record["measured"]["frequency"]["value"] == 12.1


def test_a_record_is_shown_only_when_it_is_on_the_disk(log_at):
    """Another connection sees every record that was shown, at the moment it is shown."""
    log = log_at()
    seen = []

    def shown(logged):
        with LogReader.open(log.path) as reader:
            seen.append((logged.seq, reader.run().records, next(reader.records(logged.seq)) == logged.record))

    Burnin(Plan(0.0, count=5), {"": Script([1.0] * 5)}, log, explain, shown, print).run()
    assert seen == [(i, i, True) for i in range(1, 6)]


def test_it_ends_by_the_clock(log_at):
    """--for: the slots before the end are taken, none after it."""
    why, logged, _ = run(log_at(), [12.0] * 100, Plan(0.05, time=0.26, keep="none"))
    assert why == "completed"
    assert 4 <= len(logged) <= 6


def test_it_is_stopped(log_at):
    """The record in hand is finished, then it ends."""
    stop = threading.Event()
    logged = []

    def shown(entry):
        logged.append(entry.seq)
        if entry.seq == 3:
            stop.set()

    script = {"": Script([12.0] * 100)}
    why = Burnin(Plan(0.01, keep="none"), script, log_at(), explain, shown, print, stop=stop).run()
    assert (why, logged) == ("stopped", [1, 2, 3])
    before = time.monotonic()
    why, _, _ = run(log_at("b.db"), [12.0], Plan(3600.0, keep="none"), stop=stop)
    assert time.monotonic() - before < 1.0, "a stop cuts a wait short"


def test_alarms_and_what_is_kept(log_at):
    """The raw captures of an alarm are kept, and of what could not be explained; an alarm can end it."""
    real = capture()

    class Real(Script):
        def arrivals(self):
            at = now()
            self.row = next(self.rows)
            yield Arrival(at.wall, "x", real, steady=at.steady)

    source = Real([10.0, 10.0, 10.5, 10.5, CaptureError("unreadable"), 10.0, 10.0, 10.0, 10.0])

    def answer(_):
        if isinstance(source.row, Exception):
            raise source.row
        return record(source.row)

    log = log_at()
    why, logged, _ = run(log, [], Plan(0.0, count=9, limits=(TWO,)), sources={"": source}, explain=answer)
    assert [type(a).__name__ for entry in logged for a in entry.alarms] == ["Raised", "Cleared"]
    assert (logged[2].alarms[0].value, logged[7].alarms[0].quantity) == (10.5, "frequency")
    with LogReader.open(log.path) as reader:
        kept = [seq for seq in range(1, 10) if _has_raw(reader, seq)]
        (alarm,) = reader.alarms()
    assert kept == [3, 4, 5, 6, 7, 8]
    assert (alarm.seq, alarm.cleared, alarm.value, alarm.high) == (3, 8, 10.5, pytest.approx(10.2))
    why, logged, _ = run(log_at("b.db"), [10.0, 11.0, 10.0], Plan(0.0, limits=(TWO,), is_stopping=True, keep="none"))
    assert (why, len(logged)) == ("alarm", 2)
    assert isinstance(logged[1].alarms[0], Raised)


def _has_raw(reader, seq):
    try:
        reader.capture(seq)
    except Exception:
        return False
    return True


def test_the_first_record_and_a_standing_alarm_outlive_a_restart(log_at):
    """A relative limit is relative to the run's first record, whoever wrote it."""
    log = log_at()
    run(log, [10.0, 10.5, 10.5], Plan(0.0, count=3, limits=(TWO,), keep="none"))
    log.close("stopped")
    log = log_at()
    _, logged, _ = run(log, [10.5] * 5, Plan(0.0, count=5, limits=(TWO,), keep="none"))
    assert not [a for entry in logged for a in entry.alarms], "the alarm stands; it is not raised again"
    with LogReader.open(log.path) as reader:
        assert [(g.after_seq, g.why) for g in reader.gaps()] == [(3, "stopped")]
        assert len(reader.alarms()) == 1


def test_giving_up(log_at):
    """No capture for so long ends it with the instrument's status; failures until then are records."""
    rows = [12.0] + [InstrumentError("no reply")] * 10**6
    log = log_at()
    with pytest.raises(InstrumentError, match="--give-up"):
        run(log, rows, Plan(0.01, give_up=0.2, keep="none"))
    with LogReader.open(log.path) as reader:
        series = reader.series("")
    assert (series.status != 0).sum() > 3


def test_late_acquisitions_are_said_once(log_at):
    """Skipped slots are counted, not made up for."""

    class Slow(Script):
        def arrivals(self):
            time.sleep(0.03)
            yield from super().arrivals()

    why, logged, said = run(log_at(), [], Plan(0.02, count=5, keep="none"), sources={"": Slow([1.0] * 5)})
    assert why == "completed"
    assert sum("slots are skipped" in text for text in said) == 1
    assert all(entry.skipped for entry in logged[1:])


def test_a_set_clock_and_a_changed_sheet_are_noticed(log_at, monkeypatch):
    """Both become events of the log, and are said once."""
    clocks = iter(range(10**6))
    real = loop.now

    def skewed():
        at = real()
        return type(at)(at.wall + (3600.0 if next(clocks) > 3 else 0.0), at.steady)

    monkeypatch.setattr(loop, "now", skewed)
    log = log_at()
    _, _, said = run(log, [12.0] * 8, Plan(0.0, count=8, keep="none"), changed=lambda: "the sheet was changed")
    with LogReader.open(log.path) as reader:
        events = {event.code: event for event in reader.events()}
    assert events["clock-step"].size == pytest.approx(3600, abs=5)
    assert "sheet-changed" in events
    assert said.count("the sheet was changed") == 1
    assert any("set forward by 1 h 00 min" in text for text in said)


def test_several_units_take_turns(log_at):
    """One record a unit and slot, numbered together; each unit has its own limits' first record."""
    log = log_at(units={"A": "a", "B": "b"})
    sources = {"A": Script([10.0, 10.1, 10.3]), "B": Script([20.0, 20.1, 20.2])}
    _, logged, _ = run(log, [], Plan(0.0, count=6, limits=(TWO,), keep="none"), sources=sources)
    assert [(entry.seq, entry.unit) for entry in logged] == [
        (1, "A"),
        (2, "B"),
        (3, "A"),
        (4, "B"),
        (5, "A"),
        (6, "B"),
    ]
    assert logged[0].record["unit"] == "A"
    assert [entry.seq for entry in logged if entry.alarms] == [5]


# --- an instrument ------------------------------------------------------------------------------------


class Session:
    """An instrument's session that fails as it is told to."""

    def __init__(self, results):
        self.results, self.pause, self.closed = iter(results), 0.0, False

    def connect(self):
        """The first of the results may be an error."""
        return "it"

    def acquire(self):
        """The next result."""
        result = next(self.results)
        if isinstance(result, Exception):
            self.pause = 0.05
            raise result
        self.pause = 0.0
        return SimpleNamespace(acquired=datetime.now(UTC), capture=SimpleNamespace(frequency=result))

    def close(self):
        """Remember it."""
        self.closed = True


def test_an_instrument_that_drops_out(log_at):
    """A failure is a record; the next attempt waits for the session's pause; then it goes on."""
    source = InstrumentSource("TCPIP::x::SOCKET", Session([12.0, InstrumentError("timed out"), 12.1]))
    begun = time.monotonic()
    why, logged, _ = run(log_at(), [], Plan(0.0, count=3, keep="none"), sources={"": source})
    assert why == "completed"
    assert [("error" in entry.record) for entry in logged] == [False, True, False]
    assert time.monotonic() - begun >= 0.05


def test_the_first_connection_s_failure_ends_it(log_at):
    """Nothing was ever there: status 4."""
    session = Session([])
    session.connect = lambda: (_ for _ in ()).throw(InstrumentError("refused"))
    with pytest.raises(InstrumentError, match="refused"):
        run(log_at(), [], Plan(0.0, count=3), sources={"": InstrumentSource("x", session)})


# --- a folder -----------------------------------------------------------------------------------------


class Clock:
    """A steady clock that the test moves."""

    def __init__(self):
        self.at = 100.0

    def __call__(self):
        return self.at


def folder_source(path, clock, **more):
    """A folder whose captures are their text."""
    return FolderSource("folder", path, lambda p: SimpleNamespace(text=p.read_text()), steady=clock, **more)


def names(source):
    """What arrives now."""
    return [os.path.basename(a.path) for a in source.arrivals()]


def test_a_file_counts_when_it_is_complete(tmp_path):
    """Size and time stable for a second; one that grows waits; one renamed into place counts at once."""
    clock = Clock()
    source = folder_source(tmp_path, clock)
    (tmp_path / "a.csv").write_text("1")
    assert names(source) == []
    clock.at += 0.5
    (tmp_path / "a.csv").write_text("1,2")
    assert names(source) == []
    clock.at += 0.9
    assert names(source) == []
    clock.at += 0.2
    assert names(source) == ["a.csv"]
    assert names(source) == [], "once"
    (tmp_path / "b.csv.part").write_text("1")
    assert names(source) == []
    (tmp_path / "b.csv.part").rename(tmp_path / "b.csv")
    assert names(source) == ["b.csv"]


def test_what_lay_there_before_comes_oldest_first(tmp_path):
    """With the files' own times; other files are none of ours; a settings page beside its data neither."""
    clock = Clock()
    for i, name in enumerate(("c.CSV", "a.csv", "b.tsv", "notes.md", "a.txt", ".hidden.csv", "run.db", "x.csv~")):
        (tmp_path / name).write_text("1")
        os.utime(tmp_path / name, (1e9 + i, 1e9 + i))
    source = folder_source(tmp_path, clock)
    arrivals = list(source.arrivals())
    assert [os.path.basename(a.path) for a in arrivals] == ["c.CSV", "a.csv", "b.tsv"]
    assert [a.acquired for a in arrivals] == [1e9, 1e9 + 1, 1e9 + 2]
    assert all(a.steady is None for a in arrivals)


def test_what_the_log_has_is_not_taken_again(tmp_path):
    """Across restarts, by name, size and time; a file that was written anew is a new capture."""
    path = tmp_path / "latest.csv"
    path.write_text("1")
    os.utime(path, ns=(10**18, 10**18))
    source = folder_source(tmp_path, Clock(), was_taken=lambda name: (1, 10**18))
    assert names(source) == []
    path.write_text("1,2")
    os.utime(path, ns=(10**18 + 5, 10**18 + 5))
    assert names(source) == ["latest.csv"]


def test_an_empty_file_waits_longer(tmp_path):
    """An instrument makes it first and writes later."""
    clock = Clock()
    source = folder_source(tmp_path, clock)
    (tmp_path / "a.csv").touch()
    names(source)
    clock.at += 5
    assert names(source) == []
    clock.at += 6
    assert names(source) == ["a.csv"]


def test_a_folder_that_vanishes(tmp_path):
    """An error that stands for a capture, with growing pauses; then it is there again."""
    clock = Clock()
    folder = tmp_path / "captures"
    folder.mkdir()
    source = folder_source(folder, clock)
    folder.rmdir()
    (arrival,) = source.arrivals()
    assert arrival.error.status == 4
    assert "cannot be looked into" in arrival.error.says
    assert source.pause == 1.0
    clock.at += 1
    assert source.pause == 0.0
    folder.mkdir()
    assert names(source) == []
    with pytest.raises(UsageError, match="no such folder"):
        folder_source(tmp_path / "none", clock)


def test_a_file_that_cannot_be_read_is_a_failed_record(tmp_path, log_at):
    """Its status is the capture's; the file is not tried again until it changes."""

    def read(path):
        raise CaptureError(f"{path.name}: no numbers")

    (tmp_path / "in").mkdir()
    bad = tmp_path / "in" / "bad.csv"
    bad.write_text("x")
    os.utime(bad, (1e9, 1e9))
    log = log_at()
    source = FolderSource("in", tmp_path / "in", read, lambda name: log.was_taken("", name))
    _, logged, _ = run(log, [], Plan(0.02, time=0.3), sources={"": source})
    assert [entry.record["error"]["status"] for entry in logged] == [3]
    again = FolderSource("in", tmp_path / "in", read, lambda name: log.was_taken("", name))
    assert names(again) == []
