"""The whole of the cycle stage: a capture and what its channels are → the constants of one cycle."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from benchfit.capture.model import Capture
from benchfit.cycle.constants import Assignment, CycleConstants
from benchfit.cycle.levels import is_square
from benchfit.cycle.output import observe_output
from benchfit.cycle.observed import Observed
from benchfit.cycle.rest import observe_output_rest, observe_rest
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
    seen = observe_output(output) if output is not None else None
    found_output = seen.observed if seen is not None else None
    found_timing = observe_timing(timing) if timing is not None else None
    if found_output is None and found_timing is None:
        at_rest = [observe_rest(timing)] if timing is not None else []
        at_rest += [observe_output_rest(output)] if output is not None else []
        return _join(capture, traces, at_rest)
    return _join(capture, traces, [p for p in (found_timing, found_output) if p is not None])


def _join(
    capture: Capture, traces: list[Trace], parts: list[Observed]
) -> CycleConstants:
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
    oscillates = "period" in names
    remarks: tuple[Remark, ...] = ()
    if not oscillates:
        remarks = (Remark("no-oscillation", _rest_says(names, values)),)
    elif cycles < 3:
        remarks = (Remark("few-cycles", f"only {cycles:.2g} cycles in the record; take a longer capture"),)
    return CycleConstants(
        oscillates=oscillates,
        names=tuple(names),
        values=np.array(values),
        covariance=covariance,
        cycles=cycles,
        jitter=parts[0].jitter if parts else None,
        noise={t.node: t.noise for t in traces},
        spans={t.node: t.span for t in traces},
        resolutions={t.node: t.resolution for t in traces},
        coupling={t.node: t.assignment.coupling for t in traces},
        turns=capture.start + parts[0].turns,
        phases=parts[0].phases if parts else (),
        remarks=remarks,
        samples=capture.samples,
        interval=capture.interval,
    )


def _rest_says(names: list[str], values: list[float]) -> str:
    known = dict(zip(names, values, strict=True))
    says = "the record shows no oscillation"
    if "ramp_start" in known:
        says += f"; the node starts once from {known['ramp_start']:.4g} V"
        if "ramp_asymptote" in known:
            says += f" and heads for {known['ramp_asymptote']:.4g} V"
    if "rest" in known:
        says += f"; the node rests at {known['rest']:.4g} V"
    if "output_rest" in known:
        says += f"; the output stays at {known['output_rest']:.4g} V"
    return says


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
