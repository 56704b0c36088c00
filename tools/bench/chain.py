"""The measuring chain: what an oscilloscope makes of the waveforms.

Shown is (1 + gain)·v + offset + noise on a clock (1 + timebase)·t, through the input coupling, clipped to the
screen and quantised.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tools.bench.engine import Array
from tools.bench.simulate import Waves

STEPS = (1.0, 2.0, 5.0)
CODES_PER_DIVISION = 25


@dataclass(frozen=True)
class Input:
    """One channel's setting.

    ``noise`` rms in V, or relative to the screen with ``noise_divisions`` (divisions rms); ``range`` (low,
    high) in V, None for the smallest 1-2-5 setting that holds the waveform in eight divisions; ``bits`` None:
    no quantisation. ``corner`` (Hz) of the high-pass where ``coupling`` is "ac". ``ratio``: the export is
    divided by it (an unscaled probe).
    """

    gain: float = 0.0
    offset: float = 0.0
    noise: float = 0.0
    noise_divisions: float = 0.0
    bits: int | None = 8
    range: tuple[float, float] | None = None
    coupling: str = "dc"
    corner: float = 5.0
    ratio: float = 1.0


@dataclass(frozen=True, eq=False)
class Record:
    """What was recorded: volts by node, each of shape (samples,), at ``start + i·interval`` (s) as shown."""

    channels: dict[str, NDArray[np.float64]]
    interval: float
    start: float
    truth_begin: float


def measure(
    waves: Waves,
    nodes: Mapping[str, Input],
    interval: float,
    samples: int,
    *,
    timebase: float = 0.0,
    aperture: float = 0.0,
    begin: float | None = None,
    start: float = 0.0,
    seed: int = 0,
) -> Record:
    """Record some nodes.

    Parameters
    ----------
    nodes : mapping of node name to its channel's setting
    interval, samples : the record as shown (s, count)
    timebase : relative error of the clock; the samples are truly taken every interval/(1 + timebase)
    aperture : rms jitter of the sampling instants (s)
    begin : time (s) on the waves' axis at which the record begins; None: at random. Before 0 everything is at
    0 V. start : time stamp of the first sample (s)
    """
    rng = np.random.default_rng(seed)
    step = interval / (1.0 + timebase)
    begin = _begin(waves, step * samples, begin, rng)
    times = begin + step * np.arange(samples) + aperture * rng.standard_normal(samples)
    run_in = 0
    if any(i.coupling == "ac" for i in nodes.values()) and waves.repeats:
        run_in = min(int(3.0 / (2 * np.pi * min(i.corner for i in nodes.values()) * step)) + 1, 400_000)
    early = begin - step * np.arange(run_in, 0, -1)
    seen = _seen(waves, np.concatenate([early, times]))
    channels = {node: _shown(seen[node], setting, step, run_in, rng) for node, setting in nodes.items()}
    return Record(channels, interval, start, float(begin))


def _begin(waves: Waves, length: float, begin: float | None, rng: np.random.Generator) -> float:
    if begin is not None:
        return begin
    if not waves.oscillates:
        return 0.0
    if waves.repeats:
        return float(rng.uniform(0.0, waves.period))
    room = waves.span - waves.starts[0] - length
    if room < 0:
        raise ValueError(f"{waves.span - waves.starts[0]:.3g} s were simulated, {length:.3g} s are to be recorded")
    return float(waves.starts[0] + rng.uniform(0.0, min(room, waves.period)))


def _seen(waves: Waves, times: Array) -> dict[str, Array]:
    if waves.repeats:
        return waves.at(np.mod(times, waves.span))
    return {node: np.where(times < 0, 0.0, volts) for node, volts in waves.at(np.maximum(times, 0.0)).items()}


def _high_pass(volts: Array, corner: float, step: float, run_in: int) -> Array:
    """First-order high-pass, exact for an input that is straight between its samples."""
    from scipy.signal import lfilter

    x = 2 * np.pi * corner * step
    keep = np.exp(-x)
    gain = (1.0 - keep) / x
    level = float(volts[:run_in].mean()) if run_in else float(volts[0])
    inner = volts - level
    passed: Array = lfilter([gain, -gain], [1.0, -keep], inner)
    return passed


def screen(volts: Array) -> tuple[float, float]:
    """The smallest 1-2-5 setting that holds the waveform in eight of ten divisions: (low, high) in V."""
    low, high = float(volts.min()), float(volts.max())
    need = max(high - low, 1e-3 * max(abs(high), abs(low)), 1e-3) / 8.0
    decade = 10.0 ** np.floor(np.log10(need))
    division = next(s * decade for s in (*STEPS, 10.0) if s * decade >= need)
    middle = division * np.round(0.5 * (low + high) / division)
    return middle - 5.12 * division, middle + 5.12 * division


def _shown(volts: Array, setting: Input, step: float, run_in: int, rng: np.random.Generator) -> Array:
    if setting.coupling == "ac":
        volts = _high_pass(volts, setting.corner, step, run_in)
    volts = volts[run_in:]
    volts = (1.0 + setting.gain) * volts + setting.offset
    low, high = screen(volts) if setting.range is None else setting.range
    noise = setting.noise + setting.noise_divisions * (high - low) / 10.24
    volts = volts + noise * rng.standard_normal(volts.size)
    if setting.bits is not None:
        codes = 2**setting.bits
        quantum = (high - low) / codes
        volts = low + quantum * np.clip(np.floor((volts - low) / quantum), 0, codes - 1) + 0.5 * quantum
    else:
        volts = np.clip(volts, low, high)
    return volts / setting.ratio
