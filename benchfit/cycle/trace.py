"""One channel made ready: scaled, its gaps known, its noise guessed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.capture.model import Capture
from benchfit.cycle.arrays import Array, Mask
from benchfit.cycle.clipping import clipped_ends
from benchfit.cycle.constants import Assignment
from benchfit.cycle.noise import difference_noise
from benchfit.errors import CaptureError


@dataclass(frozen=True, eq=False)
class Trace:
    """The samples of one node.

    Attributes
    ----------
    values : ndarray, shape (n,)
        Voltages (V); where ``valid`` is False only a stand-in drawn from the neighbours.
    valid : ndarray of bool, shape (n,), or None
        Samples that may be used; None: all of them.
    noise : float
        First guess of the noise (V rms), from differences of neighbours.
    span : (minimum, maximum)
    clipped : (value or None, value or None)
        Bottom and top of the range, where samples ran into it.
    """

    assignment: Assignment
    values: Array
    interval: float
    start: float
    resolution: float
    noise: float
    span: tuple[float, float]
    valid: Mask | None = None
    clipped: tuple[float | None, float | None] = (None, None)

    @property
    def node(self) -> str:
        return self.assignment.node

    @property
    def size(self) -> int:
        return int(self.values.size)

    def time(self, index: Array) -> Array:
        """Time (s) of a sample index, fractions allowed."""
        return self.start + self.interval * np.asarray(index, dtype=float)


def prepare(capture: Capture, assignment: Assignment) -> Trace:
    """The channel of an assignment as a Trace.

    Raises
    ------
    CaptureError
        The capture has no such channel, or the channel holds no number.
    """
    try:
        channel = capture[assignment.channel]
    except KeyError:
        names = ", ".join(c.name for c in capture.channels)
        raise CaptureError(
            f"{capture.path}: there is no channel {assignment.channel!r} for node {assignment.node};"
            f" the capture has {names}",
            path=capture.path,
        ) from None
    values = channel.values
    low, high = _extremes(values)
    if not np.isfinite(low):
        raise CaptureError(
            f"{capture.path}: channel {channel.name} holds no number; check the column or the export",
            path=capture.path,
            column=channel.name,
        )
    valid = _usable(values, channel.overloaded)
    clipped = clipped_ends(values) if assignment.shape != "square" and high > low else (None, None)
    for level in clipped:
        if level is not None:
            fine = values != level
            valid = fine if valid is None else valid & fine
    if assignment.scale != 1.0:
        values = values * assignment.scale
        clipped = _scaled(clipped, assignment.scale)
        low, high = sorted((low * assignment.scale, high * assignment.scale))
    if valid is not None:
        values = _bridge(values, np.isfinite(values))
    resolution = abs(channel.resolution * assignment.scale)
    return Trace(
        assignment,
        values,
        capture.interval,
        capture.start,
        resolution,
        difference_noise(values, resolution),
        (float(low), float(high)),
        valid,
        clipped,
    )


def _scaled(ends: tuple[float | None, float | None], scale: float) -> tuple[float | None, float | None]:
    low, high = (None if x is None else x * scale for x in ends)
    return (low, high) if scale > 0 else (high, low)


def _extremes(values: Array) -> tuple[float, float]:
    if values.size == 0:
        return np.nan, np.nan
    low, high = float(np.min(values)), float(np.max(values))
    if np.isfinite(low) and np.isfinite(high):
        return low, high
    finite = values[np.isfinite(values)]
    return (float(finite.min()), float(finite.max())) if finite.size else (np.nan, np.nan)


def _usable(values: Array, overloaded: Mask | None) -> Mask | None:
    total = float(np.sum(values))
    if np.isfinite(total) and overloaded is None:
        return None
    valid = np.isfinite(values)
    if overloaded is not None:
        valid &= ~overloaded
    return None if valid.all() else valid


def _bridge(values: Array, valid: Mask) -> Array:
    if valid.all():
        return values
    known = np.flatnonzero(valid)
    gaps = np.flatnonzero(~valid)
    values = values.copy()
    values[gaps] = np.interp(gaps, known, values[known])
    return values
