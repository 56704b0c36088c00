"""``benchfit poll`` against the loopback instrument: records, lines, files, statuses, Ctrl-C."""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import pytest

from benchfit import instrument
from benchfit.commands import explainer
from benchfit.commands.main import main
from tools.loopback import CircuitSource, LoopbackScope, Misbehaviour, PatternSource, Trimmer
from tools.loopback_scope import _from_sheet

ROOT = Path(__file__).resolve().parents[2]
SHEET = ROOT / "sample_captures" / "tide_gate_pacer.toml"
DIALECT = ROOT / "tools" / "loopback_dialect.toml"


@pytest.fixture(autouse=True)
def _quick(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """Explain in a thread of this process (a new process takes seconds to start), pause little."""
    started: list[ThreadPoolExecutor] = []

    def start(self: explainer.Explainer) -> Executor:
        executor = ThreadPoolExecutor(1)
        started.append(executor)
        return executor

    monkeypatch.setattr(explainer.Explainer, "_start", start)
    monkeypatch.setattr(explainer, "_warm_up", lambda: None)
    monkeypatch.setattr(instrument.session, "PAUSES", (0.0, 0.05))
    monkeypatch.setattr(instrument.Session.__init__, "__kwdefaults__", {
        **instrument.Session.__init__.__kwdefaults__, "pauses": (0.0, 0.05),
    })  # fmt: skip
    yield
    for executor in started:
        executor.shutdown(wait=True)


@pytest.fixture
def bench() -> Iterator[Callable[..., LoopbackScope]]:
    """Puts the tide gate pacer of the samples on the loopback bench."""
    running: list[LoopbackScope] = []

    def start(
        built: dict[str, float] | None = None,
        rates: dict[str, float] | None = None,
        trimmer: Trimmer | None = None,
        **options: Any,
    ) -> LoopbackScope:
        circuit, parts, nodes, probe = _from_sheet(str(SHEET))
        source = CircuitSource(
            circuit, {**parts, **(built or {})}, nodes, samples=1500, cycles=6, probe=probe, trimmer=trimmer
        )
        misbehaviour = Misbehaviour(rates or {}, late_by=0.4, refuse_for=0.1)
        scope = LoopbackScope(source, misbehaviour=misbehaviour, **options).start()
        running.append(scope)
        return scope

    yield start
    for scope in running:
        scope.stop()


def poll(*words: object) -> int:
    return main(["poll", *map(str, words)])


def records(text: str) -> list[dict[str, Any]]:
    return [json.loads(line) for line in text.splitlines()]


def quick_dialect(folder: Path, timeout: str = "200 ms") -> Path:
    path = folder / "quick.toml"
    path.write_text(DIALECT.read_text(encoding="utf-8").replace('"5 s"', f'"{timeout}"'), encoding="utf-8")
    return path


def test_records_as_json(bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]) -> None:
    scope = bench({"R": 43e3})
    status = poll(scope.resource, "--build", SHEET, "--count", 4, "--json", "-")
    out, err = capsys.readouterr()
    found = records(out)
    assert status == 0
    assert len(found) == 4
    stamps = [record["acquired"] for record in found]
    assert stamps == sorted(stamps)
    assert all(stamp.endswith("Z") and "T" in stamp for stamp in stamps)
    # What the bench's own integration says of this build.
    waves = scope.instrument.source._waves()  # type: ignore[attr-defined]
    for record in found:
        assert record["schema"] == 1
        assert record["capture"]["path"] == scope.resource
        assert [channel["name"] for channel in record["capture"]["channels"]] == ["CH1", "CH2"]
        q = record["measured"]["frequency"]
        assert abs(q["value"] * waves.period - 1) < 6 * q["u_noise"] * waves.period + 1e-5
        assert record["explained"] is None or record["explained"] in stamps
    last = found[-1]
    assert last["explained"] == last["acquired"], "the last record waits for its own explanation"
    assert last["suspects"]
    assert set(last["parts"]) >= {"R", "C"}
    assert last["miss"]["frequency"]["target"] == 97
    assert "4 captures" in err


