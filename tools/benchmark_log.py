"""A log of a million records: how large it is, how fast it is read, how fast a burn-in goes on in it.

    python tools/benchmark_log.py [--records 1000000] [--keep FILE]

Every record has the shape and size of a real one (an explanation of one of the sample captures, its numbers
at random about their values, all digits different). Speeds are measured in processes of their own, memory as
their peak, and the reading is set against the time that this machine takes to read the same file once.
"""

from __future__ import annotations

import argparse
import copy
import json
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

SAMPLES = Path(__file__).resolve().parents[1] / "sample_captures"


def model_record(name: str = "mast_beacon") -> tuple[dict[str, Any], str]:
    """The result record of a sample capture, and its build sheet."""
    from benchfit import pipeline
    from benchfit.capture import read
    from benchfit.sheet import Sheet

    sheet = Sheet.load(SAMPLES / f"{name}.toml")
    return pipeline.explain(read(SAMPLES / f"{name}.csv"), sheet).record(), sheet.dump()


def varied(record: dict[str, Any], rng: np.random.Generator, drift: float) -> dict[str, Any]:
    """The record with every number a little different, times longer by ``drift``."""

    def vary(x: Any) -> Any:
        if isinstance(x, dict):
            return {k: vary(v) for k, v in x.items()}
        if isinstance(x, list):
            return [vary(v) for v in x]
        return x * (1 + 1e-4 * rng.standard_normal()) if isinstance(x, float) else x

    found: dict[str, Any] = vary(record)
    for name, entry in found["measured"].items():
        if isinstance(entry, dict) and name in ("period", "charge_time", "charge_time_constant"):
            entry["value"] *= 1 + drift
    found["measured"]["frequency"]["value"] = 1 / found["measured"]["period"]["value"]
    return found


def write(path: Path, records: int) -> float:
    """Fill a log, a thousand records a commit; seconds."""
    from benchfit.burnin.contents import Entry, Identity
    from benchfit.burnin.log import LogWriter
    from benchfit.burnin.packing import rounded

    model, sheet = model_record()
    rng = np.random.default_rng(1)
    # A thousand different records, each used once in every thousand with stamps and drift of its own.
    bodies = [rounded(varied(model, rng, 0.0)) for _ in range(1000)]
    begun = time.perf_counter()
    log = LogWriter.open(path, Identity("benchmark", model["circuit"], sheet, "x", "benchmark"), {"": "none"})
    for first in range(0, records, 1000):
        entries = []
        for i in range(first, min(first + 1000, records)):
            body = copy.copy(bodies[i - first])
            body["measured"] = measured = dict(body["measured"])
            stretch = 1 + 0.01 * i / records + 1e-4 * rng.standard_normal()
            for name in ("period", "charge_time"):
                measured[name] = {**measured[name], "value": measured[name]["value"] * stretch}
            measured["frequency"] = {**measured["frequency"], "value": 1 / measured["period"]["value"]}
            entries.append(Entry("", 1.7e9 + 60.0 * i, body, 1e3 + 60.0 * i))
        log.append(entries)
    log.close("completed")
    return time.perf_counter() - begun


CHILD = """
import sys, time, json
sys.path.insert(0, sys.argv[1])
{imports}
begun = time.perf_counter()
{work}
spent = time.perf_counter() - begun
print(json.dumps({{"seconds": spent, "got": got}}))
"""
RESUME = (
    "import numpy\nfrom benchfit.burnin.contents import Identity\nfrom benchfit.burnin.log import LogWriter\n"
    "from benchfit.burnin.alarms import Limit, Watch",
    "identity = Identity('benchmark', None, sys.argv[3], 'x', 'benchmark')\n"
    "log = LogWriter.open(sys.argv[2], identity, {'': 'none'})\n"
    "first = log.first_value('', 'frequency'); last = log.last_values('', 'frequency', 50)\n"
    "got = [log.seq, len(last)]",
)


def measured(script: tuple[str, str], *words: str) -> dict[str, Any]:
    """Run a piece of work in a process of its own."""
    code = CHILD.format(imports=script[0], work=script[1])
    root = str(Path(__file__).resolve().parents[1])
    done = subprocess.run(
        [sys.executable, "-c", code, root, *words], capture_output=True, text=True, check=True
    )
    found: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return found


def _largest_child() -> float:
    """Peak memory of the largest process so far that this one has waited for (MiB)."""
    import resource

    return resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024


def main() -> int:
    """Print the figures; 1 where one is beyond its goal."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--records", type=int, default=1_000_000)
    parser.add_argument("--keep", help="keep the log there (and use the one that is there)")
    args = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        path = Path(args.keep) if args.keep else Path(folder) / "run.db"
        if not path.exists():
            spent = write(path, args.records)
            print(f"written: {args.records} records in {spent:.0f} s, {args.records / spent:.0f} a second")
        size = path.stat().st_size
        print(f"size: {size / 2**20:.0f} MiB, {size / args.records:.0f} bytes a record (goal: under 2048)")
        begun = time.perf_counter()
        with path.open("rb", buffering=0) as file:
            while file.read(1 << 22):
                pass
        plain = time.perf_counter() - begun
        begun = time.perf_counter()
        command = [
            sys.executable,
            "-m",
            "benchfit",
            "trend",
            str(path),
            "--json",
            str(Path(folder) / "trend.json"),
        ]
        subprocess.run(command, check=True, stdout=subprocess.DEVNULL)
        seconds, peak = time.perf_counter() - begun, _largest_child()
        print(f"trend: {seconds:.1f} s (goal: under 10; reading the file once takes {plain:.1f} s)")
        print(f"       peak {peak:.0f} MiB (goal: under 1024)")
        again = measured(RESUME, str(path), "")
        print(f"resumed: ready in {again['seconds']:.2f} s beyond imports (goal: under 1); {again['got']}")
    fine = size / args.records < 2048 and seconds < 10 and peak < 1024 and again["seconds"] < 1
    print("all goals met" if fine else "a goal is missed")
    return 0 if fine else 1


if __name__ == "__main__":
    sys.exit(main())
