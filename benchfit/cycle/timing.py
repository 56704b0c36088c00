"""What a timing node shows, by the route that its waveform asks for."""

from __future__ import annotations

import numpy as np

from benchfit.cycle.edges import Edges
from benchfit.cycle.meeting import observe_meeting
from benchfit.cycle.observed import Observed
from benchfit.cycle.output import OutputFound
from benchfit.cycle.ramps import fast_direction, fit_ramps, observe_ramps
from benchfit.cycle.sequence import put_in_order, regular
from benchfit.cycle.stepping import observe_held, observe_steps
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import Turns, crossings, find_band, find_turns


def observe_timing(trace: Trace, output: OutputFound | None = None) -> Observed | None:
    """Constants of a timing node; None where it does not come and go for a full cycle.

    The edges of an ``output``, where there is one, tell where the node turns.
    """
    band = find_band(trace)
    if band is None:
        return None
    passages = crossings(trace.values, *band.limits)
    if passages.size < 2:
        return None
    at = (passages.before + passages.after) / 2.0
    if band.half < 4.5 * trace.noise and not regular(at, passages.rising):
        return None
    passages = passages.take(put_in_order(at, passages.rising).keep)
    if passages.size < 2:
        return None
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
    turns = find_turns(trace, passages)
    return observe_meeting(trace, from_edges(turns, output.edges) if output is not None else turns)


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
