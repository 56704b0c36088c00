"""The ends of a record: turns before the first and after the last passage, and phases cut off by the edge."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from benchfit.cycle.arrays import Array, Mask
from benchfit.cycle.phases import Corners, Fitted, Layout
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Turns, block_means, running_median
from benchfit.errors import Remark

_BLOCKS = 100
_CALM = 7


def with_ends(trace: Trace, turns: Turns) -> Turns:
    """Turns before the first and after the last passage, where the record shows one."""
    values = block_means(trace.values, turns.block)
    noise = trace.noise / np.sqrt(turns.block)
    index, top = turns.index, turns.top
    inside = (index + 0.5) / turns.block - 0.5
    heights = values[np.clip(np.round(inside).astype(int), 0, values.size - 1)]
    swing = (
        float(abs(np.median(heights[top]) - np.median(heights[~top]))) if top.any() and (~top).any() else 0.0
    )
    margin = max(6.0 * noise, 0.05 * swing)
    head = running_median(values[: int(inside[0])], _CALM) * (-1.0 if top[0] else 1.0)
    tail = running_median(values[int(np.ceil(inside[-1])) + 1 :], _CALM) * (-1.0 if top[-1] else 1.0)
    if head.size > 2 and head.max() - head[0] > margin:
        index = np.concatenate([[(int(head.argmax()) + 0.5) * turns.block - 0.5], index])
        top = np.concatenate([[not top[0]], top])
    if tail.size > 2 and tail.max() - tail[-1] > margin:
        place = int(np.ceil(inside[-1])) + 1 + int(tail.argmax())
        index = np.concatenate([index, [(place + 0.5) * turns.block - 0.5]])
        top = np.concatenate([top, [not top[-1]]])
    return Turns(index, top, turns.block)


def trim_ends(trace: Trace, layout: Layout, turns: Turns) -> Layout:
    """Leave out what lies before the first phase's and after the last phase's own extreme."""
    first, stop = layout.first.copy(), layout.stop.copy()
    values = block_means(trace.values[: stop[0]], turns.block) * (1.0 if layout.rising[0] else -1.0)
    if values.size > 1:
        first[0] = int(values.argmin()) * turns.block
    values = block_means(trace.values[first[-1] :], turns.block) * (-1.0 if layout.rising[-1] else 1.0)
    if values.size > 1:
        stop[-1] = min(trace.size, first[-1] + (int(values.argmin()) + 1) * turns.block)
    return Layout(first, np.maximum(stop, first + 1), layout.rising, layout.whole)


def begun(trace: Trace, layout: Layout) -> Layout:
    """Leave out what lies before the first phase's own extreme: a rest before the start-up, the end of a flyback."""
    block = max(1, int(layout.length[0]) // 200)
    values = block_means(trace.values[layout.first[0] : layout.stop[0]], block)
    values = values * (1.0 if layout.rising[0] else -1.0)
    if values.size == 0:
        return layout
    first = layout.first.copy()
    first[0] = min(int(first[0]) + int(values.argmin()) * block, int(layout.stop[0]) - 1)
    return replace(layout, first=first)


def extend_ends(fitted: Fitted, layout: Layout, trace: Trace, index: Array, top: Mask) -> Layout:
    """Let the first and the last phase reach as far as their curves stay within the cycle's corners.

    Beyond, only as far as the samples follow the curve all the same: a start-up from 0 V does.
    """
    heights = fitted.values_at(np.arange(index.size), index)[0]
    upper, lower = np.nanmedian(heights[top]), np.nanmedian(heights[~top])
    first, stop = layout.first.copy(), layout.stop.copy()
    for end in (0, layout.size - 1):
        if not fitted.sound[end]:
            continue
        rising = bool(layout.rising[end])
        target = (lower if rising else upper) if end == 0 else (upper if rising else lower)
        reach = fitted.model(rising).time_to(target, fitted.level[end : end + 1])[0] / trace.interval
        limit = fitted.middle[end] + reach
        if not np.isfinite(limit):
            continue
        if end == 0:
            first[0] = int(np.clip(np.ceil(limit), 0, stop[0] - 1))
            first[0] = follows(fitted, trace, end, int(first[0]), 0, abs(upper - lower))
        else:
            stop[-1] = int(np.clip(np.floor(limit) + 1, first[-1] + 1, trace.size))
            stop[-1] = follows(fitted, trace, end, int(stop[-1]), trace.size, abs(upper - lower))
    return Layout(first, stop, layout.rising, layout.whole)


def follows(
    fitted: Fitted, trace: Trace, phase: int, at: int, edge: int, swing: float, least: float = 0.06
) -> int:
    """How far from ``at`` towards the record's ``edge`` the samples go on along the phase's curve.

    Nowhere, where they leave it before it has gone on by a share ``least`` of the swing: next to a turn every
    curve is near the samples.
    """
    size = abs(edge - at)
    if size < 4:
        return at
    count = min(size, _BLOCKS)
    step = 1 if edge > at else -1
    cuts = at + step * (np.arange(count + 1) * size // count)
    begin, end = np.minimum(cuts[:-1], cuts[1:]), np.maximum(cuts[:-1], cuts[1:])
    middle = (begin + end - 1) / 2.0
    curve = fitted.values_at(np.full(count, phase), middle)[0]
    means = np.array([trace.values[b:e].mean() for b, e in zip(begin, end, strict=True)])
    limit = 5.0 * trace.noise / np.sqrt(end - begin) + 0.01 * swing
    good = np.abs(means - curve) < limit
    run = count if good.all() else int(np.argmin(good))
    # Where the curve is left, the last block or two that passed may be past the place already.
    run = run if run == count else run - 2
    gone = abs(float(curve[max(run - 1, 0)] - curve[0]))
    return int(cuts[run]) if run >= 2 and gone >= (max(least * swing, 6.0 * trace.noise) if least else 0.0) else at


def started(trace: Trace, fitted: Fitted, corner: Corners) -> list[Remark]:
    """``startup``, where the first phase begins well outside the cycle's range."""
    layout = fitted.layout
    if not fitted.sound[0] or not corner.top.any() or corner.top.all():
        return []
    upper, lower = np.median(corner.voltage[corner.top]), np.median(corner.voltage[~corner.top])
    begin = float(fitted.values_at(np.zeros(1, dtype=np.int64), layout.first[:1].astype(float))[0][0])
    return started_beyond(trace, begin, bool(layout.rising[0]), float(lower), float(upper))


def started_beyond(trace: Trace, begin: float, rising: bool, lower: float, upper: float) -> list[Remark]:
    """``startup``, where the first phase begins at a voltage outside the cycle's range."""
    beyond = lower - begin if rising else begin - upper
    if beyond < max(0.05 * (upper - lower), 5.0 * trace.noise):
        return []
    says = f"{trace.node}: the record begins with the start-up from {begin:.3g} V; its curve is used, its duration not"
    return [Remark("startup", says)]
