"""Speed and memory of reading a capture, as ratios to pandas' own reader in the same run.

    python -m tools.benchmark_read [--rows N] [--repeats K]

Writes a file of ten million rows and three columns, then reads it in fresh processes, in turn by
``benchfit.read``, which is told nothing, and by a bare ``pandas.read_csv`` (C engine), which is told the
layout. What is timed is the call alone; memory is the peak of the whole process. Ends with status 1 where
a ratio is above its target (1.3 for time, 1.6 for memory).
"""

from __future__ import annotations

import argparse
import statistics
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np

TIME_TARGET = 1.3
MEMORY_TARGET = 1.6

_BARE = """
import pandas
def call(path):
    layout = {"skiprows": 1, "header": None, "names": ["t", "a", "b"], "sep": ",", "decimal": "."}
    return pandas.read_csv(path, dtype="float64", engine="c", **layout)
"""
_BENCHFIT = """
import pandas, benchfit
def call(path):
    return benchfit.read(path)
"""
_MEASURE = """
import sys, time
began = time.perf_counter()
result = call(sys.argv[1])
took = time.perf_counter() - began
try:
    import resource
    unit = 1 if sys.platform == "darwin" else 1024
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit
except ImportError:
    import psutil
    peak = psutil.Process().memory_info().peak_wset
print(took, peak)
"""


def write(path: Path, rows: int) -> None:
    """A file of ``rows`` rows: time, a two-level channel in 8-bit steps with noise, and a ramp."""
    rng = np.random.default_rng(0)
    with path.open("w", encoding="ascii", newline="\n") as file:
        file.write("in s,C1 in V,C2 in V\n")
        for begin in range(0, rows, 250_000):
            k = np.arange(begin, min(begin + 250_000, rows))
            output = np.round((4.98 * (k // 2000 % 2) + 0.03 * rng.standard_normal(k.size)) / 0.04) * 0.04
            capacitor = (
                np.round((1.5 + 0.002 * (k % 1000) + 0.01 * rng.standard_normal(k.size)) / 0.02) * 0.02
            )
            file.writelines(
                f"{t:.8e},{a:.5E},{b:.5E}\n" for t, a, b in zip(k * 1e-8 - 0.02, output, capacitor, strict=True)
            )


def measure(code: str, path: Path) -> tuple[float, float]:
    """Time of the call (s) and peak memory of its process (bytes)."""
    run = subprocess.run(
        [sys.executable, "-c", code + _MEASURE, str(path)], check=True, capture_output=True, text=True
    )
    took, peak = run.stdout.split()
    return float(took), float(peak)


def main(arguments: list[str] | None = None) -> int:
    """Run the benchmark and print its table."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--rows", type=int, default=10_000_000)
    parser.add_argument("--repeats", type=int, default=7)
    options = parser.parse_args(arguments)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "long.csv"
        write(path, options.rows)
        size = f"{path.stat().st_size / 2**20:.0f} MiB"
        print(f"{options.rows} rows, {size}, {options.repeats} runs of each in turn")
        results = [(measure(_BARE, path), measure(_BENCHFIT, path)) for _ in range(options.repeats)]
    bare, ours = ([run[side] for run in results] for side in (0, 1))
    for name, runs in (("pandas.read_csv", bare), ("benchfit.read", ours)):
        times, peaks = zip(*runs, strict=True)
        took = f"median {statistics.median(times):6.2f} s  best {min(times):6.2f} s"
        print(f"{name:<16} {took}  peak {max(peaks) / 2**20:7.0f} MiB")
    time_ratio = statistics.median(b / a for (a, _), (b, _) in results)
    memory_ratio = statistics.median(b / a for (_, a), (_, b) in results)
    print(f"ratio of times   {time_ratio:.2f} (median of pairs; at most {TIME_TARGET})")
    print(f"ratio of memory  {memory_ratio:.2f} (at most {MEMORY_TARGET})")
    return int(time_ratio > TIME_TARGET or memory_ratio > MEMORY_TARGET)


if __name__ == "__main__":
    sys.exit(main())
