"""``benchfit burnin`` and ``benchfit trend`` as they are typed: lines, files, exit statuses, signals."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from benchfit.burnin.log import LogWriter
from benchfit.burnin.reader import LogReader
from benchfit.commands.main import main

from .conftest import IDENTITY, fill

REPO = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(REPO))
SAMPLE = REPO / "sample_captures" / "mast_beacon.csv"
SHEET = SAMPLE.with_suffix(".toml")


@pytest.fixture
def captures(tmp_path):
    """A folder with three captures that lay there before."""
    folder = tmp_path / "captures"
    folder.mkdir()
    for i in range(3):
        add(folder, i)
    return folder


def add(folder, i):
    """One more capture, half an hour after the one before."""
    path = folder / f"shot{i}.csv"
    shutil.copy(SAMPLE, path)
    os.utime(path, (1.75e9 + 1800 * i, 1.75e9 + 1800 * i))


def lines(out):
    """Lines of JSON."""
    return [json.loads(line) for line in out.splitlines()]


def test_a_folder_into_a_log_and_what_the_log_says(captures, tmp_path, capsys):
    """The records as lines after their commit; the same command goes on; the trend in four forms."""
    log = str(tmp_path / "run.db")
    command = ["burnin", str(captures), "--log", log, "--build", str(SHEET), "--every", "0.1s", "--json", "-"]
    assert main([*command, "--count", "3", "--note", "23 °C", "--keep", "all"]) == 0
    out, err = capsys.readouterr()
    found = lines(out)
    assert [r["seq"] for r in found] == [1, 2, 3]
    assert found[1]["acquired"] == "2025-06-15T15:36:40.000000Z"
    assert {"schema", "measured", "parts", "suspects"} <= found[0].keys()
    assert "complete: 3 records" in err
    add(captures, 3)
    assert main([*command, "--count", "1"]) == 0
    out, err = capsys.readouterr()
    assert [r["seq"] for r in lines(out)] == [4]
    assert "goes on after record 3" in err
    with LogReader.open(log) as reader:
        assert list(reader.records(1, 3)) == found
        assert [g.after_seq for g in reader.gaps()] == [3]

    table, picture = tmp_path / "t.csv", tmp_path / "t.png"
    assert main(["trend", log, "--json", "-", "--csv", str(table), "--plot", str(picture)]) == 0
    trend = json.loads(capsys.readouterr().out)
    assert trend["run"]["records"] == 4
    assert trend["run"]["notes"] == ["23 °C"]
    assert len(trend["run"]["gaps"]) == 1
    assert trend["quantities"]["frequency"]["first"] == found[0]["measured"]["frequency"]["value"]
    assert len(table.read_text().splitlines()) == 5
    assert picture.stat().st_size > 1000
    assert main(["trend", log]) == 0
    assert "4 records" in capsys.readouterr().out
    raw = tmp_path / "raw.csv"
    assert main(["trend", log, "--raw", "2", str(raw)]) == 0
    from benchfit.capture import read

    back, sample = read(raw), read(SAMPLE)
    assert back.samples == sample.samples
    assert (back.channels[0].values == sample.channels[0].values).all()

    other = tmp_path / "other.toml"
    other.write_text(SHEET.read_text().replace("[record]", '[record]\nlot = "7"'))
    assert main(["burnin", str(captures), "--log", log, "--build", str(other), "--count", "1"]) == 2
    assert "record.lot was 'absent' and is '7'" in capsys.readouterr().err


def test_refusals(tmp_path, capsys):
    """One sentence each, on standard error, with the contract's status."""
    log, folder = str(tmp_path / "x.db"), tmp_path / "in"
    folder.mkdir()
    cases = [
        (["burnin", "--log", log], 2, "name one SOURCE"),
        (["burnin", str(folder)], 2, "--log"),
        (["burnin", str(folder), "--unit", "A=x", "--log", log], 2, "name one SOURCE"),
        (["burnin", "--unit", "A", "--log", log], 2, "NAME=SOURCE"),
        (["burnin", str(folder), "--log", log, "--limit", "freqency=2%"], 2, "did you mean frequency"),
        (["burnin", str(folder), "--log", log, "--count", "0"], 2, "at least one record"),
        (["burnin", str(folder), "--log", log, "--for", "soon"], 2, "is not a duration"),
        (["burnin", str(folder), "--log", str(tmp_path / "no" / "x.db")], 5, "does not exist"),
        (["burnin", str(folder), "--log", str(folder)], 5, "this is a folder"),
        (["trend", log], 5, "there is no such log"),
        (["trend", str(SAMPLE)], 5, "not a burn-in log"),
    ]
    for words, status, says in cases:
        assert main(words) == status, words
        out, err = capsys.readouterr()
        assert says in err
        assert err.count("\n") == 1
        assert out == ""
    assert main(["burnin", str(tmp_path / "none"), "--log", log]) == 2
    assert "no such folder" in capsys.readouterr().err
    LogWriter.open(tmp_path / "empty.db", IDENTITY, {"": "x"}).close()
    assert main(["trend", str(tmp_path / "empty.db")]) == 5
    assert "no records yet" in capsys.readouterr().err


