"""How fast acquisitions come in, beside bare pyvisa queries of the same data in the same run.

``python tools/benchmark_poll.py [--samples 4000] [--channels 2] [--seconds 3]``: sessions beside bare pyvisa
``python tools/benchmark_poll.py --poll``: the whole command, measuring and explaining, beside bare pyvisa
``python tools/benchmark_poll.py --memory 10000``: memory of the whole command over so many records (Linux)

The loopback instrument runs in a process of its own with records digitised beforehand. Bare means: pyvisa's
own write, query and query_binary_values, with the commands that need no answer sent in one segment with the
next question (else every acquisition waits 40 ms for an acknowledgement, and we would be flattered); the
volts of both channels are computed and kept, as a capture keeps them.
"""

from __future__ import annotations

import argparse
import itertools
import json
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from datetime import datetime
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from benchfit.capture import Capture  # noqa: E402
from benchfit.instrument import SCPI_1999, Dialect, Session  # noqa: E402

DIALECT = ROOT / "tools" / "loopback_dialect.toml"


def start_scope(*options: str) -> tuple[subprocess.Popen[str], str]:
    """The loopback instrument in a process of its own, and its resource string."""
    command = [sys.executable, str(ROOT / "tools" / "loopback_scope.py"), "--port", "0", *options]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True, cwd=ROOT)
    assert process.stdout is not None
    line = process.stdout.readline()
    if "SOCKET" not in line:
        process.kill()
        raise RuntimeError(f"the loopback instrument did not start: {line}")
    return process, line.split(": ")[0]


def bare_scpi(resource: str, channels: list[str]) -> Callable[[], int]:
    """Bare pyvisa, SCPI-1999."""
    import numpy as np

    visa = _open(resource)
    visa.write("FORM REAL,32\nFORM:BORD SWAP")
    kept: dict[str, np.ndarray] = {}

    def acquire() -> int:
        kept.clear()
        visa.query("INIT\n*OPC?")
        for channel in channels:
            float(visa.query("SENS:SWE:TINT?"))
            float(visa.query("SENS:SWE:OFFS:TIME?"))
            kept[channel] = visa.query_binary_values(f"TRAC? {channel}", "f", container=np.array).astype(
                float
            )
        visa.query("SYST:ERR?")
        return sum(values.size for values in kept.values())

    return acquire


def bare_dialect(resource: str, channels: list[str]) -> Callable[[], int]:
    """Bare pyvisa, the dialect of named fields."""
    import numpy as np

    visa = _open(resource)
    visa.write("*CLS\nREC:FORM U8")
    kept: dict[str, np.ndarray] = {}

    def acquire() -> int:
        kept.clear()
        visa.query("RUN:ONE\n*OPC?")
        for channel in channels:
            cells = [float(cell) for cell in visa.query(f"REC:SEL {channel}\nREC:HEAD?").split(",")[:6]]
            raw = visa.query_binary_values("REC:DATA?", "B", container=np.array)
            kept[channel] = (raw - cells[5]) * cells[3] + cells[4]
        visa.query("SYST:ERR?")
        return sum(values.size for values in kept.values())

    return acquire


def _open(resource: str):  # type: ignore[no-untyped-def]
    import pyvisa

    visa = pyvisa.ResourceManager("@py").open_resource(resource, open_timeout=5000)
    visa.read_termination = visa.write_termination = "\n"
    visa.timeout = 5000
    visa.query("*IDN?")
    return visa


def ours(resource: str, channels: list[str], dialect: Dialect) -> tuple[Session, Callable[[], int]]:
    """A session of ours."""
    session = Session(resource, channels, dialect=dialect)
    session.connect()

    kept: list[Capture] = []

    def acquire() -> int:
        kept.clear()
        capture = session.acquire().capture
        assert capture is not None
        kept.append(capture)
        return capture.samples * len(capture.channels)

    return session, acquire


def compare(bare: Callable[[], int], own: Callable[[], int], seconds: float) -> tuple[float, float]:
    """Acquisitions per second of both: one of each in turn, so that both see the same machine; by
    the tenth percentile of the times, which other work on the machine disturbs least."""
    import numpy as np

    # A process that has measured for a while has freed large arrays: its allocator then keeps memory for both.
    np.ones(2_000_000).sum()
    times: tuple[list[float], list[float]] = ([], [])
    end = time.perf_counter() + 2 * seconds
    while time.perf_counter() < end:
        for acquire, spent in zip((bare, own), times, strict=True):
            begin = time.perf_counter()
            acquire()
            spent.append(time.perf_counter() - begin)
    rates = [1.0 / statistics.quantiles(spent, n=10)[0] for spent in times]
    return rates[0], rates[1]


def whole_command(resource: str, build: Path, count: int, output: Path) -> subprocess.Popen[bytes]:
    """``benchfit poll`` in a process of its own, its records in a file."""
    command = [sys.executable, "-m", "benchfit", "poll", resource, "--build", str(build)]
    command += ["--count", str(count), "--json", str(output), "-q"]
    return subprocess.Popen(command, cwd=ROOT, stdout=subprocess.DEVNULL)


