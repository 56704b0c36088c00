"""Captures for the tests of the cycle stage.

Closed-form exponential trains ask what the estimators make of noise, and need an exact truth; everything that
concerns a circuit comes from ``tools.cycle_families``, which integrates it.
"""

from __future__ import annotations

import numpy as np

from benchfit.capture.model import Capture, Channel
from benchfit.cycle import Assignment
from tools.study_cycle import Train

CAPACITOR = (Assignment("CH1", "capacitor"),)


def train(cycles: float = 5.3, noise: float = 0.01, seed: int = 0, phase: float = 0.3, x_up: float = 3.0,
          x_down: float = 2.0, per_cycle: float = 300.0) -> tuple[Capture, dict[str, float]]:
    """A closed-form train and its truth."""
    made = Train(x_up, x_down, cycles, per_cycle, noise)
    return made.capture(phase, seed), made.truth()


def capture_of(values: np.ndarray, interval: float = 1e-3, resolution: float = 0.0) -> Capture:
    """One channel."""
    return Capture("made", interval, 0.0, (Channel("CH1", "V", values, resolution),))


def jittered(walk: float, white: float, cycles: int, rng: np.random.Generator) -> np.ndarray:
    """Instants of a steady cycle of 1 s with accumulating and white jitter (s rms per cycle, per instant)."""
    steps = 1.0 + walk * rng.standard_normal(cycles)
    return np.concatenate([[0.0], np.cumsum(steps)]) + white * rng.standard_normal(cycles + 1)
