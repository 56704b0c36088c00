"""Differences of instants with white and accumulating noise, by their sine spectrum.

d_k = T + b_k + w_(k+1) − w_k has a tridiagonal Toeplitz covariance, whose eigenvectors are sines and whose
eigenvalues are q + 2σ²·(1 − cos(πj/(n+1))): with the discrete sine transform the exact likelihood costs as
much as a sum.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchfit.cycle.arrays import Array

_EXACT = 512
_GROUPS = 512


@dataclass(frozen=True, eq=False)
class Differences:
    """Spectrum of the differences, the high frequencies in groups of neighbours.

    ``factor`` is 2·(1 − cos), ``count`` the frequencies in a group, ``dd``, ``d1``, ``ones`` the sums of squares
    and products of the transformed differences and of the transformed constant. Where an instant is the
    weighted mean of two of a cycle, ``same`` is Σ weight², and ``overlap`` the product of the weights times the
    share of the period between the two: the walk's own part of the covariance of neighbouring differences.
    """

    size: int
    known: float
    same: float
    overlap: float
    factor: Array
    count: Array
    dd: Array
    d1: Array
    ones: Array

    def evaluate(self, walk: Array, white: Array) -> tuple[Array, Array, Array]:
        """Mean, its variance and the restricted log-likelihood for pairs of variances (s²)."""
        level = self._level(walk[:, None], white[:, None], self.factor)
        normal = (self.ones / level).sum(axis=1)
        mean = (self.d1 / level).sum(axis=1) / normal
        rest = (self.dd / level).sum(axis=1) - mean**2 * normal
        log = -0.5 * (self.count * np.log(level)).sum(axis=1) - 0.5 * np.log(normal) - 0.5 * rest
        return mean, 1.0 / normal, log

    def _level(self, walk: Array, white: Array, factor: Array) -> Array:
        single = walk * (1.0 - self.overlap * factor)
        return np.asarray(single + (white * self.same + self.known) * factor + 1e-300)

    def weights(self, walk: float, white: float) -> Array:
        """The mean as a linear form in the differences, shape (n,)."""
        j = np.arange(1, self.size + 1)
        angle = np.pi * j / (self.size + 1)
        level = self._level(np.array(walk), np.array(white), 2.0 * (1.0 - np.cos(angle)))
        ones = _constant(self.size)
        form = sine_transform(ones / level)
        return np.asarray(form / form.sum())


def differences(steps: Array, known: float, same: float = 1.0, overlap: float = 0.0) -> Differences:
    """Prepare the spectrum of ``steps`` (s); ``known`` is the white variance of an instant that is known (s²)."""
    n = steps.size
    d = sine_transform(steps)
    ones = _constant(n)
    factor = 2.0 * (1.0 - np.cos(np.pi * np.arange(1, n + 1) / (n + 1)))
    if n <= 2 * _EXACT:
        return Differences(n, known, same, overlap, factor, np.ones(n), d * d, d * ones, ones * ones)
    edges = np.unique(np.concatenate([np.arange(_EXACT), np.geomspace(_EXACT, n, _GROUPS).astype(int)]))[:-1]
    count = np.diff(np.concatenate([edges, [n]])).astype(float)
    total = [np.add.reduceat(x, edges) for x in (d * d, d * ones, ones * ones, factor)]
    return Differences(n, known, same, overlap, total[3] / count, count, total[0], total[1], total[2])


def sine_transform(x: Array) -> Array:
    """Orthonormal discrete sine transform of the first kind, its own inverse."""
    n = x.size
    odd = np.zeros(2 * (n + 1))
    odd[1 : n + 1] = x
    odd[n + 2 :] = -x[::-1]
    return np.asarray(-np.fft.rfft(odd).imag[1 : n + 1] * np.sqrt(2.0 / (n + 1)) / 2.0)


def _constant(n: int) -> Array:
    """Sine transform of ones: √(2/(n+1))·cot(πj/(2(n+1))) for odd j, else 0."""
    j = np.arange(1, n + 1)
    return np.where(j % 2 == 1, np.sqrt(2.0 / (n + 1)) / np.tan(np.pi * j / (2.0 * (n + 1))), 0.0)