def poll_beside_bare(seconds: float) -> None:
    """The whole command against an instrument that takes as long for a record as the record lasts."""
    build = ROOT / "sample_captures" / "tide_gate_pacer.toml"
    process, resource = start_scope("--build", str(build), "--samples", "4000")
    try:
        acquire = bare_scpi(resource, ["CH1", "CH2"])
        acquire()
        times = []
        end = time.perf_counter() + seconds
        while time.perf_counter() < end:
            begin = time.perf_counter()
            acquire()
            times.append(time.perf_counter() - begin)
        bare = 1.0 / statistics.median(times)
        with tempfile.TemporaryDirectory() as folder:
            output = Path(folder) / "records.json"
            count = max(10, int(seconds * bare))
            whole_command(resource, build, count, output).wait()
            records = [json.loads(line) for line in output.read_text(encoding="utf-8").splitlines()]
        stamps = [datetime.fromisoformat(record["acquired"]) for record in records if "error" not in record]
        steps = [(after - before).total_seconds() for before, after in itertools.pairwise(stamps)]
        own = 1.0 / statistics.median(steps)
        explained = len({record.get("explained") for record in records} - {None})
    finally:
        process.terminate()
        process.wait(timeout=10)
    ratio = f"bare {bare:.2f}/s, poll {own:.2f}/s, ratio {own / bare:.2f}"
    print(f"{ratio}; {explained} explanations in {len(records)} records")


def memory(count: int) -> None:
    """Resident memory (MB) of the command and of the process that explains, at every tenth of the run."""
    build = ROOT / "sample_captures" / "tide_gate_pacer.toml"
    options = ("--build", str(build), "--samples", "2000", "--cycles", "6", "--instant", "--replay", "16")
    process, resource = start_scope(*options)
    try:
        with tempfile.TemporaryDirectory() as folder:
            output = Path(folder) / "records.json"
            command = whole_command(resource, build, count, output)
            tenth, sizes = 1, []
            while command.poll() is None:
                time.sleep(0.5)
                done = output.read_bytes().count(b"\n") if output.exists() else 0
                if done >= tenth * count // 10:
                    tenth = done * 10 // count + 1
                    found = [resident(pid) for pid in (command.pid, *children(command.pid))]
                    if len(found) < 2 or 0.0 in found:
                        continue  # it has just ended
                    sizes.append(found)
                    print(
                        f"{done:>8,} records: " + ", ".join(f"{size:.1f} MB" for size in sizes[-1]),
                        flush=True,
                    )
    finally:
        process.terminate()
        process.wait(timeout=10)
    for first, last in zip(sizes[0], sizes[-1], strict=False):
        print(f"from the first tenth to the last: {100 * (last / first - 1):+.1f} %")


def resident(pid: int) -> float:
    """Resident memory of a process (MB)."""
    for line in Path(f"/proc/{pid}/status").read_text().splitlines():
        if line.startswith("VmRSS:"):
            return int(line.split()[1]) / 1024
    return 0.0


def children(pid: int) -> list[int]:
    """Processes that a process has started, the largest first."""
    found = [int(child) for task in Path(f"/proc/{pid}/task").iterdir()
             for child in (task / "children").read_text().split()]  # fmt: skip
    return sorted(found, key=resident, reverse=True)[:1]


def main() -> int:
    """Run it and print a table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--samples", type=int, nargs="*", default=[1000, 4000, 100_000])
    parser.add_argument("--channels", type=int, default=2, choices=(1, 2))
    parser.add_argument("--seconds", type=float, default=3.0)
    parser.add_argument("--poll", action="store_true", help="the whole command beside bare pyvisa")
    parser.add_argument("--memory", type=int, metavar="N", help="memory of the whole command over N records")
    args = parser.parse_args()
    if args.memory:
        memory(args.memory)
        return 0
    if args.poll:
        poll_beside_bare(max(args.seconds, 15.0))
        return 0
    channels = ["CH1", "CH2"][: args.channels]
    print(f"{'language':<24}{'samples':>9}{'bare/s':>10}{'ours/s':>10}{'ratio':>8}")
    for samples in args.samples:
        options = ("--samples", str(samples), "--instant", "--replay", "8")
        process, resource = start_scope(*options)
        try:
            for name, bare, dialect in (
                ("SCPI-1999", bare_scpi, SCPI_1999),
                ("header of named fields", bare_dialect, Dialect.load(DIALECT)),
            ):
                session, own = ours(resource, channels, dialect)
                rate_bare, rate_own = compare(bare(resource, channels), own, args.seconds)
                session.close()
                print(
                    f"{name:<24}{samples:>9,}{rate_bare:>10.1f}{rate_own:>10.1f}{rate_own / rate_bare:>8.2f}"
                )
        finally:
            process.terminate()
            process.wait(timeout=10)
    return 0


if __name__ == "__main__":
    sys.exit(main())
