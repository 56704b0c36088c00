"""The whole of the cycle stage: a capture and what its channels are → the constants of one cycle."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from benchfit.capture.model import Capture
from benchfit.cycle import conditions
from benchfit.cycle.constants import Assignment, CycleConstants
from benchfit.cycle.join import join, without_droop
from benchfit.cycle.observed import Observed
from benchfit.cycle.output import observe_output
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
        What each channel was clipped to; channels without one are not looked at. The first that is no square
        output times the cycle.

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
    # Records that are no cycle at all can drive a fit anywhere; what does not come back finite is not used.
    with np.errstate(over="ignore", invalid="ignore", divide="ignore", under="ignore"):
        parts = _oscillating(timing, output)
        oscillates = bool(parts)
        if not oscillates:
            parts = [observe_rest(timing)] if timing is not None else []
            parts += [observe_output_rest(output)] if output is not None else []
    noise = {t.node: t.noise for t in traces} | {p.node: p.noise for p in parts}
    return _result(capture, traces, parts, noise, _remarks(capture, traces, parts, oscillates))


def _oscillating(timing: Trace | None, output: Trace | None) -> list[Observed]:
    """What the nodes show of a cycle; nothing where there is none."""
    seen = observe_output(output) if output is not None else None
    found = [seen.observed] if seen is not None and seen.observed is not None else []
    if timing is not None:
        try:
            timed = observe_timing(timing, seen)
        except np.linalg.LinAlgError:
            timed = None
        found = [timed, *found] if timed is not None else found
    return [p for p in found if np.all(np.isfinite(p.values)) and np.all(np.isfinite(p.covariance))]


def _result(
    capture: Capture,
    traces: list[Trace],
    parts: list[Observed],
    noise: dict[str, float],
    remarks: tuple[Remark, ...],
) -> CycleConstants:
    names, values, covariance = join(parts)
    timing = next((t for t in traces if t.assignment.shape != "square"), None)
    if timing is not None and timing.assignment.coupling == "ac":
        values, covariance = without_droop(names, values, covariance)
    period = float(values[names.index("period")]) if "period" in names else 0.0
    return CycleConstants(
        oscillates=period > 0,
        names=names,
        values=values,
        covariance=covariance,
        cycles=capture.samples * capture.interval / period if period > 0 else 0.0,
        jitter=next((p.jitter for p in parts if p.jitter is not None), None),
        highest=next((p.highest for p in parts if p.highest is not None), None),
        lowest=next((p.lowest for p in parts if p.lowest is not None), None),
        noise=noise,
        spans={t.node: t.span for t in traces},
        resolutions={t.node: t.resolution for t in traces},
        coupling={t.node: t.assignment.coupling for t in traces},
        turns=capture.start + parts[0].turns,
        phases=tuple(f for p in parts for f in p.phases),
        remarks=remarks,
        samples=capture.samples,
        interval=capture.interval,
    )


def _remarks(
    capture: Capture,
    traces: list[Trace],
    parts: list[Observed],
    oscillates: bool,
) -> tuple[Remark, ...]:
    remarks = [r for p in parts for r in p.remarks]
    if oscillates:
        period = parts[0].value("period")
        shares = tuple(p.value(n) for p in parts for n in ("charge_share", "high_share") if n in p.names)
        remarks += conditions.sampling(period, shares, capture.samples, capture.interval)
        for part in parts[:1]:
            remarks += conditions.drift(part) or conditions.ripple(part, capture.interval)
    else:
        remarks.append(Remark("no-oscillation", _rest_says(parts)))
    remarks += conditions.clipping(traces) + conditions.quantisation(traces) + conditions.coupling(traces)
    unique: dict[str, Remark] = {}
    for remark in remarks:
        old = unique.get(remark.code)
        unique[remark.code] = remark if old is None else Remark(remark.code, f"{old.says}; {remark.says}")
    return tuple(unique.values())


def _rest_says(parts: list[Observed]) -> str:
    known = {n: float(v) for p in parts for n, v in zip(p.names, p.values, strict=True)}
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
