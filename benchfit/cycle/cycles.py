"""Single cycles between corners, and what their scatter adds to the constants' covariance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array, Index, Mask
from benchfit.cycle.phases import Corners, Fitted


@dataclass(frozen=True, eq=False)
class Cycles:
    """Single cycles from lower to lower turn: period, (1 − share)·rise − share·fall, upper, lower (s, s, V, V)."""

    first: Index
    samples: Array
    corner: Corners
    share: float

    @staticmethod
    def of(fitted: Fitted, corner: Corners, share: float, odd: Mask) -> Cycles | None:
        """The whole regular cycles among the corners, None where there are fewer than two."""
        steps = np.diff(corner.before) == 1
        if odd.size == steps.size:
            steps &= ~odd
        first = np.flatnonzero(steps[:-1] & steps[1:] & ~corner.top[:-2])
        if first.size < 2:
            return None
        t = corner.index * fitted.interval
        rise, fall = t[first + 1] - t[first], t[first + 2] - t[first + 1]
        samples = np.stack(
            [
                rise + fall,
                (1 - share) * rise - share * fall,
                corner.voltage[first + 1],
                corner.voltage[first],
            ],
            axis=1,
        )
        return Cycles(first, samples, corner, share)

    def noise(self, fitted: Fitted, variance: dict[bool, float]) -> Array:
        """Covariance of a single cycle's quantities from the record's noise alone, of a typical cycle."""
        middle = self.first[self.first.size // 2]
        index, before = self.corner.index[middle : middle + 3], self.corner.before[middle : middle + 3]
        _, r0 = fitted.values_at(before, index)
        _, r1 = fitted.values_at(before + 1, index)
        own0, own1 = fitted.derivatives(before, index)[0], fitted.derivatives(before + 1, index)[0]
        # Each turn's time and voltage by the own errors of the phase before and of the phase after it.
        time, volt = np.zeros((3, 4)), np.zeros((3, 4))
        for j in range(3):
            gap = r0[j] - r1[j]
            time[j, j], time[j, j + 1] = -own0[j] / gap, own1[j] / gap
            volt[j, j], volt[j, j + 1] = -r1[j] * own0[j] / gap, r0[j] * own1[j] / gap
        rise, fall = time[1] - time[0], time[2] - time[1]
        form = np.stack([rise + fall, (1 - self.share) * rise - self.share * fall, volt[1], volt[0]])
        phases = np.arange(before[0], before[0] + 4)
        sigma2 = np.where(fitted.layout.rising[phases], variance[True], variance[False])
        return np.asarray((form * (sigma2 / fitted.information[phases])) @ form.T)
