"""The log: what was printed is in it, one writer, and nothing foreign or damaged is ever touched."""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import sqlite3
import struct
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchfit.burnin import packing, schema
from benchfit.burnin.contents import Entry, Identity, Taken, Wanted
from benchfit.burnin.log import LogWriter
from benchfit.burnin.reader import LogReader
from benchfit.errors import LogError, SheetError

from .conftest import IDENTITY, SHEET, START, capture, failed, fill, record

REPO = Path(__file__).resolve().parents[2]


def test_what_goes_in_comes_out(log_at):
    """Every record, failed ones too, with its number and time, word for word."""
    writer = log_at()
    rows = [
        record(12.0, R=1e4),
        record(None),
        failed("the scope said nothing"),
        record(12.1, R=1.1e4, C=1e-7),
    ]
    fill(writer, rows)
    with LogReader.open(writer.path) as log:
        found = list(log.records())
        series = log.series("")
    assert [r["seq"] for r in found] == [1, 2, 3, 4]
    assert found[0]["acquired"] == "2025-06-15T15:06:40.000000Z"
    for line, row in zip(found, rows, strict=True):
        assert {k: v for k, v in line.items() if k not in ("seq", "acquired")} == row
    assert series.status.tolist() == [0, 0, 4, 0]
    np.testing.assert_array_equal(series.row("frequency"), [12.0, np.nan, np.nan, 12.1])
    np.testing.assert_array_equal(series.row("C"), [np.nan, np.nan, np.nan, 1e-7])
    assert series.u[series.names.index("frequency")] == pytest.approx(2e-3, rel=1e-6)
    assert series.noise[series.names.index("frequency")] == pytest.approx(1e-3, rel=1e-6)


def test_the_same_command_goes_on(log_at):
    """seq continues; the interrupted session is told from one that was closed."""
    writer = log_at()
    fill(writer, [12.0, 12.1])
    writer.close("stopped")
    writer = log_at()
    assert (writer.resumed.seq, writer.resumed.acquired, writer.resumed.in_order) == (2, START + 60, True)
    assert writer.append([Entry("", START + 500, record())]) == [3]
    writer._db.close()  # as a kill would: the session is not ended
    writer._lock.release()
    assert log_at().resumed.in_order is False


def test_an_interrupted_session_carries_its_end_over(log_at):
    """Killed at 3 of 10, the same command has 7 to go; a command with another end starts afresh."""
    wanted = Wanted(60.0, 10, None)
    writer = log_at(wanted=wanted)
    fill(writer, [1.0, 2.0, 3.0])
    writer._db.close()
    writer._lock.release()
    again = log_at(wanted=wanted)
    assert again.resumed.count == 3
    again.close("stopped")
    third = log_at(wanted=Wanted(60.0, 5, None))
    assert third.resumed.count == 0
    third.close("completed")
    assert log_at(wanted=Wanted(60.0, 5, None)).resumed.count == 0, "a completed session carries nothing over"


def test_another_sheet_is_refused_and_named(log_at):
    """The sentence says which key was changed."""
    log_at().close()
    other = Identity("", "op-amp", SHEET.replace("10k 1%", "12k 1%"), "abd", "test")
    with pytest.raises(SheetError, match=r"parts\.R was '10k 1%' and is '12k 1%'"):
        log_at(identity=other)
    with pytest.raises(SheetError, match="begun with a build sheet"):
        log_at(identity=Identity("", None, "", "", "test"))


def test_two_writers(log_at):
    """The second is told who holds it, and may have it after the first; readers are not in the way."""
    first = log_at()
    fill(first, [12.0])
    with pytest.raises(LogError, match=rf"process {os.getpid()} of .* on .*, since 20") as caught:
        log_at()
    assert caught.value.status == 5
    with LogReader.open(first.path) as log:
        assert log.run().records == 1
        fill(first, [12.1])
        assert log.run().records == 1, "a reader keeps its view"
    first.close()
    assert not first.path.with_name("run.db.lock").exists()
    assert log_at().seq == 2


def test_a_lock_left_by_a_dead_process_does_not_stand_in_the_way(log_at):
    """The lock is the system's, not the file."""
    path = log_at().path
    lock = path.with_name("other.db.lock")
    lock.write_text('{"process": 1, "host": "x", "user": "y", "since": 0}')
    assert log_at("other.db").seq == 0


