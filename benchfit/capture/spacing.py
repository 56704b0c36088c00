"""Time stamps of one frame -> an even interval: even, rounded, damaged, gapped or irregular stamps."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.arrange import Blend, Hold, Place, Step
from benchfit.errors import CaptureError, Remark

Floats = NDArray[np.float64]
# Stamps that leave the straight line by less than this share of a step are even for every purpose here.
_EVEN = 0.1
_CHUNK = 1 << 16


@dataclass(frozen=True)
class Spacing:
    """An even ``interval`` (s) from ``start`` (s) on, and what had to be done to the rows for it."""

    start: float
    interval: float
    steps: tuple[Step, ...] = ()
    remarks: tuple[Remark, ...] = ()


def even(stamps: Floats, quantum: float) -> Spacing | None:
    """The spacing of stamps that are even within their printed digits; None where they are not.

    The interval is (last - first)/(n - 1): the steps themselves are wrong where stamps are rounded.
    """
    n = stamps.size
    if n < 2 or not np.isfinite(stamps[0]) or not stamps[-1] > stamps[0]:
        return None
    interval = float((stamps[-1] - stamps[0]) / (n - 1))
    tolerance = max(1.01 * quantum, 0.02 * interval)
    if not np.isfinite(interval) or _farthest(stamps, interval, tolerance) > tolerance:
        return None
    usual = float(np.median(np.diff(stamps[: min(n, _CHUNK)])))
    remarks: tuple[Remark, ...] = ()
    if abs(usual / interval - 1) > 0.02:
        says = (
            f"The time stamps are rounded (usual step {usual:.4g} s); the interval is (last - first)/(n - 1) "
            f"= {interval:.6g} s."
        )
        remarks = (Remark("rounded-time", says),)
    return Spacing(float(stamps[0]), interval, (), remarks)


def _farthest(stamps: Floats, interval: float, enough: float) -> float:
    """Largest distance of a stamp from the straight line, in pieces that stay in the cache."""
    farthest = 0.0
    ramp = interval * np.arange(min(_CHUNK, stamps.size))
    with np.errstate(invalid="ignore", over="ignore"):
        for begin in range(0, stamps.size, _CHUNK):
            piece = stamps[begin : begin + _CHUNK]
            off = piece - ramp[: piece.size]
            off -= stamps[0] + interval * begin
            far = max(float(np.max(off)), -float(np.min(off)))
            if not far <= enough:
                return np.inf
            farthest = max(farthest, far)
    return farthest


def robust_step(stamps: Floats) -> float:
    """The usual distance of neighbouring stamps, over a span of rows so that rounding does not matter."""
    lag = max(1, min(32, stamps.size // 4))
    with np.errstate(invalid="ignore", over="ignore"):
        steps = stamps[lag:] - stamps[:-lag]
    steps = steps[np.isfinite(steps)]
    return float(np.median(steps)) / lag if steps.size else float("nan")


def settle(
    stamps: Floats, quantum: float, refusal: Callable[[str], CaptureError], columns: Sequence[Floats] = ()
) -> Spacing:
    """The spacing of the stamps of one frame. ``columns`` are values by which a log of changes is known.

    Raises CaptureError where the stamps do not run forwards.
    """
    if (spacing := even(stamps, quantum)) is not None:
        return spacing
    step = robust_step(stamps)
    if not (np.isfinite(step) and step > 0):
        raise refusal("the time column does not run forwards; give the time between samples with --interval")
    stamps, remarks = mended(stamps, step, quantum)
    found = even(stamps, quantum) or _gapped(stamps, step, quantum) or _uneven(stamps, step, columns, refusal)
    return Spacing(found.start, found.interval, found.steps, remarks + found.remarks)


def mended(stamps: Floats, step: float, quantum: float) -> tuple[Floats, tuple[Remark, ...]]:
    """Lone stamps far from their place, put in line with their neighbours where these fit each other."""
    if not (np.isfinite(step) and step > 0):
        return stamps, ()
    tolerance = max(2 * quantum, 0.3 * step)
    with np.errstate(invalid="ignore", over="ignore"):
        fits = np.abs(np.diff(stamps) - step) <= tolerance
    sound = np.concatenate([[False], fits]) | np.concatenate([fits, [False]])
    places, lone = np.flatnonzero(sound), np.flatnonzero(~sound)
    if not lone.size or lone.size > 0.05 * stamps.size:
        return stamps, ()
    result, count = stamps.copy(), 0
    for row in lone:
        at = int(np.searchsorted(places, row))
        if at in (0, places.size):
            near = int(places[0] if at == 0 else places[-1])
            place = float(stamps[near] + step * (row - near))
            spoilt = _is_off_grid(
                float(stamps[row] - stamps[near]) * (1 if row > near else -1), step, tolerance, stamps.size
            )
        else:
            a, b = int(places[at - 1]), int(places[at])
            if abs(stamps[b] - stamps[a] - step * (b - a)) > tolerance + 0.01 * step * (b - a):
                continue
            place = float(stamps[a] + (stamps[b] - stamps[a]) * (row - a) / (b - a))
            # A stamp nearer than a step is jitter, not damage.
            spoilt = not abs(stamps[row] - place) <= max(1.01 * step, 2 * quantum)
        if spoilt:
            result[row] = place
            count += 1
    says = f"{count} time stamps do not fit between their neighbours and were put in line."
    return (result, (Remark("damaged", says),)) if count else (stamps, ())


def _is_off_grid(distance: float, step: float, tolerance: float, rows: int) -> bool:
    """Whether the stamp of a first or last row cannot be that of a row after a gap."""
    if not 0 < distance < step * rows:
        return True
    return abs(distance - step * round(distance / step)) > tolerance


def _gapped(stamps: Floats, step: float, quantum: float) -> Spacing | None:
    """Stamps on an even grid of which some places are missing."""
    jumps = np.diff(stamps)
    counts = np.round(jumps / step)
    off = np.abs(jumps - counts * step)
    if not (
        np.all(counts >= 1) and np.all(off <= max(2 * quantum, 0.15 * step) * np.maximum(1, 0.01 * counts))
    ):
        return None
    total = int(counts.sum())
    if total == jumps.size or total > 4 * stamps.size:
        return None
    interval = float((stamps[-1] - stamps[0]) / total)
    places = np.round((stamps - stamps[0]) / interval).astype(np.intp)
    if np.any(np.diff(places) < 1):
        return None
    missing = total + 1 - stamps.size
    gaps = int(np.count_nonzero(counts > 1))
    says = f"{missing} samples are missing in {gaps} gaps of the time column and left without a value."
    return Spacing(float(stamps[0]), interval, (Place(places, total + 1),), (Remark("gaps", says),))


def _uneven(
    stamps: Floats, step: float, columns: Sequence[Floats], refusal: Callable[[str], CaptureError]
) -> Spacing:
    """Stamps without a grid, brought onto one: values of a log of changes are held, others joined by lines."""
    jumps = np.diff(stamps)
    if np.any(jumps < 0) or not np.all(np.isfinite(jumps)):
        raise refusal("the time column does not run forwards; give the time between samples with --interval")
    span = float(stamps[-1] - stamps[0])
    mean = span / jumps.size
    smallest, largest = float(np.min(jumps[jumps > 0])), float(np.max(jumps))
    start = float(stamps[0])
    if columns and _is_log_of_changes(columns):
        interval = max(smallest / 10, span / 1_000_000)
        says = (
            "One row per change: each value is held until the next change, on an even axis of "
            f"{interval:.3g} s, which is the resolution of every edge."
        )
        return Spacing(
            start,
            interval,
            (Hold(stamps, interval, int(span / interval * (1 + 1e-9)) + 1),),
            (Remark("changes", says),),
        )
    line = stamps - start - mean * np.arange(stamps.size)
    worst = float(np.max(np.abs(line)))
    if worst <= _EVEN * mean:
        return Spacing(
            start,
            mean,
            (),
            (Remark("uneven-time", f"The time stamps leave an even axis by up to {worst:.3g} s."),),
        )
    ragged = largest > 4 * mean
    interval = mean if not ragged else max(float(np.median(jumps[jumps > 0])), span / (4 * stamps.size))
    says = (
        f"The steps of time vary from {smallest:.3g} s to {largest:.3g} s; the values were put onto an even "
        f"axis of {interval:.4g} s by straight lines between the rows."
    )
    count = int(span / interval * (1 + 1e-9)) + 1
    return Spacing(start, interval, (Blend(stamps, interval, count),), (Remark("uneven-time", says),))


def _is_log_of_changes(columns: Sequence[Floats]) -> bool:
    """Whether all columns know two values only and at least one of them changes in almost every row."""
    changed = np.zeros(columns[0].size - 1, dtype=bool)
    for values in columns:
        finite = values[np.isfinite(values)]
        if np.unique(finite[:10_000]).size > 2:
            return False
        changed |= np.diff(values) != 0
    return bool(np.mean(changed) > 0.9)
