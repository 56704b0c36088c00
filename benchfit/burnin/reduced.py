"""A unit's records reduced: to the alarms that other limits would have raised, to points for drawing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from benchfit.burnin.alarms import Limit, Raised, Watch
from benchfit.burnin.blocks import Array
from benchfit.burnin.contents import Series
from benchfit.burnin.drift import Drift
from benchfit.burnin.result import AlarmSeen, Drawn

_DRAWN = 1200


def replayed(series: Series, bounds: Mapping[str, Limit]) -> list[AlarmSeen]:
    """The alarms that these limits would have raised."""
    found: list[AlarmSeen] = []
    for name, limit in bounds.items():
        watch = Watch(limit)
        values = np.where(series.status == 0, series.row(name), np.nan)
        noise = float(series.noise[series.names.index(name)])
        for i, value in enumerate(values.tolist()):
            event = watch.step(value, noise)
            if isinstance(event, Raised):
                raised = (int(series.seq[i]), float(series.acquired[i]), series.unit, name, value)
                found.append(AlarmSeen(*raised, event.limit, event.text, None))
            elif event is not None:
                found[-1] = replace(found[-1], cleared=int(series.seq[i]))
    return found


def decimated(t: Array, values: Array, law: Drift | None, *, inverted: bool) -> Drawn:
    """Few points for drawing: each block's mean and extremes; ``inverted``: the law is of 1/value."""
    known = np.isfinite(values)
    t, values = t[known], values[known]
    starts = np.unique(np.linspace(0, t.size, min(t.size, _DRAWN) + 1).astype(int)[:-1])
    count = np.diff(np.append(starts, t.size))
    when = np.add.reduceat(t, starts) / count
    curve = np.full(when.size, np.nan) if law is None else law.curve(when)
    curve = 1 / curve if inverted else curve
    return Drawn(
        when / 3600, np.add.reduceat(values, starts) / count, np.minimum.reduceat(values, starts),
        np.maximum.reduceat(values, starts), curve,
    )  # fmt: skip