@pytest.mark.parametrize("content", [b"seq,acquired\n1,2\n", b"\x00" * 4096, b"SQLite format 3\x00" + b"\x01" * 20])
def test_foreign_files_are_left_alone(tmp_path, content):
    """Text, zeros, a cut-off database header: refused by writer and reader, not a byte changed."""
    path = tmp_path / "notes.txt"
    path.write_bytes(content)
    for open_ in (lambda: LogWriter.open(path, IDENTITY, {"": "x"}), lambda: LogReader.open(path)):
        with pytest.raises(LogError, match="not a burn-in log"):
            open_()
    assert path.read_bytes() == content
    assert [p.name for p in tmp_path.iterdir()] == ["notes.txt"]


def test_another_program_s_database_is_left_alone(tmp_path):
    """A SQLite file of someone else's."""
    path = tmp_path / "theirs.db"
    db = sqlite3.connect(path)
    db.execute("CREATE TABLE record (seq INTEGER)")
    db.commit()
    db.close()
    before = path.read_bytes()
    with pytest.raises(LogError, match="not made by a burn-in"):
        LogWriter.open(path, IDENTITY, {"": "x"})
    assert path.read_bytes() == before


def test_an_empty_file_is_a_new_log(tmp_path):
    """As a temporary file's name is often made."""
    path = tmp_path / "new.db"
    path.touch()
    LogWriter.open(path, IDENTITY, {"": "x"}).close()
    with LogReader.open(path) as log:
        assert log.run().title == "Sluice gate ticker"


def closed_log(log_at, count: int = 400) -> Path:
    writer = log_at()
    fill(writer, 12 + 0.01 * np.random.default_rng(3).normal(size=count))
    writer.close()
    return writer.path


@pytest.mark.parametrize("newer", [True, False])
def test_another_version_is_refused(log_at, newer):
    """Never altered; the sentence says what to do."""
    path = closed_log(log_at, 3)
    content = bytearray(path.read_bytes())
    content[60:64] = struct.pack(">I", schema.version() + (1 if newer else -1))
    path.write_bytes(content)
    for open_ in (lambda: log_at(), lambda: LogReader.open(path)):
        with pytest.raises(LogError, match="version .*" + ("program that wrote it" if newer else "--upgrade")):
            open_()
    assert path.read_bytes() == bytes(content)


def test_an_older_log_is_upgraded_as_a_copy(log_at, tmp_path, monkeypatch):
    """A migration is applied to the copy; the old log stays what it was."""
    path = closed_log(log_at, 3)
    before = path.read_bytes()
    monkeypatch.setattr(schema, "MIGRATIONS", (*schema.MIGRATIONS, "CREATE TABLE later (x); CREATE TABLE more (y)"))
    with pytest.raises(LogError, match="--upgrade"):
        LogReader.open(path)
    new = tmp_path / "new.db"
    schema.upgraded(path, new, "test")
    with LogReader.open(new) as log:
        assert log.run().records == 3
    assert path.read_bytes() == before
    with pytest.raises(LogError, match="exists already"):
        schema.upgraded(path, new, "test")