def test_a_second_writer(tmp_path, capsys):
    """Status 5, and who holds it."""
    writer = LogWriter.open(tmp_path / "run.db", IDENTITY, {"": "x"})
    fill(writer, [12.0])
    try:
        assert main(["burnin", str(tmp_path), "--log", str(tmp_path / "run.db"), "--count", "1"]) == 5
        assert f"process {os.getpid()}" in capsys.readouterr().err
    finally:
        writer.close()


def test_several_units_from_folders(captures, tmp_path, capsys):
    """--unit repeated: each from its own folder, each line says whose it is."""
    second = tmp_path / "second"
    second.mkdir()
    add(second, 0)
    log = str(tmp_path / "run.db")
    units = ["--unit", f"0017={captures}", "--unit", f"0018={second}"]
    assert main(["burnin", *units, "--log", log, "--count", "4", "--every", "0.1s", "--json", "-", "-q"]) == 0
    found = lines(capsys.readouterr().out)
    assert sorted(r["unit"] for r in found) == ["0017", "0017", "0017", "0018"]
    assert main(["trend", log, "--json", "-"]) == 0
    assert set(json.loads(capsys.readouterr().out)["units"]) == {"0017", "0018"}


# --- in a process of its own ------------------------------------------------------------------------------


def started(*words):
    """The command in a process, its standard output as a pipe of lines."""
    command = [sys.executable, "-m", "benchfit", "burnin", *words]
    pipe = subprocess.PIPE
    return subprocess.Popen(command, cwd=REPO, stdout=pipe, stderr=pipe, text=True)


@pytest.mark.skipif(sys.platform == "win32", reason="signals are POSIX; Windows has Ctrl-Break")
@pytest.mark.parametrize("name", ["SIGINT", pytest.param("SIGTERM", marks=pytest.mark.long)])
def test_ended_in_order(name, captures, tmp_path):
    """The record in hand is finished, the log closed, how to go on is printed, status 0."""
    log = tmp_path / "run.db"
    process = started(str(captures), "--log", str(log), "--every", "0.1s", "--json", "-")
    first = process.stdout.readline()
    process.send_signal(getattr(signal, name))
    out, err = process.communicate(timeout=60)
    assert process.returncode == 0, err
    assert "The same command goes on from there" in err
    assert f"--log {log}" in err
    assert not log.with_name("run.db-wal").exists()
    with LogReader.open(log) as reader:
        assert list(reader.records()) == lines(first + out)
        assert reader.run().is_closed


@pytest.mark.long
def test_killed_and_gone_on_with(captures, tmp_path):
    """SIGKILL after the first line: it is in the log; the same command goes on to the count wanted."""
    log = tmp_path / "run.db"
    words = [str(captures), "--log", str(log), "--every", "0.1s", "--json", "-", "--count", "3"]
    process = started(*words)
    first = process.stdout.readline()
    process.kill()
    out, _ = process.communicate()
    printed = lines(first + "".join(line for line in out.splitlines(True) if line.endswith("\n")))
    done = subprocess.run(
        [sys.executable, "-m", "benchfit", "burnin", *words],
        cwd=REPO,
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    with LogReader.open(log) as reader:
        kept = list(reader.records())
        gaps = reader.gaps()
    assert kept[: len(printed)] == printed
    assert [r["seq"] for r in kept] == [1, 2, 3]
    if len(printed) < 3:
        assert len(gaps) == 1
        assert gaps[0].why == "interrupted"


def test_an_instrument_that_drops_out(tmp_path, capsys):
    """Over VISA, a fault in between: the failure is a record, and the run goes on; nobody there: status 4."""
    from tools.loopback import CircuitSource, LoopbackScope
    from tools.loopback.builds import BUILDS

    source = CircuitSource("op-amp", BUILDS["op-amp"], {"CH1": "capacitor"}, seed=3)
    log = str(tmp_path / "run.db")
    scope = LoopbackScope(source).start()
    try:
        resource = scope.resource
        words = ["burnin", resource, "--log", log, "--every", "0.3s", "--json", "-", "-q"]
        assert main([*words, "--count", "2"]) == 0
        assert [r["seq"] for r in lines(capsys.readouterr().out)] == [1, 2]
    finally:
        scope.stop()
    begun = time.monotonic()
    assert main([*words, "--count", "2"]) == 4
    assert time.monotonic() - begun < 30
    out, err = capsys.readouterr()
    assert out == ""
    assert resource in err
    with LogReader.open(log) as reader:
        assert reader.run().records == 2