def test_an_explanation_that_lags_says_of_which(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    whole = explainer.explain_one

    def slow(number: int, *rest: Any) -> explainer.Explained:
        time.sleep(0.5)
        return whole(number, *rest)

    monkeypatch.setattr(explainer, "explain_one", slow)
    scope = bench(duration=0.05)
    assert poll(scope.resource, "--build", SHEET, "--count", 25, "--json", "-") == 0
    found = records(capsys.readouterr().out)
    stamps = [record["acquired"] for record in found]
    lags = [
        stamps.index(record["acquired"]) - stamps.index(record["explained"])
        for record in found
        if record["explained"] is not None
    ]
    assert found[0]["explained"] is None
    assert found[0]["suspects"] == []
    assert found[0]["measured"]["frequency"]["value"] > 0
    assert max(lags) >= 2, "measuring must not wait for the explanation"
    assert lags[-1] == 0
    assert min(lags) >= 0


def test_with_idle_time_every_record_has_its_own_explanation(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]
) -> None:
    scope = bench()
    poll(scope.resource, "--build", SHEET, "--count", 1, "--json", "-")  # imports are paid for here
    capsys.readouterr()
    assert poll(scope.resource, "--build", SHEET, "--count", 2, "--every", "2s", "--json", "-") == 0
    for record in records(capsys.readouterr().out):
        assert record["explained"] == record["acquired"]


def test_one_plain_line_an_acquisition(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]
) -> None:
    scope = bench({"R": 43e3})
    assert poll(scope.resource, "--build", SHEET, "--count", 3) == 0
    out, err = capsys.readouterr()
    lines, report = out.split("\n\n", 1)
    assert len(lines.splitlines()) == 3
    for line in lines.splitlines():
        assert line.startswith("20")
        assert "frequency 105." in line
        assert "of 97 Hz" in line or "(+8.9" in line
        assert "\x1b" not in line
    assert "Tide gate pacer" in report
    assert "3 captures of TCPIP" in err


