"""Spikes: a few samples that lie far off the curve between others that follow it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.corners import Met, fit_corners
from benchfit.cycle.fold import bins_per_phase, chunks, gather
from benchfit.cycle.phases import Fitted
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Turns

_FAR = 6.0
_WIDTH = 4
_AWAY = 3


def without_spikes(trace: Trace, met: Met) -> tuple[Trace, Met, int]:
    """The record and its fit with spikes left out, and how many samples that takes.

    A test of the residuals asks for it: on white noise not one sample in a billion is six σ off.
    """
    total = 0
    for _ in range(3):
        spikes = find_spikes(trace, met.fitted)
        if spikes.size == 0:
            break
        valid = np.ones(trace.size, dtype=bool) if trace.valid is None else trace.valid.copy()
        valid[spikes] = False
        cleaned = replace(trace, valid=valid)
        found = fit_corners(cleaned, Turns(met.index, met.top, 1))
        if found is None:
            break
        trace, met, total = cleaned, found, total + int(spikes.size)
    return trace, met, total


def find_spikes(trace: Trace, fitted: Fitted) -> Index:
    """Samples in short runs that are far off their phase's curve and not next to a turn."""
    layout = fitted.layout
    mine = np.flatnonzero(fitted.sound & (layout.length > 2 * _AWAY + 2))
    if mine.size == 0:
        return np.empty(0, dtype=np.int64)
    bins = bins_per_phase(mine.size)
    sigma = _robust_sigma(trace, fitted, mine)
    suspects, heights = [], []
    for part in chunks(np.minimum(layout.length[mine], bins)):
        phases = mine[part]
        b = gather(trace, layout.first[phases], layout.stop[phases], fitted.middle[phases], bins)
        index = fitted.middle[phases][b.cycle] + b.t / trace.interval
        residual = b.v - fitted.values_at(phases[b.cycle], index)[0]
        hit = np.flatnonzero(np.abs(residual) * np.sqrt(b.n) > _FAR * sigma)
        if hit.size > 0.05 * b.n.size:
            # Not spikes but a curve that does not fit.
            return np.empty(0, dtype=np.int64)
        for i in hit:
            first = round(index[i] - (b.n[i] - 1) / 2.0)
            where = np.arange(first, first + int(b.n[i]))
            curve = fitted.values_at(np.full(where.size, phases[b.cycle[i]]), where.astype(float))[0]
            away = np.abs(trace.values[where] - curve) / sigma
            suspects.append(where[away > _FAR])
            heights.append(away[away > _FAR])
    if not suspects:
        return np.empty(0, dtype=np.int64)
    index, first = np.unique(np.concatenate(suspects), return_index=True)
    return _isolated(index.astype(np.int64), np.concatenate(heights)[first], fitted)


def _robust_sigma(trace: Trace, fitted: Fitted, mine: Index) -> float:
    """Noise of a sample from the residuals' median, of a few phases; spikes do not move it."""
    few = mine[np.linspace(0, mine.size - 1, min(mine.size, 40)).astype(int)]
    few = np.unique(few)
    layout = fitted.layout
    b = gather(trace, layout.first[few], layout.stop[few], fitted.middle[few], 200)
    index = fitted.middle[few][b.cycle] + b.t / trace.interval
    residual = (b.v - fitted.values_at(few[b.cycle], index)[0]) * np.sqrt(b.n)
    return max(1.4826 * float(np.median(np.abs(residual))), float(trace.resolution / np.sqrt(12.0)), 1e-300)


def _isolated(index: Index, height: Array, fitted: Fitted) -> Index:
    """Those of short runs that are no matter of the turns: rounded corners and ringing come with every one."""
    starts = np.flatnonzero(np.concatenate([[True], np.diff(index) > 1]))
    lengths = np.diff(np.concatenate([starts, [index.size]]))
    run = np.repeat(np.arange(starts.size), lengths)
    layout = fitted.layout
    phase = np.clip(np.searchsorted(layout.first, index, side="right") - 1, 0, layout.size - 1)
    after, before = index - layout.first[phase], layout.stop[phase] - 1 - index
    near = np.minimum(after, before) < np.maximum(_AWAY, 0.1 * layout.length[phase])
    # Next to a turn a sample that is off may be no more than a turn that came a little early or late.
    keep = np.ones(starts.size, dtype=bool)
    keep[run[near & (height < 2.5 * _FAR)]] = False
    for kind in (True, False):
        phases = int(np.sum(layout.rising == kind))
        for side in (after < before, after >= before):
            mine = near & side & (layout.rising[phase] == kind)
            touched = np.unique(phase[mine]).size
            if touched > 0.25 * phases and not (touched == 1 and phases >= 3):
                keep[run[mine]] = False
    return np.asarray(index[(keep & (lengths <= _WIDTH))[run]])