def test_a_log_cut_short_is_refused(log_at):
    """By both, and it is left as it is."""
    path = closed_log(log_at)
    with path.open("r+b") as file:
        file.truncate(path.stat().st_size // 2)
    before = path.read_bytes()
    for open_ in (lambda: log_at(), lambda: LogReader.open(path)):
        with pytest.raises(LogError, match="damaged"):
            open_()
    assert path.read_bytes() == before


@pytest.mark.parametrize("place", [0.5, 0.7, 0.9])
def test_garbage_inside_is_noticed(log_at, place):
    """A stretch of the file overwritten: refused at the latest when the records are read, never altered."""
    path = closed_log(log_at, 3000)  # in a short log most of the room belongs to tables that are all but empty
    at = int(path.stat().st_size * place) // 16384 * 16384
    with path.open("r+b") as file:
        file.seek(at)
        file.write(b"\xa5" * 6000)
    before = path.read_bytes()
    with pytest.raises(LogError, match="damaged"), LogReader.open(path) as log:
        log.series("")
        list(log.records())
    assert path.read_bytes() == before
    with contextlib.suppress(LogError):  # a short look before writing need not find every damage
        log_at().close()
    assert path.read_bytes()[at : at + 6000] == b"\xa5" * 6000


def test_a_flipped_bit_in_a_number_is_noticed(log_at):
    """SQLite itself does not see it; the record's checksum does."""
    path = closed_log(log_at, 50)
    needle = struct.pack("<d", 12 + 0.01 * float(np.random.default_rng(3).normal(size=50)[20]))
    content = path.read_bytes()
    at = content.rindex(needle)  # the packed scalars; the plain column is big-endian
    path.write_bytes(content[: at + 6] + bytes([content[at + 6] ^ 1]) + content[at + 7 :])
    with LogReader.open(path) as log, pytest.raises(LogError, match="record 21 does not have its checksum"):
        log.series("")


def test_clear_words_for_bad_places(tmp_path, log_at):
    """No such folder, a folder for a file, no such log."""
    with pytest.raises(LogError, match="does not exist; make it first"):
        LogWriter.open(tmp_path / "no" / "run.db", IDENTITY, {"": "x"})
    with pytest.raises(LogError, match="this is a folder"):
        LogWriter.open(tmp_path, IDENTITY, {"": "x"})
    with pytest.raises(LogError, match="there is no such log"):
        LogReader.open(tmp_path / "none.db")


def test_a_log_that_vanishes_is_noticed(log_at):
    """Deleted, or moved and made anew, under the writer: no record counts that only the dead file has."""
    writer = log_at()
    fill(writer, [12.0])
    writer.path.rename(writer.path.with_name("elsewhere.db"))
    with pytest.raises(LogError, match="vanished") as caught:
        fill(writer, [12.1])
    assert caught.value.status == 5


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() != 0, reason="needs root, to become somebody else")
def test_a_read_only_folder(tmp_path, log_at):
    """A folder that may not be written: a sentence for the writer; the trend's reader works there."""
    path = closed_log(log_at, 5)
    code = (
        "import os, sys; sys.path.insert(0, sys.argv[1])\n"
        "from tests.burnin.conftest import IDENTITY; from benchfit.burnin.log import LogWriter\n"
        "from benchfit.burnin.reader import LogReader; from benchfit.errors import LogError\n"
        "os.setgid(65534); os.setuid(65534)\n"
        "with LogReader.open(sys.argv[2]) as log: print(log.run().records, len(log.series('').seq))\n"
        "try: LogWriter.open(sys.argv[2], IDENTITY, {'': 'x'})\n"
        "except LogError as fault: print(fault.status, fault.says)\n"
    )
    public = Path("/tmp") / f"benchfit-test-{os.getpid()}"
    public.mkdir(mode=0o755)
    try:
        shutil.copy(path, public / "run.db")
        command = [sys.executable, "-c", code, str(REPO), str(public / "run.db")]
        done = subprocess.run(command, capture_output=True, text=True)
        assert done.stdout.startswith("5 5\n5 "), done.stderr
        assert "cannot be written here (Permission denied" in done.stdout
    finally:
        shutil.rmtree(public)


@pytest.mark.skipif(sys.platform == "win32", reason="limits on a file's size are POSIX")
def test_a_full_disk(tmp_path):
    """Status 5, a sentence, and every printed record is in the log; with room again, it goes on."""
    pytest.importorskip("resource")
    code = (
        "import resource, sys; sys.path.insert(0, sys.argv[1])\n"
        "from tests.burnin.conftest import IDENTITY, record; from benchfit.burnin.log import LogWriter\n"
        "from benchfit.burnin.contents import Entry; from benchfit.errors import LogError\n"
        "writer = LogWriter.open(sys.argv[2], IDENTITY, {'': 'x'})\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (int(sys.argv[3]),) * 2)\n"
        "try:\n"
        "    while True:\n"
        "        print(writer.append([Entry('', 1e9 + writer.seq, record(12.0, R=1.0))])[0], flush=True)\n"
        "except LogError as fault:\n"
        "    print(fault.says, file=sys.stderr); writer.close('failed'); sys.exit(fault.status)\n"
    )
    path = tmp_path / "run.db"
    for size in ("900000", "2500000"):
        command = [sys.executable, "-c", code, str(REPO), str(path), size]
        done = subprocess.run(command, capture_output=True, text=True)
        assert done.returncode == 5, done.stderr
        assert "the disk is full" in done.stderr
        printed = [int(line) for line in done.stdout.split()]
        assert len(printed) > 10
        with LogReader.open(path) as log:
            assert [r["seq"] for r in log.records()] == list(range(1, printed[-1] + 1))


