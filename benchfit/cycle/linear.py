"""Constants as linear forms in independent errors, so that their full covariance follows at once.

The errors are each phase's own (one per phase, from the noise of its samples), for each kind of phase the
shared (slope, curvature), and whatever else a route adds (instants known only between two samples).
Everything that a timing node tells is, to first order, a linear form in these.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from benchfit.cycle.arrays import Array, Index
from benchfit.cycle.phases import Fitted
from benchfit.cycle.residuals import Profile


@dataclass(frozen=True, eq=False)
class Form:
    """A linear form.

    ``own`` (p,) on the phases' own errors, ``shared`` (2, 2) on (falling, rising) × (slope, curvature),
    ``extra`` (2,) on the instants (s) of the upper and the lower turn as a whole.
    """

    own: Array
    shared: Array
    extra: Array = field(default_factory=lambda: np.zeros(2))

    def __add__(self, other: Form) -> Form:
        return Form(self.own + other.own, self.shared + other.shared, self.extra + other.extra)

    def __mul__(self, factor: float) -> Form:
        return Form(self.own * factor, self.shared * factor, self.extra * factor)


def phase_form(fitted: Fitted, phase: Index, index: Array, weight: Array) -> Form:
    """Σ weight · δv(phase, index)."""
    own, shared = fitted.derivatives(phase, index)
    total = np.bincount(phase, weights=weight * own, minlength=fitted.layout.size).astype(float)
    by_kind = np.zeros((2, 2))
    for kind in (False, True):
        mine = fitted.layout.rising[phase] == kind
        by_kind[int(kind)] = weight[mine] @ shared[mine]
    return Form(total, by_kind)


def shared_form(fitted: Fitted, rising: bool, which: int) -> Form:
    """The slope (0) or the curvature (1) of a kind itself."""
    shared = np.zeros((2, 2))
    shared[int(rising), which] = 1.0
    return Form(np.zeros(fitted.layout.size), shared)


def extra_form(fitted: Fitted, upper: float, lower: float) -> Form:
    """Multiples of the errors of the upper and the lower turn's instant."""
    return Form(np.zeros(fitted.layout.size), np.zeros((2, 2)), np.array([upper, lower]))


def covariance(
    fitted: Fitted, forms: list[Form], variance: dict[bool, float], extra: Array | None = None
) -> Array:
    """Covariance of forms.

    ``variance`` is that of a sample (V²) in the phases of each kind, ``extra`` (2,) those of the instants (s²).
    """
    own = np.stack([f.own for f in forms])
    sigma2 = np.where(fitted.layout.rising, variance.get(True, 0.0), variance.get(False, 0.0))
    spread = np.where(
        fitted.information > 0, sigma2 / np.where(fitted.information > 0, fitted.information, 1.0), 0.0
    )
    result = (own * spread) @ own.T
    for kind, fit in fitted.fits.items():
        shared = np.stack([f.shared[int(kind)] for f in forms])
        result = result + variance[kind] * (shared @ fit.shared @ shared.T)
    if extra is not None:
        instants = np.stack([f.extra for f in forms])
        result = result + (instants * extra) @ instants.T
    return np.asarray(result)


def structure_covariance(fitted: Fitted, forms: list[Form], profiles: Mapping[bool, Profile]) -> Array:
    """What structure that one exponential leaves adds: the same in every cycle, so that none averages it away.

    It counts as an error of a tenth of the phase each, and as one of every level together. The first form, the
    period, compares like with like and is free of it.
    """
    result = np.zeros((len(forms), len(forms)))
    for kind, profile in profiles.items():
        if profile.structure == 0.0:
            continue
        mine = fitted.layout.rising == kind
        samples = float(fitted.layout.length[mine].sum())
        shared = np.stack([f.shared[int(kind)] for f in forms])
        level = np.array([f.own[mine].sum() for f in forms])
        shared[0], level[0] = 0.0, 0.0
        spread = shared @ fitted.fits[kind].shared @ shared.T
        result += profile.structure**2 * (spread * samples / 10.0 + np.outer(level, level))
    return result
