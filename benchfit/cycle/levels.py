"""State levels of a square output by histogram (IEEE Std 181), and whether a waveform has two states at all."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.noise import stretches
from benchfit.cycle.trace import Trace

_BINS = 256


@dataclass(frozen=True)
class States:
    """High and low level (V), and the share of samples that lie near one of them."""

    high: float
    low: float
    settled: float

    @property
    def amplitude(self) -> float:
        return self.high - self.low

    def at(self, share: float) -> float:
        """Reference level (V) at a share of the amplitude."""
        return self.low + share * self.amplitude


def state_levels(trace: Trace) -> States:
    """Modes of the upper and of the lower half of the histogram, refined to the mean around each."""
    parts = stretches(trace.size, 1 << 16, 8)
    values = np.concatenate([trace.values[s] for s in parts])
    low_end, high_end = _robust_extremes(values, trace.noise)
    if not high_end > low_end:
        return States(high_end, low_end, 1.0)
    counts, edges = np.histogram(values, _BINS, (low_end, high_end))
    middle = _BINS // 2
    centres = (edges[:-1] + edges[1:]) / 2
    low = centres[int(np.argmax(_smooth(counts[:middle])))]
    high = centres[middle + int(np.argmax(_smooth(counts[middle:])))]
    for narrow in (1.0, 1.0, 0.125, 0.125):
        # Edges on their way are near a level too: at last only what is within the noise counts.
        reach = max(4.0 * trace.noise, narrow * 0.04 * (high - low))
        near_low, near_high = np.abs(values - low) <= reach, np.abs(values - high) <= reach
        low = float(values[near_low].mean()) if near_low.any() else low
        high = float(values[near_high].mean()) if near_high.any() else high
    reach = max(4.0 * trace.noise, 0.04 * (high - low))
    settled = (np.abs(values - low) <= reach) | (np.abs(values - high) <= reach)
    return States(float(high), float(low), float(settled.mean()))


def _robust_extremes(values: Array, noise: float) -> tuple[float, float]:
    """Extremes without the rare spikes: the 0.2 % and 99.8 % points where these are close to them."""
    low, high = float(values.min()), float(values.max())
    inner_low, inner_high = (float(x) for x in np.quantile(values, [0.002, 0.998]))
    spread = inner_high - inner_low
    if spread > 20.0 * noise:
        low = inner_low if inner_low - low > 0.5 * spread else low
        high = inner_high if high - inner_high > 0.5 * spread else high
    return low, high


def _smooth(counts: Index) -> Array:
    return np.convolve(counts, [0.5, 1.0, 0.5], mode="same")


def is_square(trace: Trace) -> bool:
    """Whether nearly all of the waveform sits at one of two levels.

    A ramp or an exponential has no state level (IEEE Std 181 speaks of two-state waveforms only); of a charge
    towards an asymptote that it all but reaches, the parts near the levels are still far from all.
    """
    states = state_levels(trace)
    return states.amplitude > 6.0 * trace.noise and states.settled > 0.7 and _plateaus(trace, states)


def _plateaus(trace: Trace, states: States) -> bool:
    """Both levels are held for stretches, not just passed."""
    reach = max(4.0 * trace.noise, 0.04 * states.amplitude)
    shares = []
    for level in (states.low, states.high):
        shares.append(
            np.mean([np.mean(np.abs(trace.values[s] - level) <= reach) for s in stretches(trace.size)])
        )
    return bool(min(shares) > 0.01)
