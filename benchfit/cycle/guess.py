"""What the channels of a capture are likely to be, where no build sheet says."""

from __future__ import annotations

import numpy as np

from benchfit.capture.model import Capture
from benchfit.cycle.constants import Assignment
from benchfit.cycle.levels import is_square, state_levels
from benchfit.cycle.trace import Trace, prepare


def guess(capture: Capture) -> tuple[Assignment, ...]:
    """Nodes of a capture without a build sheet.

    One channel of two state levels is the output, any other the capacitor's node. Of two channels the squarer
    is the output. Names decide nothing: they mislead as often as they help. Channels that are not in volts, are
    constant, or beyond the second are left alone.
    """
    traces = []
    for channel in capture.channels:
        if channel.unit in ("V", "") and np.isfinite(channel.values).any():
            traces.append(prepare(capture, Assignment(channel.name, "capacitor")))
    alive = [t for t in traces if t.span[1] - t.span[0] > 8.0 * t.noise] or traces[:1]
    if len(alive) == 1:
        return (_as(alive[0], is_square(alive[0])),)
    ranked = sorted(alive[:2], key=_squareness)
    both = [(ranked[0], False), (ranked[1], is_square(ranked[1]))]
    if not both[1][1]:
        # Neither has two states: the first is taken, and the other left alone.
        return (_as(alive[0], False),)
    order = {t.assignment.channel: i for i, t in enumerate(alive)}
    both.sort(key=lambda x: order[x[0].assignment.channel])
    return tuple(_as(t, square) for t, square in both)


def _squareness(trace: Trace) -> float:
    return state_levels(trace).settled


def _as(trace: Trace, square: bool) -> Assignment:
    node, shape = ("output", "square") if square else ("capacitor", "timing")
    return Assignment(trace.assignment.channel, node, shape)  # type: ignore[arg-type]
