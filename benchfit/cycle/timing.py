"""What a timing node shows, by the route that its waveform asks for."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.edges import Edges
from benchfit.cycle.long import MANY, observe_long
from benchfit.cycle.meeting import observe_meeting
from benchfit.cycle.observed import Observed
from benchfit.cycle.output import OutputFound
from benchfit.cycle.ramps import fast_direction, fit_ramps, observe_ramps
from benchfit.cycle.sequence import put_in_order, regular
from benchfit.cycle.stepping import observe_held, observe_steps
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Band, Crossings, Turns, crossings, find_band, find_turns, running_median


def observe_timing(trace: Trace, output: OutputFound | None = None) -> Observed | None:
    """Constants of a timing node; None where it does not come and go for a full cycle.

    The edges of an ``output``, where there is one, tell where the node turns.
    """
    band = find_band(trace)
    if band is None:
        return None
    found_passages = _passages(trace, band)
    if found_passages is None:
        return None
    calm, passages = found_passages
    edges = None if output is None else output.edges
    if passages.size > MANY:

        def part(piece: Trace, inner: Crossings, first: int) -> Observed | None:
            return _route(piece, piece, inner, None if edges is None else edges.within(first, piece.size))

        return observe_long(trace, passages, part)
    return _route(trace, calm, passages, edges)


def _route(trace: Trace, calm: Trace, passages: Crossings, edges: Edges | None) -> Observed | None:
    """The constants by the way that the waveform asks for; ``calm`` is the record without its spikes."""
    shape = trace.assignment.shape
    if shape == "jumping" and (stepped := observe_steps(trace, passages)) is not None:
        return stepped
    if shape == "holding" and (held := observe_held(trace, passages)) is not None:
        return held
    fast = fast_direction(passages)
    if fast is not None:
        found = fit_ramps(trace, passages, fast)
        if found is not None and not found.resolved:
            return observe_ramps(trace, found)
    turns = find_turns(calm, passages)
    return observe_meeting(trace, turns if edges is None else from_edges(turns, edges))


def _passages(trace: Trace, band: Band) -> tuple[Trace, Crossings] | None:
    """Passages through the band in order, glitches dropped, and the record they were found in.

    Where they are out of order in a finely sampled record, the median of neighbours is looked at instead: spikes
    of a few samples are gone from it, and the cycle is not.
    """
    passages = crossings(trace.values, *band.limits)
    if passages.size < 2:
        return None
    order = put_in_order(_at(passages), passages.rising)
    if band.half < 4.5 * trace.noise and not regular(_at(passages), passages.rising):
        return None
    if order.disturbed and (passages.after[-1] - passages.before[0]) > 20 * passages.size:
        calm = replace(trace, values=running_median(trace.values))
        others = crossings(calm.values, *band.limits)
        if others.size >= 2:
            again = put_in_order(_at(others), others.rising)
            if again.disturbance < order.disturbance:
                trace, passages, order = calm, others, again
    passages = passages.take(order.keep)
    return (trace, passages) if passages.size >= 2 else None


def _at(passages: Crossings) -> Array:
    return (passages.before + passages.after) / 2.0


def from_edges(turns: Turns, edges: Edges) -> Turns:
    """Turns at the output's edges, where these go with the node's own turns; noise does not move them."""
    if edges.size < turns.index.size - 1 or edges.size == 0:
        return turns
    near = (
        np.abs(edges.index[None, :] - turns.index[:, None]).argmin(axis=1)
        if turns.index.size < 2000
        else (np.clip(np.searchsorted(edges.index, turns.index), 1, edges.size - 1))
    )
    before = np.maximum(near - 1, 0)
    closer = np.abs(edges.index[before] - turns.index) < np.abs(edges.index[near] - turns.index)
    near = np.where(closer, before, near)
    apart = np.abs(edges.index[near] - turns.index)
    spacing = float(np.median(np.diff(edges.index))) if edges.size > 1 else np.inf
    direction = edges.rising[near] == turns.top
    coincide = np.quantile(apart, 0.9) < 0.1 * spacing
    if not coincide or not (direction.all() or (~direction).all()) or np.any(np.diff(near) != 1):
        return turns
    return Turns(edges.index[near], turns.top, turns.block)
