"""How long a lot takes, in one process and in two, and what memory it takes.

``python tools/benchmark_lot.py [--captures 1000] [--distinct 40] [--jobs 2] [--circuit NAME] [--rounds 1]``

The captures are small (1500 samples) and come from the bench: so many distinct builds, drawn within their
tolerances, every eighth with a fault of its own, under as many names as are wanted. Each run is the whole
command line in a process of its own, imports included; rounds alternate, and the best of each is taken. Peak
memory is that of the largest of the command's processes; a tenth of the captures stands beside all of them.
"""

from __future__ import annotations

import argparse
import os
import shutil
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass, replace
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

import numpy as np  # noqa: E402

from tools.make_samples import SAMPLES, capture  # noqa: E402
from tools.make_series import LOT_SHEET, unit  # noqa: E402
from tools.samples import SHEETS  # noqa: E402


@dataclass(frozen=True)
class Run:
    """One command line: wall time and processor time (s), peak memory (MB), the records."""

    seconds: float
    processor: float
    memory: float
    records: bytes


def make(folder: Path, captures: int, distinct: int, circuit: str) -> tuple[Path, Path]:
    """Write the lot; its folder and its build sheet."""
    rng = np.random.default_rng(20261)
    models, lot = folder / "models", folder / "lot"
    models.mkdir()
    lot.mkdir()
    sheet = folder / "lot.toml"
    sheet.write_text(LOT_SHEET if circuit == "timer-555" else SHEETS[_sample(circuit).name], encoding="utf-8")
    for number in range(distinct):
        capture(_unit(circuit, number, rng), models / f"{number}.csv")
    for number in range(captures):
        shutil.copy(models / f"{number % distinct}.csv", lot / f"unit_{number:05d}.csv")
    return lot, sheet


def _sample(circuit: str):  # type: ignore[no-untyped-def]
    return next(sample for sample in SAMPLES if sample.circuit == circuit)


def _unit(circuit: str, number: int, rng: np.random.Generator):  # type: ignore[no-untyped-def]
    """A build drawn about its sample; every eighth has one resistor a quarter too large."""
    if circuit == "timer-555":
        model = unit(number, (10.0, 22.0, 12.0, 9.0))
    else:
        model = replace(_sample(circuit), seed=8000 + number)
        model = replace(model, samples=1500, interval=model.interval * model.samples / 1500)
    built = {name: value * (1 + 0.01 * rng.standard_normal()) for name, value in model.built.items()}
    if number % 8 == 7:
        resistor = next(name for name in built if name.startswith("R"))
        built[resistor] *= 1.25
    return replace(model, built=built)


def run(lot: Path, sheet: Path, jobs: int, pattern: str) -> Run:
    """The command line on every capture of a pattern."""
    out = lot.parent / "records.jsonl"
    words = [sys.executable, "-m", "benchfit", str(lot / pattern), "--build", str(sheet), "-q",
             "--json", str(out), "--jobs", str(jobs)]  # fmt: skip
    before = os.times()
    began = time.perf_counter()
    process = subprocess.Popen(words, cwd=ROOT, stdout=subprocess.DEVNULL)
    memory = _wait(process)
    seconds = time.perf_counter() - began
    after = os.times()
    if process.returncode:
        raise SystemExit(f"benchfit ended with {process.returncode}")
    spent = sum(after[2:4]) - sum(before[2:4])
    return Run(seconds, spent, memory, out.read_bytes())


def _wait(process: subprocess.Popen[bytes]) -> float:
    """Peak memory (MB) of a process and those it waited for; NaN where the system does not tell."""
    if not hasattr(os, "wait4"):
        process.wait()
        return float("nan")
    _, status, usage = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    unit = 1 if sys.platform == "darwin" else 1024
    return usage.ru_maxrss * unit / 1e6


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--captures", type=int, default=1000)
    parser.add_argument("--distinct", type=int, default=40)
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--circuit", default="timer-555")
    parser.add_argument("--rounds", type=int, default=1)
    args = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        lot, sheet = make(Path(name), args.captures, args.distinct, args.circuit)
        few = f"unit_{'[0-9]' * 4}0.csv"
        best: dict[tuple[int, str], Run] = {}
        for _ in range(args.rounds):
            for jobs in (1, args.jobs):
                for pattern in (few, "*.csv"):
                    one = run(lot, sheet, jobs, pattern)
                    key = (jobs, pattern)
                    best[key] = min(best.get(key, one), one, key=lambda r: r.seconds)
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else float("nan")
    what = f"{args.captures} captures, {args.distinct} distinct, {args.circuit}"
    print(f"{what}; load of this machine {load:.1f}")
    print(f"{'jobs':>4} {'captures':>8} {'s':>8} {'ms each':>8} {'processor s':>11} {'peak MB':>8}")
    for (jobs, _), found in best.items():
        count = found.records.count(b"\n")
        print(f"{jobs:>4} {count:>8} {found.seconds:>8.1f} {1e3 * found.seconds / count:>8.1f} "
              f"{found.processor:>11.1f} {found.memory:>8.0f}")  # fmt: skip
    one, many = best[1, "*.csv"], best[args.jobs, "*.csv"]
    print(f"ratio {one.seconds / many.seconds:.2f} with {args.jobs} processes; "
          f"records {'identical' if one.records == many.records else 'DIFFER'}")  # fmt: skip
    for jobs in (1, args.jobs):
        grown = best[jobs, "*.csv"].memory - best[jobs, few].memory
        print(f"memory with --jobs {jobs}: {grown:+.1f} MB from a tenth of the captures to all")


if __name__ == "__main__":
    main()