def test_a_reader_leaves_nothing_behind(log_at):
    """A closed log has no auxiliary files after it was read."""
    path = closed_log(log_at, 5)
    with LogReader.open(path) as log:
        log.series("")
    assert [p.name for p in path.parent.iterdir()] == ["run.db"]


def test_raw_captures(log_at):
    """Bit for bit, with empty cells and overloads; asking for one that was not kept says which were."""
    writer = log_at()
    raw = capture(1)
    writer.append([Entry("", START, record()), Entry("", START + 1, record(), capture=raw)])
    writer.close()
    with LogReader.open(writer.path) as log:
        back = log.capture(2)
        with pytest.raises(LogError, match="record 1; there are those of 2"):
            log.capture(1)
    assert (back.path, back.interval, back.start) == (raw.path, raw.interval, raw.start)
    for a, b in zip(raw.channels, back.channels, strict=True):
        assert (a.name, a.unit, a.resolution) == (b.name, b.unit, b.resolution)
        np.testing.assert_array_equal(a.values, b.values)
        assert (a.overloaded is None) == (b.overloaded is None)
        if a.overloaded is not None:
            np.testing.assert_array_equal(a.overloaded, b.overloaded)


def test_notes_taken_files_and_limits(log_at):
    """A note is kept once; a file is known by its name, size and time; the last session's limits rule."""
    writer = log_at()
    for text in ("23 °C", "23 °C", "lot 7"):
        writer.note(text)
    writer.append([Entry("", START, record(), taken=Taken("a.csv", 10, 20))])
    writer.append([Entry("", START, record(), taken=Taken("a.csv", 11, 30))])
    assert writer.was_taken("", "a.csv") == (11, 30)
    assert writer.was_taken("", "b.csv") is None
    writer.bounds({"frequency": "2 %"})
    writer.close()
    again = log_at()
    again.bounds({"duty": "1 %"})
    with LogReader.open(again.path) as log:
        assert log.run().notes == ("23 °C", "lot 7")
        assert log.limits() == {"duty": "1 %"}


def test_numbers_that_are_not_finite_become_null(log_at):
    """The log's JSON is JSON, whatever a record holds."""
    writer = log_at()
    bad = record(12.0)
    bad["miss"] = [float("nan"), float("inf"), 1.0]
    writer.append([Entry("", START, bad)])
    with LogReader.open(writer.path) as log:
        (line,) = log.records()
    assert line["miss"] == [None, None, 1.0]
    json.dumps(line, allow_nan=False)


NUMBERS = st.tuples(st.floats(allow_nan=False), st.floats(0, 1e30), st.floats(0, 1e30))


@given(st.dictionaries(st.sampled_from("abcdefgh"), NUMBERS, max_size=8))
def test_packed_scalars_come_back(found):
    """Values to the bit, u to float32, what is absent as NaN."""
    names = list("abcdefgh")
    given = {n: packing.Scalar(n, "V", "measured", *x) for n, x in found.items()}
    packed = packing.pack(given, names)
    values, u, noise = packing.unpack([packed, packed])
    assert values.shape == u.shape == noise.shape == (2, len(packed) // packing.WIDTH)
    for i, name in enumerate(names):
        if name in found:
            assert values[1, i] == found[name][0]
            assert u[1, i] == np.float32(found[name][1])
        elif i < values.shape[1]:
            assert np.isnan(values[0, i])


@given(st.text(), st.text())
def test_bodies_come_back_whatever_the_dictionary(body, model):
    """Compression against another record loses nothing."""
    for dictionary in (None, model.encode() or None):
        assert packing.expand(packing.compress(body, dictionary), dictionary) == body
