"""The whole of the cycle stage: a capture and what its channels are → the constants of one cycle."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from benchfit.capture.model import Capture
from benchfit.cycle.constants import Assignment, CycleConstants
from benchfit.cycle.levels import is_square
from benchfit.cycle.output import observe_output
from benchfit.cycle.observed import Observed
from benchfit.cycle.timing import observe_timing
from benchfit.cycle.trace import Trace, prepare
from benchfit.errors import CaptureError, Remark


def measure(capture: Capture, assignments: Sequence[Assignment]) -> CycleConstants:
    """Constants of one cycle with the record's own covariance.

    Parameters
    ----------
    capture : Capture
    assignments : sequence of Assignment
        What each channel was clipped to; channels without one are not looked at.

    Raises
    ------
    CaptureError
        No assignment, a channel that the capture does not have, or one without a number.
    """
    if not assignments:
        raise CaptureError(f"{capture.path}: no channel is assigned to a node; say which in [channels]")
    traces = [prepare(capture, a) for a in assignments]
    timing = next((t for t in traces if t.assignment.shape != "square"), None)
    output = next((t for t in traces if t.assignment.shape == "square"), None)
    found_output = observe_output(output)[0] if output is not None else None
    found_timing = observe_timing(timing) if timing is not None else None
    return _join(capture, traces, found_timing, found_output)


def _join(
    capture: Capture, traces: list[Trace], timing: Observed | None, output: Observed | None
) -> CycleConstants:
    parts = [p for p in (timing, output) if p is not None]
    names: list[str] = []
    values: list[float] = []
    blocks = []
    for part in parts:
        keep = [i for i, n in enumerate(part.names) if n not in names]
        names += [part.names[i] for i in keep]
        values += [float(part.values[i]) for i in keep]
        blocks.append(part.covariance[np.ix_(keep, keep)])
    covariance = np.zeros((len(names), len(names)))
    at = 0
    for block in blocks:
        covariance[at : at + len(block), at : at + len(block)] = block
        at += len(block)
    cycles = capture.samples * capture.interval / values[names.index("period")] if "period" in names else 0.0
    remarks = ()
    if parts and cycles < 3:
        remarks = (Remark("few-cycles", f"only {cycles:.2g} cycles in the record; take a longer capture"),)
    return CycleConstants(
        oscillates=bool(parts),
        names=tuple(names),
        values=np.array(values),
        covariance=covariance,
        cycles=cycles,
        jitter=parts[0].jitter if parts else None,
        noise={t.node: t.noise for t in traces},
        spans={t.node: t.span for t in traces},
        resolutions={t.node: t.resolution for t in traces},
        coupling={t.node: t.assignment.coupling for t in traces},
        turns=parts[0].turns if parts else np.empty(0),
        phases=parts[0].phases if parts else (),
        remarks=remarks,
        samples=capture.samples,
        interval=capture.interval,
    )


def guess(capture: Capture) -> tuple[Assignment, ...]:
    """Nodes of a capture without a build sheet: a square channel is the output, another the capacitor."""
    square = []
    for channel in capture.channels:
        if channel.unit not in ("V", "") or not np.isfinite(channel.values).any():
            continue
        trace = prepare(capture, Assignment(channel.name, "capacitor"))
        square.append((channel.name, is_square(trace)))
    found: list[Assignment] = []
    for name, two_state in square:
        node = "output" if two_state else "capacitor"
        if all(a.node != node for a in found):
            found.append(Assignment(name, node, "square" if two_state else "timing"))
    return tuple(found)
