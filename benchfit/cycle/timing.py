"""What a timing node shows, by the route that its waveform asks for."""

from __future__ import annotations

import numpy as np

from benchfit.cycle.meeting import observe_meeting
from benchfit.cycle.observed import Observed
from benchfit.cycle.ramps import fast_direction, fit_ramps, observe_ramps, resolved
from benchfit.cycle.trace import Trace
from benchfit.cycle.turns import crossings, find_band


def observe_timing(trace: Trace) -> Observed | None:
    """Constants of a timing node; None where it does not come and go for a full cycle."""
    band = find_band(trace)
    if band is None:
        return None
    passages = crossings(trace.values, *band.limits)
    if passages.size < 2:
        return None
    fast = fast_direction(passages)
    if fast is not None:
        found = fit_ramps(trace, passages, fast)
        if found is not None and not resolved(found[1]):
            fitted, gaps = found
            noise = float(np.sqrt(fitted.fits[not fast].variance))
            return observe_ramps(fitted, gaps, fast, noise)
    return observe_meeting(trace, passages)
