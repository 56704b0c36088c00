"""What the cycle stage costs, each time as a ratio in the same run: ``python tools/benchmark_cycle.py [--quick]``.

1. The whole stage on ten million samples against ``pandas.read_csv`` of the same file, and the memory it takes beyond
   the capture.
2. The fit's own time once the samples are binned, for 10⁵ and 10⁷ samples.
3. The whole stage at 10⁶ samples against what a practitioner would write in an hour (pandas, ``scipy.signal`` for
   the edges, ``curve_fit`` of the piecewise exponential over the whole record), in time and in error.
"""

from __future__ import annotations

import sys
import tempfile
import threading
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from benchfit.capture.model import Capture  # noqa: E402
from benchfit.cycle import measure  # noqa: E402
from benchfit.cycle.fold import bins_per_phase, gather  # noqa: E402
from benchfit.cycle.phase import fit_exponentials  # noqa: E402
from benchfit.cycle.trace import prepare  # noqa: E402
from tools.study_cycle import NODE, Train  # noqa: E402

Array = NDArray[np.float64]


def resident() -> float:
    """Resident memory of this process (MB); 0 where the system does not tell."""
    try:
        pages = int(Path("/proc/self/statm").read_text().split()[1])
    except (OSError, ValueError, IndexError):
        return 0.0
    return pages * 4096 / 1e6


def watched(work: Callable[[], object]) -> tuple[float, float]:
    """Seconds that some work takes, and by how many MB the process grew at most meanwhile."""
    before, peak, done = resident(), [0.0], threading.Event()

    def look() -> None:
        while not done.is_set():
            peak[0] = max(peak[0], resident() - before)
            time.sleep(0.002)

    watcher = threading.Thread(target=look)
    watcher.start()
    began = time.perf_counter()
    work()
    taken = time.perf_counter() - began
    done.set()
    watcher.join()
    return taken, peak[0]


def against_reading(samples: int) -> None:
    """Stage against ``pandas.read_csv``, for few and for many cycles."""
    import pandas as pd

    print(f"\n{samples:,} samples: the whole stage against pandas.read_csv of the same file")
    for cycles in (5.3, 1e3, 1e4, 1e5, samples / 10.0):
        capture = Train(3.0, 2.0, cycles, samples / cycles, 0.01).capture(0.3, 1)
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / "capture.csv"
            pd.DataFrame({"Time (s)": capture.time, "CH1 (V)": capture.channels[0].values}).to_csv(
                path, index=False, float_format="%.9e"
            )
            reading = min(watched(partial(pd.read_csv, path))[0] for _ in range(2))
        results = [watched(partial(measure, capture, NODE)) for _ in range(2)]
        taken, grown = min(r[0] for r in results), max(r[1] for r in results)
        own = capture.samples * 8 / 1e6
        print(
            f"  {cycles:12,.0f} cycles: {taken:6.2f} s against {reading:6.2f} s, ratio {taken / reading:5.2f};"
            f" memory {grown:6.0f} MB beyond the capture's {own:.0f} MB"
        )


def once_binned() -> None:
    """Time of the fit itself for two lengths of the record."""
    print("\nthe fit once binned (20 cycles)")
    times = {}
    for samples in (100_000, 10_000_000):
        train = Train(3.0, 2.0, 20.0, samples / 20.0, 0.01)
        trace = prepare(train.capture(0.0, 1), NODE[0])
        rise = train.times[0] / train.interval
        first = np.ceil(np.arange(20) * train.per_cycle).astype(np.int64)
        stop = np.minimum((first + rise).astype(np.int64), trace.size)
        middle = (first + stop - 1) / 2.0
        b = gather(trace, first, stop, middle, bins_per_phase(20))
        repeats = []
        for _ in range(30):
            began = time.perf_counter()
            fit_exponentials(b.t, b.v, b.cycle, b.n, b.spread)
            repeats.append(time.perf_counter() - began)
        times[samples] = float(np.median(repeats))
        print(f"  {samples:12,} samples, {b.t.size} bins: {1e3 * times[samples]:.2f} ms")
    print(f"  ratio {times[10_000_000] / times[100_000]:.2f}")


