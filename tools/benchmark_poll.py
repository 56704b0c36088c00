"""How fast acquisitions come in, beside bare pyvisa queries of the same data in the same run.

``python tools/benchmark_poll.py [--samples 4000] [--channels 2] [--seconds 3]``

The loopback instrument runs in a process of its own with records digitised beforehand. Bare means: pyvisa's
own write, query and query_binary_values, with the commands that need no answer sent in one segment with the
next question (else every acquisition waits 40 ms for an acknowledgement, and we would be flattered).
"""

from __future__ import annotations

import argparse
import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

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

    def acquire() -> int:
        samples = 0
        visa.query("INIT\n*OPC?")
        for channel in channels:
            float(visa.query("SENS:SWE:TINT?"))
            float(visa.query("SENS:SWE:OFFS:TIME?"))
            values = visa.query_binary_values(f"TRAC? {channel}", "f", container=np.array)
            samples += values.size
        visa.query("SYST:ERR?")
        return samples

    return acquire


def bare_dialect(resource: str, channels: list[str]) -> Callable[[], int]:
    """Bare pyvisa, the dialect of named fields."""
    import numpy as np

    visa = _open(resource)
    visa.write("*CLS\nREC:FORM U8")

    def acquire() -> int:
        samples = 0
        visa.query("RUN:ONE\n*OPC?")
        for channel in channels:
            cells = visa.query(f"REC:SEL {channel}\nREC:HEAD?").split(",")
            raw = visa.query_binary_values("REC:DATA?", "B", container=np.array)
            samples += (raw * float(cells[3]) + float(cells[4])).size
        visa.query("SYST:ERR?")
        return samples

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

    def acquire() -> int:
        capture = session.acquire().capture
        assert capture is not None
        return capture.samples * len(capture.channels)

    return session, acquire


def compare(bare: Callable[[], int], own: Callable[[], int], seconds: float) -> tuple[float, float]:
    """Acquisitions per second of both: one of each in turn, so that both see the same machine; by medians."""
    times: tuple[list[float], list[float]] = ([], [])
    end = time.perf_counter() + 2 * seconds
    while time.perf_counter() < end:
        for acquire, spent in zip((bare, own), times, strict=True):
            begin = time.perf_counter()
            acquire()
            spent.append(time.perf_counter() - begin)
    return 1.0 / statistics.median(times[0]), 1.0 / statistics.median(times[1])


def main() -> int:
    """Run it and print a table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--samples", type=int, nargs="*", default=[1000, 4000, 100_000])
    parser.add_argument("--channels", type=int, default=2, choices=(1, 2))
    parser.add_argument("--seconds", type=float, default=3.0)
    args = parser.parse_args()
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
