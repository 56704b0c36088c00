"""Constants as linear forms in independent errors, so that their full covariance follows at once.

The errors are each phase's own (one per phase, from the noise of its samples) and, for each kind of phase, the
shared (slope, curvature). Everything that a timing node tells is, to first order, a linear form in these.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchfit.cycle.phases import Fitted

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Form:
    """A linear form: ``own`` (p,) on the phases' own errors, ``shared`` (2, 2) on (falling, rising) × (slope, κ)."""

    own: Array
    shared: Array

    def __add__(self, other: Form) -> Form:
        return Form(self.own + other.own, self.shared + other.shared)

    def __mul__(self, factor: float) -> Form:
        return Form(self.own * factor, self.shared * factor)


def phase_form(fitted: Fitted, phase: NDArray[np.int64], index: Array, weight: Array) -> Form:
    """Σ weight · δv(phase, index)."""
    own, shared = fitted.derivatives(phase, index)
    total = np.bincount(phase, weights=weight * own, minlength=fitted.layout.size)
    by_kind = np.zeros((2, 2))
    for kind in (False, True):
        mine = fitted.layout.rising[phase] == kind
        by_kind[int(kind)] = weight[mine] @ shared[mine]
    return Form(total, by_kind)


def curvature_form(fitted: Fitted, rising: bool) -> Form:
    """The curvature of a kind itself."""
    shared = np.zeros((2, 2))
    shared[int(rising), 1] = 1.0
    return Form(np.zeros(fitted.layout.size), shared)


def covariance(fitted: Fitted, forms: list[Form], variance: float) -> Array:
    """Covariance of forms when a sample has ``variance`` (V²)."""
    own = np.stack([f.own for f in forms])
    with np.errstate(divide="ignore"):
        spread = np.where(fitted.information > 0, 1.0 / fitted.information, 0.0)
    result = (own * spread) @ own.T
    for kind, fit in fitted.fits.items():
        shared = np.stack([f.shared[int(kind)] for f in forms])
        result = result + shared @ fit.shared @ shared.T
    return np.asarray(variance * result)
