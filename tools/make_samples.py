"""Make the sample captures and their build sheets anew: ``python tools/make_samples.py``.

Every scenario is invented. What was built (the answer), the size of the fault and the seeds were fixed before the
program was run on a capture for the first time, and are never tuned to it. The captures come from the bench
(``tools/bench``), that is from integrated differential equations.
"""

from __future__ import annotations

import sys
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
if str(ROOT) not in sys.path:
    sys.path.insert(0, str(ROOT))

from tools.bench import simulate  # noqa: E402
from tools.bench.chain import Input, measure  # noqa: E402
from tools.bench.write import write  # noqa: E402
from tools.samples import SHEETS  # noqa: E402


@dataclass(frozen=True)
class Sample:
    """One capture: what was built, how it was looked at, how it was written down.

    ``built`` holds the true values (SI); ``channels`` each node's name in the file and its input's setting.
    """

    name: str
    circuit: str
    built: Mapping[str, float]
    channels: Mapping[str, tuple[str, Input]]
    interval: float
    samples: int
    seed: int
    layout: str = "unit in header"
    probe: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    timebase: float = 0.0
    start: str = "running"
    cycles: int = 1
    begin: float | None = None
    stamp: float = 0.0
    options: Mapping[str, float] = field(default_factory=dict)


X10 = (10e6, 12e-12)

SAMPLES = (
    # Healthy: every part inside its tolerance.
    Sample("tide_gate_pacer", "op-amp",
           {"R": 47.22e3, "C": 98.1e-9, "R_top": 22.11e3, "R_bottom": 22.03e3, "V_high": 10.62, "V_low": -9.87},
           {"capacitor": ("CH1", Input(gain=0.006, offset=0.021, noise_divisions=0.03)),
            "output": ("CH2", Input(gain=-0.011, offset=-0.05, noise_divisions=0.02))},
           interval=10e-6, samples=4000, seed=4101, probe={"capacitor": X10}, timebase=11e-6, stamp=-0.02),
    # C is 26 % too large; one resistor sets both times, and only the capacitor's node was looked at.
    Sample("hive_scale_clock", "op-amp",
           {"R": 10.04e3, "C": 27.72e-9, "R_top": 9.97e3, "R_bottom": 14.95e3, "V_high": 4.03, "V_low": -3.96},
           {"capacitor": ("Channel 1", Input(gain=-0.008, offset=0.012, noise_divisions=0.04))},
           interval=0.5e-6, samples=5000, seed=4102, probe={"capacitor": X10}, timebase=-7e-6, layout="unit row",
           stamp=-1.25e-3),
    # A leaky electrolytic: 1.3 Mohm across it.
    Sample("glasshouse_vent_pulser", "op-amp",
           {"R": 218.7e3, "C": 2.31e-6, "R_top": 47.3e3, "R_bottom": 33.1e3, "V_high": 7.91, "V_low": -7.64,
            "R_leak": 1.3e6},
           {"capacitor": ("A", Input(gain=0.009, offset=-0.02, noise_divisions=0.03)),
            "output": ("B", Input(gain=0.004, offset=0.03, noise_divisions=0.03))},
           interval=1e-3, samples=6000, seed=4103, probe={"capacitor": X10}, layout="start and increment"),
)


def make(sample: Sample, folder: Path) -> None:
    """Write one capture and its build sheet."""
    waves = simulate(sample.circuit, sample.built, probe=sample.probe, cycles=sample.cycles, seed=sample.seed,
                     start=sample.start, **sample.options)
    settings = {node: setting for node, (_, setting) in sample.channels.items()}
    record = measure(waves, settings, sample.interval, sample.samples, timebase=sample.timebase, begin=sample.begin,
                     start=sample.stamp, seed=sample.seed + 1)
    names = {node: name for node, (name, _) in sample.channels.items()}
    write(folder / f"{sample.name}.csv", record, names, sample.layout)
    (folder / f"{sample.name}.toml").write_bytes(SHEETS[sample.name].encode())


def main(folder: Path = ROOT / "sample_captures") -> None:
    """Make all of them."""
    folder.mkdir(exist_ok=True)
    for sample in SAMPLES:
        make(sample, folder)


if __name__ == "__main__":
    main(*(Path(word) for word in sys.argv[1:2]))
