"""Events that alternate, put in order: glitches dropped, irregular intervals found, cycles counted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask

_GLITCH = 0.25
_INSTANT = 0.05
_LONG = 1.5
_SHORT = 0.6


@dataclass(frozen=True, eq=False)
class Sequence:
    """Alternating events (rising and falling edges, upper and lower turns).

    Attributes
    ----------
    keep : ndarray of int, shape (n,)
        Which of the events given are kept.
    odd : ndarray of bool, shape (n − 1,)
        Intervals between kept neighbours that are no part of the regular cycle.
    glitches : int
        Pairs of events dropped because the interval between them was next to nothing.
    leading : float
        Length of an irregular first interval over its like's median, 1 where it is regular.
    missing, doubled : int
        Irregular intervals in the interior that are too long, too short.
    """

    keep: Index
    odd: Mask
    glitches: int
    leading: float
    missing: int
    doubled: int

    @property
    def disturbance(self) -> int:
        """How many glitches and irregular intervals there are."""
        return self.glitches + self.missing + self.doubled + int(self.leading < 1.0)

    @property
    def disturbed(self) -> bool:
        return self.disturbance > 0


def put_in_order(at: Array, up: Mask) -> Sequence:
    """Tell regular from irregular intervals by their likes' median.

    Parameters
    ----------
    at : ndarray, shape (n,)
        Instants, ascending.
    up : ndarray of bool, shape (n,)
        Direction; they alternate.
    """
    keep = np.arange(at.size)
    glitches = 0
    while keep.size >= 6:
        gap = np.diff(at[keep])
        like = _like(gap, up[keep][:-1])
        # A glitch splits one interval into three: the middle one short, all three together as long as one; several
        # split it into more, and then its shortness alone must do.
        whole = gap[:-2] + gap[1:-1] + gap[2:]
        inner = gap[1:-1] / like[1:-1]
        hit = (inner < _INSTANT) | ((inner < _GLITCH) & (np.abs(whole / like[:-2] - 1.0) < 0.35))
        places = np.flatnonzero(hit)
        if places.size == 0:
            break
        # All that do not touch each other at once.
        apart = [places[0]]
        for p in places[1:]:
            if p - apart[-1] > 2:
                apart.append(p)
        drop = np.array(apart)
        keep = np.delete(keep, np.concatenate([drop + 1, drop + 2]))
        glitches += drop.size
    gap = np.diff(at[keep])
    if gap.size < 3:
        return Sequence(keep, np.zeros(gap.size, dtype=bool), glitches, 1.0, 0, 0)
    like = _like(gap, up[keep][:-1])
    period = float(np.median(gap[:-1] + gap[1:]))
    ratio = gap / like
    # Jitter moves an interval against the period, not only against its own length.
    away = (gap - like) / period
    long = (ratio > _LONG) & (away > 0.25)
    short = (ratio < _SHORT) & (away < -0.15)
    odd = long | short
    leading = float(ratio[0]) if odd[0] or _stands_out(gap, up[keep][:-1]) else 1.0
    odd[0] |= leading != 1.0
    return Sequence(keep, odd, glitches, leading, int(long[1:].sum()), int(short[1:].sum()))


def _like(gap: Array, up: Mask) -> Array:
    """Median of the intervals of the same direction."""
    result = np.empty(gap.size)
    for d in (True, False):
        mine = up == d
        if mine.any():
            result[mine] = np.median(gap[mine])
    return result


def _stands_out(gap: Array, up: Mask) -> bool:
    """Whether the first interval is longer than all its likes by far more than these differ."""
    others = gap[2:][up[2:] == up[0]]
    if others.size < 2:
        return False
    spread = max(float(np.ptp(others)), 1e-3 * float(np.median(others)))
    return bool(gap[0] - np.median(others) > max(5.0 * spread, 0.08 * float(np.median(others))))


def closed(at: Array, up: Mask, odd: Mask) -> tuple[Array, Index]:
    """Instants with irregular intervals replaced by their likes' median, and the number of each one's cycle.

    The mean period then comes from regular intervals alone.
    """
    gap = np.diff(at)
    if not odd.any():
        return at, (np.arange(at.size) + int(up[0])) // 2
    fine = ~odd
    typical = np.empty(gap.size)
    for d in (True, False):
        mine = up[:-1] == d
        usable = mine & fine
        typical[mine] = np.median(gap[usable]) if usable.any() else np.median(gap[mine])
    moved = np.where(odd, typical, gap)
    return at[0] + np.concatenate([[0.0], np.cumsum(moved)]), (np.arange(at.size) + int(up[0])) // 2


def odd_periods(at: Array) -> tuple[Mask, int, int]:
    """Irregular ones among the intervals of like events, and how many of them are too long and too short."""
    gap = np.diff(at)
    if gap.size < 3:
        return np.zeros(gap.size, dtype=bool), 0, 0
    ratio = gap / np.median(gap)
    long, short = ratio > _LONG, ratio < _SHORT
    return long | short, int(long.sum()), int(short.sum())


def evened(at: Array, odd: Mask) -> Array:
    """Like events with irregular intervals replaced by the median of the regular ones."""
    gap = np.diff(at)
    if not odd.any() or odd.all():
        return at
    return np.asarray(at[0] + np.concatenate([[0.0], np.cumsum(np.where(odd, np.median(gap[~odd]), gap))]))


def regular(at: Array, up: Mask) -> bool:
    """Whether like events follow each other evenly, as noise does not make them."""
    gaps = np.concatenate([np.diff(at[up == d]) for d in (True, False)])
    if gaps.size < 4:
        return False
    middle = float(np.median(gaps))
    return bool(np.median(np.abs(gaps - middle)) < 0.15 * middle)
