"""Short phases beside long ones: only samples that have left the neighbours' curves belong to a flyback.

A sample taken in the very corner, or one too many at either end, bends a phase of a few samples out of all
recognition; the long neighbours, which are known far better, say which samples are no longer theirs.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.phases import Fitted, Layout
from benchfit.cycle.trace import Trace

SHORT = 0.2
DEPARTED = 4.5
_STEPS = 8


def own_samples(fitted: Fitted, layout: Layout, trace: Trace, sigma: float) -> Layout:
    """The layout with each short phase cut to the samples that both neighbours' curves miss.

    ``sigma`` (V) is the noise of a sample. A short phase is one of under a fifth of its neighbours' length.
    """
    length = layout.length
    inner = np.arange(1, layout.size - 1)
    short = inner[(length[inner] < SHORT * length[inner - 1]) & (length[inner] < SHORT * length[inner + 1])]
    short = short[fitted.sound[short - 1] & fitted.sound[short + 1]]
    if short.size == 0:
        return layout
    limit = max(DEPARTED * sigma, 0.005 * float(np.ptp(trace.values[:: max(1, trace.size // 10_000)])))
    first, stop = layout.first.copy(), layout.stop.copy()
    for _ in range(_STEPS):
        room = stop[short] - first[short] > 2
        if not np.any(room):
            break
        head = room & (np.abs(_away(fitted, trace, short - 1, first[short])) < limit)
        tail = room & (np.abs(_away(fitted, trace, short + 1, stop[short] - 1)) < limit)
        if not np.any(head | tail):
            break
        first[short[head]] += 1
        stop[short[tail]] -= 1
    return replace(layout, first=first, stop=np.maximum(stop, first + 1))


def _away(
    fitted: Fitted, trace: Trace, phase: NDArray[np.int64], index: NDArray[np.int64]
) -> NDArray[np.float64]:
    curve = fitted.values_at(phase, index.astype(float))[0]
    return np.asarray(np.nan_to_num(trace.values[index] - curve, nan=np.inf))
