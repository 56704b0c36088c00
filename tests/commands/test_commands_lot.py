"""Many captures on one command line, and in the library: one line for each, then the lot."""

from __future__ import annotations

import csv
import io
import json
import os
import re
import shutil
import signal
import sys
import threading
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest

import benchfit
from benchfit.commands.main import main
from benchfit.show.progress import LotProgress

SAMPLES = Path(__file__).resolve().parents[2] / "sample_captures"
HIVE = SAMPLES / "hive_scale_clock.csv"
BUILD = ["--build", str(HIVE.with_suffix(".toml"))]


def test_one_line_for_each_unit_then_the_lot(asked, capsys):
    """The failed ones are named; nothing else is printed of a unit."""
    assert main(["a.csv", "missing.csv", "b.csv", "--set", "title=Sump alarm"]) == 3
    out, err = capsys.readouterr()
    assert "\n\n\n" not in out
    assert out.splitlines()[0] == "Sump alarm, lot of 3 units"
    assert "2 pass and 1 not explained." in out
    assert len([line for line in out.splitlines() if line.lstrip().startswith(("a.csv ", "b.csv "))]) == 2
    assert "missing.csv: not explained: missing.csv: there is no such file" in out
    assert "Measured" not in out
    assert err == "benchfit: missing.csv: there is no such file\n"


def test_verbose_shows_each_in_full_too(asked, capsys):
    """Their reports as they come, then the lot."""
    assert main(["a.csv", "b.csv", "-v"]) == 0
    out = capsys.readouterr().out
    assert out.count("\nMeasured") == 2
    assert out.rindex("Measured") < out.index("lot of 2 units")


def test_a_pattern_for_one_file_is_no_lot(asked, capsys):
    """One capture is printed as ever, and so is a joint set."""
    Path("a.csv").write_text("")
    assert main(["*.csv"]) == 0
    assert "lot of" not in capsys.readouterr().out
    assert main(["a.csv", "b.csv", "--joint"]) == 0
    assert "lot of" not in capsys.readouterr().out


def test_patterns_reach_into_folders(asked, capsys):
    """As some shells do: ** is any depth."""
    for name in ("lot/a.csv", "lot/day 2/b.csv", "lot/day 2/deep/c.csv"):
        Path(name).parent.mkdir(parents=True, exist_ok=True)
        Path(name).write_text("")
    assert main(["lot/**/*.csv"]) == 0
    assert [Path(one[0]).name for one in asked.captures] == ["a.csv", "b.csv", "c.csv"]


def test_the_lots_own_page_and_picture(asked, capsys):
    """One file each, whatever the number of captures."""
    assert main(["a.csv", "b.csv", "c.csv", "--report", "lot.html", "--plot", "lot.svg"]) == 0
    assert sorted(path.name for path in Path().iterdir()) == ["lot.html", "lot.svg"]
    assert "lot</h1>" in Path("lot.html").read_text(encoding="utf-8")
    assert Path("lot.svg").read_text(encoding="utf-8").startswith("<?xml")


def test_records_and_table_of_a_lot(asked, capsys):
    """One object a line, in order, also those that failed; a row each, columns of all."""
    words = ["a.csv", "missing.csv", "b.csv", "--json", "r.jsonl", "--csv", "t.csv"]
    assert main(words) == 3
    records = [json.loads(line) for line in Path("r.jsonl").read_text().splitlines()]
    assert [record["capture"]["path"] for record in records] == ["a.csv", "missing.csv", "b.csv"]
    assert ["error" in record for record in records] == [False, True, False]
    rows = list(csv.DictReader(io.StringIO(Path("t.csv").read_text())))
    assert [(row["capture"], row["status"]) for row in rows] == [
        ("a.csv", "0"), ("missing.csv", "3"), ("b.csv", "0"),
    ]  # fmt: skip
    assert rows[1]["frequency"] == ""
    assert sorted(path.name for path in Path().iterdir()) == ["r.jsonl", "t.csv"]


def test_nothing_but_records_on_standard_output(asked, capsys):
    """The lot has its page; no line of text gets in between."""
    assert main(["a.csv", "b.csv", "--json", "-", "--report", "lot.html"]) == 0
    out = capsys.readouterr().out
    assert [json.loads(line)["schema"] for line in out.splitlines()] == [1, 1]
    assert Path("lot.html").exists()


def test_a_lot_of_failures(asked, capsys):
    """Each is named, and there is still a page, a picture and a table; a lot without verdicts is told too."""
    words = ["missing1.csv", "missing2.csv", "--report", "lot.html", "--plot", "lot.png", "--csv", "t.csv"]
    assert main(words) == 3
    out, err = capsys.readouterr()
    assert "2 not explained" in out
    assert err.count("\n") == 2
    assert Path("lot.png").stat().st_size > 1000


def test_check_looks_at_every_unit(asked, capsys):
    """One that is not passed is enough."""
    asked.verdict = "conditional"
    assert main(["a.csv", "b.csv", "--check"]) == 1


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def shown(progress: LotProgress, err: Terminal, text: str) -> bool:
    """Whether a text appears within a while; the bar is redrawn four times a second."""
    deadline = time.monotonic() + 10
    while time.monotonic() < deadline:
        if text in err.getvalue():
            return True
        time.sleep(0.05)
    return False


