"""The whole program on the sample captures, as a bench user starts it."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

import benchfit
from benchfit.commands.main import main

SAMPLES = Path(__file__).resolve().parents[2] / "sample_captures"
PAIRS = sorted(path for path in SAMPLES.glob("*.csv") if path.with_suffix(".toml").exists())


@pytest.mark.parametrize("path", PAIRS[:6], ids=lambda p: p.stem)
def test_a_sample_is_explained(path, capsys):
    """A record by the interface: the budget adds up, the suspects' probabilities too, and no number is
    NaN."""
    assert main([str(path), "--build", str(path.with_suffix(".toml")), "--json", "-"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    record = json.loads(out, parse_constant=lambda word: pytest.fail(f"{word} in the record"))
    assert record["schema"] == 1
    assert record["capture"]["path"] == str(path)
    assert sum(suspect["probability"] for suspect in record["suspects"]) == pytest.approx(1, abs=1e-9)
    for miss in record["miss"].values():
        if miss is not None:
            total = miss["on_paper"] + sum(share["share"] for share in miss["shares"]) + miss["unexplained"]
            assert total == pytest.approx(miss["miss"], abs=1e-9)


def test_the_library_does_what_the_command_does(capsys):
    """The same record, and the same text where it is printed."""
    path = PAIRS[0]
    found = benchfit.explain(benchfit.read(str(path)), benchfit.Sheet.load(path.with_suffix(".toml")))
    assert main([str(path), "--build", str(path.with_suffix(".toml")), "--json", "-"]) == 0
    assert json.loads(capsys.readouterr().out) == found.record()
    assert str(found).splitlines()[0]


def benchfit_process(*words: str, **options: object) -> subprocess.CompletedProcess[bytes]:
    return subprocess.run(
        [sys.executable, "-m", "benchfit", *words], capture_output=True, check=False, **options
    )  # type: ignore[call-overload,no-any-return]


def test_standard_input_and_bytes_out():
    """A capture through a pipe; UTF-8 comes out whatever the locale."""
    path = PAIRS[0]
    environment = {**os.environ, "LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONIOENCODING": ""}
    run = benchfit_process(
        "-", "--build", str(path.with_suffix(".toml")), input=path.read_bytes(), env=environment
    )
    assert run.returncode == 0, run.stderr
    assert "±" in run.stdout.decode("utf-8")


def test_a_closed_pipe_is_no_error(tmp_path):
    """``benchfit … | head -1`` ends quietly, and the files that were asked for are there."""
    path = PAIRS[0]
    words = [sys.executable, "-m", "benchfit", str(path), "--json", str(tmp_path / "r.json")]
    with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        talk = process.stderr.read()
        assert process.wait() == 0
    assert talk == b""
    assert json.loads((tmp_path / "r.json").read_text())["schema"] == 1


@pytest.mark.long
def test_processes_give_the_same_records(tmp_path):
    """--jobs 2 and --jobs 1, failures included, in the order given."""
    sheet = str(PAIRS[0].with_suffix(".toml"))
    words = [str(PAIRS[0]), str(tmp_path / "missing.csv"), str(PAIRS[0]), "--build", sheet, "--json", "-"]
    one = benchfit_process(*words, "--jobs", "1")
    two = benchfit_process(*words, "--jobs", "2")
    assert one.returncode == two.returncode == 3
    assert one.stdout == two.stdout
    assert one.stderr == two.stderr


@pytest.mark.long
def test_a_cluster_gives_the_same_records(tmp_path):
    """A local scheduler with two workers, and one process."""
    distributed = pytest.importorskip("distributed")
    sheet = str(PAIRS[0].with_suffix(".toml"))
    words = [str(PAIRS[0]), str(tmp_path / "missing.csv"), "--build", sheet, "--json", "-"]
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, dashboard_address=None, host="127.0.0.1"
    ) as cluster:
        many = benchfit_process(*words, "--cluster", cluster.scheduler_address)
    one = benchfit_process(*words)
    assert many.returncode == one.returncode == 3
    assert many.stdout == one.stdout


@pytest.mark.long
def test_no_scheduler_at_the_address():
    """One sentence, status 2."""
    pytest.importorskip("distributed")
    run = benchfit_process(str(PAIRS[0]), "--cluster", "tcp://127.0.0.1:1")
    assert run.returncode == 2
    assert b"no dask scheduler answers there" in run.stderr
    assert run.stderr.count(b"\n") == 1