def practitioner(capture: Capture) -> dict[str, float]:
    """An hour's work: smoothed extremes for the turns, ``curve_fit`` of the piecewise exponential over everything."""
    import pandas as pd
    from scipy.optimize import curve_fit
    from scipy.signal import find_peaks

    t, v = capture.time, capture.channels[0].values
    swing = float(np.ptp(v))
    smooth = pd.Series(v).rolling(max(3, v.size // 2000), center=True, min_periods=1).mean().to_numpy()
    tops, _ = find_peaks(smooth, prominence=0.5 * swing)
    bottoms, _ = find_peaks(-smooth, prominence=0.5 * swing)
    period = float(np.mean(np.diff(t[tops])))
    rises = [t[tops[tops > b][0]] - t[b] for b in bottoms if np.any(tops > b)]
    start = [period, float(t[bottoms[0]]), float(np.median(rises)) / period, float(smooth[tops].mean()),
             float(smooth[bottoms].mean()), 2.0 / period, 2.0 / period]

    def model(x: Array, p: float, t0: float, share: float, upper: float, lower: float, k1: float, k2: float) -> Array:
        u = np.mod(x - t0, p)
        rise, fall = share * p, (1 - share) * p
        a = lower + (upper - lower) / -np.expm1(-k1 * rise)
        b = upper + (lower - upper) / -np.expm1(-k2 * fall)
        return np.where(u < rise, a - (a - lower) * np.exp(-k1 * u), b - (b - upper) * np.exp(-k2 * (u - rise)))

    found, _ = curve_fit(model, t, v, start, maxfev=4000)
    names = ("period", "t0", "charge_share", "upper", "lower", "charge_curvature", "discharge_curvature")
    return dict(zip(names, (float(x) for x in found), strict=True))


def against_practitioner(samples: int, repeats: int) -> None:
    """Time and error against an hour's work."""
    print(f"\n{samples:,} samples, 20.4 cycles, against an hour's work with pandas, scipy.signal and curve_fit")
    train = Train(3.0, 2.0, 20.4, samples / 20.4, 0.01)
    truth = train.truth()
    names = ("period", "charge_share", "upper", "lower", "charge_curvature", "discharge_curvature")
    errors: dict[str, list[Array]] = {"stage": [], "practitioner": []}
    times: dict[str, list[float]] = {"stage": [], "practitioner": []}
    for k in range(repeats):
        capture = train.capture(0.05 + 0.9 * k / repeats, 100 + k)
        began = time.perf_counter()
        constants = measure(capture, NODE)
        times["stage"].append(time.perf_counter() - began)
        errors["stage"].append(np.array([constants.value(n) / truth[n] - 1 for n in names]))
        began = time.perf_counter()
        theirs = practitioner(capture)
        times["practitioner"].append(time.perf_counter() - began)
        errors["practitioner"].append(np.array([theirs[n] / truth[n] - 1 for n in names]))
    quick, slow = (float(np.median(times[w])) for w in ("stage", "practitioner"))
    print(f"  {quick:.3f} s against {slow:.2f} s: {slow / quick:.0f} times faster")
    for i, name in enumerate(names):
        ours, others = (float(np.sqrt(np.mean([e[i] ** 2 for e in errors[w]]))) for w in ("stage", "practitioner"))
        print(f"  {name:20s} rms relative error {ours:.2e} against {others:.2e}")


def main(words: list[str]) -> None:
    quick = "--quick" in words
    measure(Train(3.0, 2.0, 4.4, 300.0, 0.01).capture(0.1, 0), NODE)
    against_reading(1_000_000 if quick else 10_000_000)
    once_binned()
    against_practitioner(200_000 if quick else 1_000_000, 3)


if __name__ == "__main__":
    main(sys.argv[1:])