def test_progress_is_shown_when_it_lasts(monkeypatch):
    """On a terminal's standard error; what is said meanwhile is a line of its own, without colour."""
    err = Terminal()
    monkeypatch.setattr(sys, "stderr", err)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setenv("NO_COLOR", "1")
    progress = LotProgress(40, False, after=0.0)
    progress.step()
    assert shown(progress, err, "1/40 captures")
    progress.say("benchfit: [b]x.csv: no")
    assert "benchfit: [b]x.csv: no\n" in err.getvalue()
    progress.stop()
    assert not re.search(r"\x1b\[(\d+;)*(3|4|9|10)\d(;\d+)*m", err.getvalue())
    before = len(err.getvalue())
    progress.stop()
    assert len(err.getvalue()) == before


def test_what_is_quick_shows_no_progress(monkeypatch, asked, capsys):
    """And nothing of it in a pipe, or where it is not wanted."""
    err = Terminal()
    monkeypatch.setattr(sys, "stderr", err)
    assert main(["a.csv", "b.csv"]) == 0
    assert err.getvalue() == ""
    started: list[int] = []
    monkeypatch.setattr("benchfit.show.progress.LotProgress", lambda *a, **k: started.append(1))
    for more in (["-q"], ["--json", "-"], ["-v"]):
        main(["a.csv", "b.csv", *more])
    monkeypatch.setattr(sys, "stderr", io.StringIO())
    main(["a.csv", "b.csv"])
    assert started == []


# --- the library, and the real thing ------------------------------------------------------------------------


def test_the_library_explains_a_lot():
    """Paths, captures and split shots, in the order given, with an error in its place; the lot from them."""
    sheet = benchfit.Sheet.load(BUILD[1])
    capture = benchfit.read(HIVE)
    results = list(benchfit.explain_lot([HIVE, "nowhere.csv", capture, [str(HIVE)]], sheet))
    alone = benchfit.explain(capture, sheet).record()
    assert [r.path for r in results] == [str(HIVE), "nowhere.csv", str(HIVE), str(HIVE)]
    assert [r.record() == alone for r in results] == [True, False, True, True]
    error = results[1].error
    assert isinstance(error, benchfit.CaptureError)
    assert str(results[1]) == error.says
    assert results[1].record()["error"]["status"] == 3
    lot = benchfit.lot_of(results)
    assert str(lot).startswith("Hive scale excitation clock, op-amp, lot of 4 units")


def test_any_executor_will_do():
    """Threads here; no more are drawn than it takes, and the executor stays open."""
    drawn: list[int] = []

    def captures() -> Iterator[str]:
        for x in range(300):
            drawn.append(x)
            yield f"nowhere {x}.csv"

    with ThreadPoolExecutor(2) as executor:
        results = benchfit.explain_lot(captures(), executor=executor)
        assert next(results).path == "nowhere 0.csv"
        assert len(drawn) < 100
        assert [r.path for r in results] == [f"nowhere {x}.csv" for x in range(1, 300)]
        assert executor.submit(int, "3").result() == 3


@pytest.fixture
def lot(tmp_path: Path) -> list[str]:
    """Two kinds of the same build's captures under other names, one that cannot be read among them."""
    paths = []
    for number in range(24):
        path = tmp_path / f"unit {number:02d}.csv"
        if number == 7:
            path.write_text("this is no capture\n")
        else:
            shutil.copy(HIVE, path)
        paths.append(str(path))
    return paths


def told(results: Iterator[Any]) -> list[str]:
    return [json.dumps(result.record()) for result in results]


@pytest.mark.long
def test_processes_do_the_same(lot, capfd):
    """--jobs 2 and the library's jobs=2 against one process, to the last digit."""
    sheet = benchfit.Sheet.load(BUILD[1])
    here = told(benchfit.explain_lot(lot, sheet))
    assert told(benchfit.explain_lot(lot, sheet, jobs=2)) == here
    assert main([*lot, *BUILD, "--json", "-", "--jobs", "2"]) == 3
    assert capfd.readouterr().out.splitlines() == here


@pytest.mark.long
def test_a_cluster_whose_worker_is_killed_does_the_same(lot, capfd):
    """Two workers on this machine; one is killed in the middle, and costs nothing but time."""
    distributed = pytest.importorskip("distributed")
    sheet = benchfit.Sheet.load(BUILD[1])
    here = told(benchfit.explain_lot(lot, sheet))
    settings = {"n_workers": 2, "threads_per_worker": 1, "dashboard_address": None, "host": "127.0.0.1"}
    with distributed.LocalCluster(**settings) as cluster, distributed.Client(cluster) as client:
        pids = list(client.run(os.getpid).values())
        results = benchfit.explain_lot(lot, sheet, executor=client.get_executor())
        first = [json.dumps(next(results).record()) for _ in range(3)]
        os.kill(pids[0], signal.SIGKILL)
        assert first + told(results) == here
        capfd.readouterr()

        second = next(iter(client.run(os.getpid).values()))
        victim = threading.Timer(2.0, os.kill, (second, signal.SIGKILL))
        victim.start()
        assert main([*lot, *BUILD, "--json", "-", "--cluster", cluster.scheduler_address]) == 3
        victim.join()
        assert capfd.readouterr().out.splitlines() == here
