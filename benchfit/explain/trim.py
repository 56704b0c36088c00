"""Turning a trimmer onto the target: which way, how far, and how long until the estimate is tight enough.

The trimmer's value is found from the measured frequency (or duty cycle) with the other parts as they were
explained last, the value to turn to from the target without the probe. While the trimmer rests, acquisitions
are averaged: u² = u_noise²/n + u_scope² (JCGM 100, 4.2 and 5.1.2).
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from benchfit.errors import SheetError
from benchfit.explain.expected import Expected, expected
from benchfit.explain.model import Array
from benchfit.explain.result import PartFound, Quantity, Rest, Turn
from benchfit.sheet.model import Sheet

TIGHT = 0.25
"""An estimate is tight enough when its U is at most this share of the limit (common practice: four to one)."""

USUAL_LIMIT = 0.01
"""Limit that is taken where the target states none (ours)."""

_MOVED = 4.0
_BEYOND = 4.0
_POINTS = 600


def rested(before: Rest | None, reading: Quantity, at: float) -> Rest:
    """``before`` with one more reading, taken at ``at`` (s); a new start where the trimmer has moved.

    It has moved where the reading departs from the mean by more than 4 u of their difference.
    """
    noise = reading.u_noise or 0.0
    scope = math.sqrt(max((reading.u or 0.0) ** 2 - noise**2, 0.0))
    fresh = Rest(reading.value, noise, scope, at, at)
    if before is None:
        return fresh
    spread = math.hypot(noise, before.noise / math.sqrt(before.count))
    if abs(reading.value - before.mean) > _MOVED * spread:
        return fresh
    count = before.count + 1
    mean = before.mean + (reading.value - before.mean) / count
    return Rest(mean, before.noise + (noise - before.noise) / count, scope, before.began, at, count)


@dataclass(frozen=True, eq=False)
class Trimming:
    """A trimmer in a build: the forward model with and without the probe, and what it is turned for.

    ``target`` and ``limit`` (a share of it) belong to ``quantity``; ``low`` and ``high`` are the ends.
    """

    part: str
    low: float
    high: float
    quantity: str
    target: float
    limit: float
    probed: Expected
    bare: Expected

    def turn(
        self, before: Turn | None, reading: Quantity, at: float, known: Sequence[PartFound], pace: float
    ) -> Turn:
        """What to do now.

        Parameters
        ----------
        before : Turn or None
            What was said after the acquisition before this one.
        reading : Quantity
            ``quantity`` as measured now, ``at`` (s) on any clock.
        known : sequence of PartFound
            The parts as they were explained last; without them all are taken as nominal.
        pace : float
            Seconds from one acquisition to the next.
        """
        parts = {p.name: p.value for p in known if p.value is not None}
        rest = rested(before.rest if before is not None else None, reading, at)
        grid = self._grid()
        with_probe, without = self._curve(self.probed, grid, parts), self._curve(self.bare, grid, parts)
        now = _crossing(grid, with_probe, rest.mean, parts.get(self.part))
        goal = _crossing(grid, without, self.target, now)
        built = _at(grid, without, now) if now is not None else rest.mean
        miss, expanded = built / self.target - 1, 2 * rest.u / self.target
        least = _u_of_reading(grid, with_probe, now, rest.u)
        reachable = goal is not None and self.low <= goal <= self.high
        wait = self._wait(rest, pace)
        return Turn(
            part=self.part,
            unit=self.probed.units[self.probed.names.index(self.part)],
            quantity=self.quantity,
            low=self.low,
            high=self.high,
            now=now,
            goal=goal,
            u=self._u(now, goal, least, known),
            is_there=now is not None and goal is not None and abs(goal - now) <= 2 * (least or 0.0),
            is_reachable=reachable,
            miss=miss,
            expanded=expanded,
            limit=self.limit,
            best=None if reachable else self._best(grid, without),
            is_tight=wait == 0.0,
            wait=wait,
            rest=rest,
        )

    def moves(self) -> bool:
        """Whether the trimmer moves the quantity at all, by 0.1 % at least between its ends."""
        curve = self._curve(self.probed, self._grid(), {})
        return bool(np.nanmax(curve) > 1.001 * np.nanmin(curve)) if np.isfinite(curve).any() else False

    def _u(
        self, now: float | None, goal: float | None, least: float | None, known: Sequence[PartFound]
    ) -> float | None:
        """u of goal − now: the reading's own, and how well the trimmer's value is known, in proportion."""
        own = next((p for p in known if p.name == self.part), None)
        if now is None or goal is None or own is None or not own.value or own.u is None:
            return None
        return math.hypot(least or 0.0, (goal - now) * own.u / own.value)

    def _grid(self) -> Array:
        """Values of the trimmer, beyond its ends too: where it would have to be is worth saying."""
        low, high = max(self.low, 1e-3 * self.high) / _BEYOND, self.high * _BEYOND
        return np.geomspace(low, high, _POINTS)

    def _curve(self, model: Expected, grid: Array, parts: Mapping[str, float]) -> Array:
        i = model.names.index(self.part)
        first = model.state({**parts, self.part: float(grid[0])})
        states = np.repeat(first[None, :], grid.size, axis=0)
        coordinate = model.coordinates[i]
        if coordinate == "log":
            states[:, i] += np.log(grid / grid[0])
        elif coordinate == "inverse":
            states[:, i] = 1 / grid
        else:
            states[:, i] += grid - grid[0]
        found = model.measured(states).get(self.quantity)
        return np.full(grid.size, np.nan) if found is None else np.broadcast_to(found, grid.shape)

    def _best(self, grid: Array, curve: Array) -> float | None:
        ends = [_at(grid, curve, x) for x in (max(self.low, float(grid[0])), self.high)]
        misses = [y / self.target - 1 for y in ends if math.isfinite(y)]
        return min(misses, key=abs) if misses else None

    def _wait(self, rest: Rest, pace: float) -> float | None:
        wanted = TIGHT * self.limit * self.target / 2
        if rest.u <= wanted:
            return 0.0
        if rest.scope >= wanted:
            return None
        count = math.ceil(rest.noise**2 / (wanted**2 - rest.scope**2))
        return max(count - rest.count, 1) * pace


def trimming(sheet: Sheet, part: str, low: float, high: float) -> Trimming:
    """A trimmer of a sheet's build: turned for its frequency, or for its duty cycle where that alone moves.

    Raises
    ------
    SheetError
        No circuit, no such part, no target, or the part moves nothing that has one.
    """
    probed, bare = expected(sheet, tuple(sheet.channels or sheet.probes)), expected(sheet, ())
    if part not in probed.names:
        near = difflib.get_close_matches(part, probed.names, n=1, cutoff=0.4)
        hint = f"; did you mean {near[0]}?" if near else f"; it has {', '.join(probed.names)}."
        raise SheetError(f"--trim: this build has no part {part}{hint}", path=sheet.path, key=part)
    targets = {"frequency": sheet.target_frequency, "duty": sheet.target_duty}
    if not any(targets.values()):
        says = "--trim: there is no target to turn to; give one with --set target.frequency=…"
        raise SheetError(says, path=sheet.path, key="target")
    for quantity, target in targets.items():
        if target is None:
            continue
        span = max(target.high - target.nominal, target.nominal - target.low) / target.nominal
        limit = span if target.stated and span > 0 else USUAL_LIMIT
        found = Trimming(part, low, high, quantity, target.nominal, limit, probed, bare)
        if found.moves():
            return found
    wanted = " or ".join(name for name, target in targets.items() if target is not None)
    raise SheetError(f"--trim: {part} does not move the {wanted} of this build", path=sheet.path, key=part)


def _crossing(grid: Array, curve: Array, level: float, near: float | None) -> float | None:
    """Where the curve takes a level; of several places the one nearest to ``near`` (in ln)."""
    good = np.isfinite(curve)
    x, y = np.log(grid[good]), curve[good] - level
    if x.size < 2:
        return None
    at = np.flatnonzero(np.sign(y[:-1]) * np.sign(y[1:]) <= 0)
    if not at.size:
        return None
    places = x[at] + (x[at + 1] - x[at]) * _share(y[at], y[at + 1])
    if near is None or near <= 0:
        return math.exp(float(places[0]))
    return math.exp(float(places[np.argmin(np.abs(places - math.log(near)))]))


def _share(left: Array, right: Array) -> Array:
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(left == right, 0.0, left / (left - right))


def _at(grid: Array, curve: Array, x: float) -> float:
    good = np.isfinite(curve)
    return float(np.interp(math.log(x), np.log(grid[good]), curve[good])) if good.any() else math.nan


def _u_of_reading(grid: Array, curve: Array, now: float | None, u: float) -> float | None:
    if now is None:
        return None
    step = 1.02
    slope = (_at(grid, curve, now * step) - _at(grid, curve, now / step)) / (now * (step - 1 / step))
    return abs(u / slope) if slope else None
