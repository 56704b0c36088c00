"""Kill a burn-in at random instants while it records at full speed, and see whether its log lost anything.

    python tools/kill_study.py [--kills 200] [--seed 1]

A child process runs the burn-in's own loop and writer with a source that never waits and a stand-in for the
explanation (a record of the usual size), and prints every record after its commit, as ``--json -`` does. The
parent kills it (SIGKILL; TerminateProcess on Windows) after a random time, from the middle of start-up to
the middle of a commit or a checkpoint, and then checks that the log opens, that it holds every line that was
printed, word for word, that seq has no hole and no repeat, and that every interruption is a gap. The next
child goes on in the same log.
"""

from __future__ import annotations

import argparse
import json
import random
import shutil
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

LIMIT = "frequency=0.2%"


class Endless:
    """A source that always has a capture at once."""

    name = "endless"
    is_paced = True
    pause = 0.0

    def open(self) -> None:
        """Nothing to connect to."""

    def close(self) -> None:
        """Nothing to let go."""

    def arrivals(self) -> Iterator[Any]:
        """One small capture."""
        import numpy as np

        from benchfit.burnin.clock import now
        from benchfit.burnin.source import Arrival
        from benchfit.capture.model import Capture, Channel

        at = now()
        volts = np.sin(np.arange(200) / 7.0 + at.steady)
        yield Arrival(
            at.wall, "endless", Capture("endless", 1e-3, 0.0, (Channel("CH1", "V", volts),)), steady=at.steady
        )


def stand_in(capture: Any) -> dict[str, Any]:
    """A record of the usual shape and size, its numbers at random."""
    jitter = 1 + 1e-3 * random.gauss(0, 1)
    q = {"u": 1e-4, "unit": "V", "u_noise": 5e-5}
    names = ("upper", "lower", "high", "low", "charge_asymptote", "discharge_asymptote")
    return {
        "schema": 1,
        "capture": {"path": capture.path, "samples": capture.samples, "interval": capture.interval},
        "measured": {
            "oscillates": True,
            "frequency": {"value": 12.3 * jitter, "u": 1e-3, "unit": "Hz", "u_noise": 5e-4},
            **{name: {"value": random.random(), **q} for name in names},
        },
        "parts": {name: {"value": random.random(), "u": 0.01, "unit": "Ω"} for name in ("R", "C", "RA", "RB")},
        "suspects": [{"causes": ["C"], "probability": random.random(), "says": "C is off"}],
        "warnings": [],
    }  # fmt: skip


def child(log: str) -> None:
    """Record at full speed until killed."""
    from benchfit.burnin.alarms import parse_limit
    from benchfit.burnin.contents import Identity
    from benchfit.burnin.log import LogWriter
    from benchfit.burnin.loop import Burnin, Plan

    random.seed()
    writer = LogWriter.open(log, Identity("kill study", None, "", "", "kill study"), {"": "endless"})
    plan = Plan(every=0.0, limits=(parse_limit(LIMIT, {"frequency": "Hz"}),), keep="alarms")

    def printed(logged: Any) -> None:
        sys.stdout.write(json.dumps(logged.record) + "\n")
        sys.stdout.flush()

    print("ready", flush=True)
    Burnin(plan, {"": Endless()}, writer, stand_in, printed, lambda _: None).run()


def one_kill(log: Path, delay: float, from_start: bool) -> list[str]:
    """Start a child on the log, kill it ``delay`` s after its start (or its readiness); what it printed."""
    process = subprocess.Popen(
        [sys.executable, __file__, "--child", str(log)], stdout=subprocess.PIPE, text=True
    )
    lines: list[str] = []
    ready = threading.Event()

    def listen() -> None:
        assert process.stdout is not None
        for line in process.stdout:
            if line == "ready\n":
                ready.set()
            elif line.endswith("\n"):  # a line cut off by the kill was not printed
                lines.append(line)

    listener = threading.Thread(target=listen)
    listener.start()
    if not from_start:
        ready.wait(60)
    time.sleep(delay)
    process.kill()
    process.wait()
    listener.join()
    assert process.stdout is not None
    process.stdout.close()
    return lines


def check(log: Path, printed: dict[int, str]) -> tuple[int, list[str]]:
    """Records in the log, and everything that is wrong with it."""
    from benchfit.burnin.reader import LogReader

    if not log.exists():
        return 0, [f"the log is gone, {len(printed)} lines were printed"] if printed else []
    wrong: list[str] = []
    with LogReader.open(log, patience=30.0) as reader:
        records = list(reader.records())
        sessions = {s.first_seq for s in reader.sessions() if s.first_seq > 1}
        gaps = {g.after_seq + 1 for g in reader.gaps()}
    numbers = [r["seq"] for r in records]
    if numbers != list(range(1, len(numbers) + 1)):
        wrong.append("seq has a hole or a repeat")
    kept = {r["seq"]: r for r in records}
    for seq, line in printed.items():
        if kept.get(seq) != json.loads(line):
            wrong.append(f"record {seq} was printed and is not in the log as printed")
    for first in sessions:
        if first <= len(numbers) and first not in gaps:
            wrong.append(f"the interruption before record {first} is no gap")
    return len(numbers), wrong


def study(kills: int, seed: int, folder: Path, *, is_quiet: bool = False) -> tuple[int, int, list[str]]:
    """Kill so many times; kills done, records in all, everything that went wrong."""
    rng = random.Random(seed)
    wrong: list[str] = []
    total, per_log = 0, 25
    printed: dict[int, str] = {}
    for number in range(kills):
        log = folder / f"run{number // per_log}.db"
        if number % per_log == 0:
            printed = {}
        from_start = rng.random() < 0.2
        delay = rng.uniform(0.0, 0.6) if from_start else rng.expovariate(1 / 0.3)
        for line in one_kill(log, delay, from_start):
            seq = json.loads(line)["seq"]
            if seq in printed:
                wrong.append(f"kill {number}: seq {seq} was printed twice")
            printed[seq] = line
        records, faults = check(log, printed)
        wrong += [f"kill {number}: {fault}" for fault in faults]
        if number % per_log == per_log - 1 or number == kills - 1:
            total += records
            if not is_quiet:
                print(f"{number + 1} kills, {total} records, {len(wrong)} faults", flush=True)
    return kills, total, wrong


def main() -> int:
    """Run the study; 1 where anything went wrong."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--kills", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--child", help=argparse.SUPPRESS)
    args = parser.parse_args()
    if args.child:
        child(args.child)
        return 0
    folder = Path(tempfile.mkdtemp(prefix="kill-study-"))
    try:
        _, _, wrong = study(args.kills, args.seed, folder)
    finally:
        shutil.rmtree(folder, ignore_errors=True)
    for fault in wrong[:20]:
        print(fault)
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
