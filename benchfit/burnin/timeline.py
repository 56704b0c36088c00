"""One time axis for a run: wall clocks are set, processes are killed, machines are started again."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def timeline(session: NDArray[np.int64], acquired: Array, steady: Array) -> Array:
    """Seconds since the first record, ascending within each session.

    Within a session the steady clock rules; the wall clock places the session, as it stood at the session's
    last record (a clock that was set meanwhile was set right). A session that would begin before the one
    before it ended, because the clock was wrong, is moved to begin when that one ended.

    Parameters
    ----------
    session : ndarray of int, shape (n,)
    acquired, steady : ndarray, shape (n,)
        Unix time; the steady clock, NaN where the time is a file's own.
    """
    time = acquired.astype(float).copy()
    if not time.size:
        return time
    starts = np.flatnonzero(np.diff(session, prepend=session[:1] - 1))
    ends = np.append(starts[1:], session.size)
    latest = -np.inf
    for a, b in zip(starts, ends, strict=True):
        known = np.isfinite(steady[a:b])
        if known.any():
            last = a + int(np.flatnonzero(known)[-1])
            place = acquired[last] - steady[last]
            time[a:b] = np.where(known, steady[a:b] + place, time[a:b])
            first = time[a:b][known][0]
            if first < latest:
                time[a:b] = np.where(known, time[a:b] + latest - first, time[a:b])
            latest = max(latest, float(time[a:b][known][-1]))
        else:
            latest = max(latest, float(time[a:b].max()))
    return np.asarray(time - time.min())


def stretches(time: Array, values: Array, tolerance: float = 0.3) -> tuple[list[Array], float | None]:
    """Values in stretches of even sampling, and their interval (s).

    A stretch ends where a value is missing or the interval is off the usual one by more than ``tolerance``
    of it. No interval, and no stretches, where fewer than half of the intervals are the usual one.

    Parameters
    ----------
    time, values : ndarray, shape (n,)
        Times ascending; NaN where there is no value.
    """
    known = np.isfinite(values)
    t, y = time[known], values[known]
    if t.size < 3:
        return [], None
    steps = np.diff(t)
    usual = float(np.median(steps))
    even = np.abs(steps - usual) <= tolerance * usual
    if usual <= 0 or np.count_nonzero(even) < 0.5 * steps.size:
        return [], None
    cuts = np.flatnonzero(~even) + 1
    return list(np.split(y, cuts)), float(np.mean(steps[even]))


def spans(gaps: Sequence[tuple[float, float]]) -> float:
    """Total length of gaps (s); one that a set clock makes negative counts as none."""
    return sum(max(0.0, b - a) for a, b in gaps)