def test_files_grow(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    scope = bench(rates={"error": 0.4}, built={"R": 43e3})
    paths = {name: tmp_path / f"run.{name}" for name in ("json", "csv", "png")}
    status = poll(
        scope.resource, "--build", SHEET, "--count", 6, "--json", paths["json"], "--csv", paths["csv"],
        "--plot", paths["png"], "--report", tmp_path / "run.html", "-q",
    )  # fmt: skip
    assert status == 0
    assert capsys.readouterr().out.count("\n") > 5, "with -q the report alone"
    found = records(paths["json"].read_text(encoding="utf-8"))
    with paths["csv"].open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert len(found) == len(rows) == 6
    for record, row in zip(found, rows, strict=True):
        assert row["acquired"] == record["acquired"]
        if "error" in record:
            assert record["error"]["status"] == 4
            assert row["status"] == "4"
            assert "-222" in row["says"]
            assert row["frequency"] == ""
        else:
            assert float(row["frequency"]) == record["measured"]["frequency"]["value"]
    assert any("error" in record for record in found)
    assert {"R", "R_u", "C", "frequency_miss", "suspect"} <= set(rows[0])
    assert paths["png"].read_bytes().startswith(b"\x89PNG")
    assert "Tide gate pacer" in (tmp_path / "run.html").read_text(encoding="utf-8")


def test_a_dialect_and_other_channels(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    scope = bench()
    status = poll(
        scope.resource, "--dialect", DIALECT, "--channel", "output=CH2", "--set", "circuit=op-amp",
        "--set", "parts.R=47k", "--set", "parts.C=100n", "--set", "parts.R_top=22k",
        "--set", "parts.R_bottom=22k", "--set", "parts.V_high=10.6", "--set", "parts.V_low=-9.9",
        "--count", 1, "--json", "-",
    )  # fmt: skip
    assert status == 0
    (record,) = records(capsys.readouterr().out)
    assert [(c["name"], c["node"]) for c in record["capture"]["channels"]] == [("CH2", "output")]
    assert record["circuit"] == "op-amp"


def test_without_a_sheet(bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]) -> None:
    scope = bench()
    assert poll(scope.resource, "--count", 1, "--json", "-") == 0
    (record,) = records(capsys.readouterr().out)
    assert record["circuit"] is None
    assert record["measured"]["frequency"]["value"] == pytest.approx(96.68, rel=1e-3)
    assert record["capture"]["channels"][0]["node"] == "capacitor"


def test_faults_are_records_and_it_goes_on(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    scope = bench(rates={"silent": 0.2, "closing": 0.2, "garbage": 0.2})
    status = poll(
        scope.resource, "--build", SHEET, "--dialect", quick_dialect(tmp_path), "--count", 14, "--json", "-"
    )
    out, err = capsys.readouterr()
    found = records(out)
    assert status == 0
    assert len(found) == 14
    failed = [record for record in found if "error" in record]
    assert 2 <= len(failed) <= 13
    for record in failed:
        assert record["error"]["status"] == 4
        assert record["capture"] == {"path": scope.resource}
        assert record["acquired"]
        assert record["error"]["says"] in err
    assert "failed (" in err
    assert "connected anew" in err


def test_nothing_but_failures_is_a_failure(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]
) -> None:
    scope = bench(rates={"error": 1.0})
    assert poll(scope.resource, "--build", SHEET, "--count", 2, "--json", "-") == 4
    assert [record["error"]["status"] for record in records(capsys.readouterr().out)] == [4, 4]


def test_the_first_connection_fails(capsys: pytest.CaptureFixture[str]) -> None:
    assert poll("TCPIP::127.0.0.1::9::SOCKET", "--json", "-") == 4
    out, err = capsys.readouterr()
    assert out == ""
    assert err.count("\n") == 1
    assert "refused" in err


def test_giving_up(bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]) -> None:
    scope = bench()

    def kill_later() -> None:
        time.sleep(0.6)
        scope.stop()

    import threading

    thread = threading.Thread(target=kill_later)
    thread.start()
    status = poll(scope.resource, "--build", SHEET, "--give-up", "500ms", "--json", "-")
    thread.join()
    out, err = capsys.readouterr()
    assert status == 4
    assert "no capture for 0.5 s" in err
    found = records(out)
    assert "measured" in found[0]
    assert "error" in found[-1]


def test_trimming(bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]) -> None:
    trimmer = Trimmer("R", 40e3, 55e3, at=0.2)
    scope = bench(trimmer=trimmer)
    assert poll(scope.resource, "--build", SHEET, "--trim", "R=40k..55k", "--count", 3) == 0
    lines = capsys.readouterr().out.split("\n\n")[0].splitlines()
    # 43 kΩ now, and 46.9 kΩ would bring the nominal rest of the build onto 97 Hz.
    assert "trim R: raise it by 3.89" in lines[0] or "trim R: raise it by 3.90" in lines[0]
    assert "of its travel" in lines[-1]


def test_trying_an_instrument_out(
    bench: Callable[..., LoopbackScope], capsys: pytest.CaptureFixture[str]
) -> None:
    scope = bench()
    assert poll(scope.resource, "--try", "--channel", "capacitor=CH1", "--channel", "output=CH2") == 0
    lines = capsys.readouterr().out.splitlines()
    assert [line[:3] for line in lines] == ["ok "] * 4
    assert "Loopback Scope" in lines[1]
    assert "CH2 from" in lines[3]


def test_trying_a_silent_instrument_out(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    with LoopbackScope(PatternSource(), line_end=b"\r", reply_end=b"\r") as scope:
        assert poll(scope.resource, "--try", "--dialect", quick_dialect(tmp_path, "300 ms")) == 4
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith("no  connect")
    assert 'write_termination = "\\r"' in lines[-1]


def test_listing(capsys: pytest.CaptureFixture[str]) -> None:
    assert poll("--list") == 0
    out, err = capsys.readouterr()
    if not out:
        assert "no resource found" in err
        assert "SOCKET" in err


@pytest.mark.parametrize(
    ("words", "says"),
    [
        ([], "name the instrument"),
        (["X", "--count", "0"], "--count 0"),
        (["X", "--every", "soon"], "--every"),
        (["X", "--every", "0"], "above 0"),
        (["X", "--give-up", "-5s"], "--give-up"),
        (["X", "--trim", "R"], "R=1k..20k"),
        (["X", "--trim", "R=1k..x"], "not a value"),
        (["X", "--trim", "R=5k..5k"], "must be different"),
        (["X", "--trim", "R=1k..5k"], "--build SHEET"),
        (["X", "--trim", "Q=1k..5k", "--build", str(SHEET)], "no part Q"),
        (["X", "--channel", "CH1"], "NODE=NAME"),
        (["X", "--channel", "capacitr=CH1", "--build", str(SHEET)], "capacitor"),
        (["X", "--dialect", "nowhere.toml"], "nowhere.toml"),
        (["X", "--build", "nowhere.toml"], "nowhere.toml"),
        (["X", "--plot", "x.gif"], "--plot x.gif"),
        (["X", "--cuont", "3"], "--count"),
    ],
)
def test_a_command_line_that_cannot_be_used(
    words: list[str], says: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert poll(*words) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert says in err
    assert err.count("\n") == 1


def start_process(scope: LoopbackScope, *words: object) -> subprocess.Popen[str]:
    command = [sys.executable, "-m", "benchfit", "poll", scope.resource, *map(str, words)]
    return subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, cwd=ROOT, start_new_session=True
    )


@pytest.mark.long
@pytest.mark.skipif(os.name == "nt", reason="Windows has no SIGINT to send to one process")
def test_interrupted_it_keeps_what_it_learned(bench: Callable[..., LoopbackScope]) -> None:
    """The real thing: a process of its own explains, Ctrl-C goes to the whole group as from a terminal."""
    scope = bench({"R": 43e3}, duration=0.05)
    process = start_process(scope, "--build", SHEET, "--json", "-")
    assert process.stdout is not None
    lines = [process.stdout.readline() for _ in range(3)]
    os.killpg(process.pid, signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 0
    found = records("".join(lines) + out)
    assert len(found) >= 3
    assert found[-1]["explained"] is not None, "what was under way is finished and kept"
    assert "Traceback" not in err
    assert "captures of TCPIP" in err


@pytest.mark.long
@pytest.mark.skipif(os.name == "nt", reason="needs a pseudo-terminal")
def test_on_a_terminal_it_redraws_in_place(bench: Callable[..., LoopbackScope]) -> None:
    import pty
    import select

    scope = bench({"R": 43e3}, duration=0.05)
    master, slave = pty.openpty()
    environment = {**os.environ, "TERM": "xterm", "COLUMNS": "80", "LINES": "24", "NO_COLOR": "1"}
    command = [sys.executable, "-m", "benchfit", "poll", scope.resource, "--build", str(SHEET)]
    process = subprocess.Popen(command, stdout=slave, stderr=slave, stdin=slave, cwd=ROOT, env=environment,
                               start_new_session=True)  # fmt: skip
    os.close(slave)
    seen = b""
    deadline = time.monotonic() + 60
    is_interrupted = False
    while time.monotonic() < deadline:
        if select.select([master], [], [], 0.2)[0]:
            try:
                data = os.read(master, 65536)
            except OSError:
                break
            if not data:
                break
            seen += data
        if not is_interrupted and b"suspects" in seen:
            os.killpg(process.pid, signal.SIGINT)
            is_interrupted = True
    assert process.wait(timeout=30) == 0
    os.close(master)
    text = seen.decode("utf-8", "replace")
    assert "\x1b[?1049h" in text, "a page of its own"
    assert "\x1b[?1049l" in text, "and the shell's page back at the end"
    before, after = text.split("\x1b[?1049l", 1)
    assert "Ctrl-C ends it" in before
    assert "connected" in before
    assert "Miss budget" in after
    assert "\x1b[31m" not in text, "no colour with NO_COLOR"
