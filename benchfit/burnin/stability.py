"""Overlapping Allan deviation of the fractional frequency, with confidence intervals; gaps are never bridged.

Sources: W. J. Riley, Handbook of Frequency Stability Analysis, NIST Special Publication 1065 (2008), sections
5.2 (Allan and overlapping Allan variance), 5.3 (confidence intervals) and 5.5 (noise identification by the
lag-1 autocorrelation: Riley & Greenhall, Proc. 18th EFTF, 2004); equivalent degrees of freedom: Greenhall &
Riley, Proc. 35th PTTI (2003). Section numbers from memory.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from benchfit.burnin.result import Deviation

Array = NDArray[np.float64]

CONFIDENCE = math.erf(1 / math.sqrt(2))
"""One standard deviation's worth: 68.3 %."""
_WIDE = 512
"""Averaging factors from which sums over frequency noise take their limit for infinite ones."""


def squares(y: Array, m: int, *, overlapping: bool = True) -> tuple[float, int]:
    """Sum of the squared differences of adjacent m-averages of y, and how many there are.

    AVAR(m·τ0) = sum/(2·count): NIST SP 1065 equations (8) and (11), with y fractional frequency, shape (n,).
    """
    x = np.concatenate([[0.0], np.cumsum(y - y.mean() if y.size else y)])
    second = x[2 * m :] - 2 * x[m : x.size - m] + x[: x.size - 2 * m] if x.size > 2 * m else np.empty(0)
    if not overlapping:
        second = second[::m]
    return float(np.dot(second, second)) / m**2, second.size


def allan_deviation(stretches: Sequence[Array], m: int, *, overlapping: bool = True) -> tuple[float, int]:
    """Allan deviation at m sample intervals and the number of differences it is from.

    Parameters
    ----------
    stretches : sequence of ndarray
        Fractional frequencies, one array for each stretch without a gap; no average reaches over a gap.
    m : int
        Averaging factor, at least 1.
    overlapping : bool

    Returns
    -------
    (float, int)
        NaN and 0 where no stretch is long enough.
    """
    parts = [squares(np.asarray(y, float), m, overlapping=overlapping) for y in stretches]
    count = sum(n for _, n in parts)
    return (math.sqrt(sum(s for s, _ in parts) / (2 * count)), count) if count else (math.nan, 0)


def overlapping_allan(stretches: Sequence[Array], interval: float, least: int = 3) -> list[Deviation]:
    """The overlapping Allan deviation at averaging times in octaves.

    Parameters
    ----------
    stretches : sequence of ndarray
        Fractional frequencies sampled every ``interval`` seconds, one array for each stretch without a gap.
    interval : float
        s.
    least : int
        A stretch counts towards an averaging time where it holds this many averages.

    Returns
    -------
    list of Deviation
        Averaging times interval·1, 2, 4, …
    """
    stretches = [np.asarray(y, float) for y in stretches if len(y) >= least]
    found: list[Deviation] = []
    m, noise = 1, 0
    while any(y.size >= least * m for y in stretches):
        long_enough = [y for y in stretches if y.size >= least * m]
        adev, count = allan_deviation(long_enough, m)
        if not count:
            break
        longest = max(long_enough, key=lambda y: y.size)
        identified = noise_type(longest, m)
        # Redder noise comes out at longer averaging times, never a whiter one: a whiter finding there is
        # chance.
        noise = noise if identified is None else identified if m == 1 else min(noise, identified)
        edf = sum(degrees_of_freedom(noise, m, y.size + 1) for y in long_enough)
        low, high = _interval(adev, edf)
        found.append(Deviation(m * interval, adev, adev / math.sqrt(2 * edf), low, high, edf, noise))
        m *= 2
    return found


def noise_type(y: Array, m: int, least: int = 30) -> int | None:
    """The exponent α of the dominant power-law noise at averaging factor m; None with too few averages.

    Lag-1 autocorrelation of the m-averages, differenced until it is stationary (NIST SP 1065, 5.5.3).
    """
    count = y.size // m
    if count < least:
        return None
    z = y[: count * m].reshape(count, m).mean(axis=1)
    for d in range(3):
        z = z - z.mean()
        power = float(np.dot(z, z))
        r = float(np.dot(z[:-1], z[1:])) / power if power > 0 else 0.0
        delta = r / (1 + r)
        if d == 2 or delta < 0.25:
            return int(np.clip(-round(2 * delta) - 2 * d, -2, 2))
        z = np.diff(z)
    return None


def degrees_of_freedom(alpha: int, m: int, points: int, *, overlapping: bool = True) -> float:
    """Equivalent degrees of freedom of an Allan variance.

    Parameters
    ----------
    alpha : int
        Exponent of the frequency noise's spectrum, −2 … 2.
    m : int
        Averaging factor.
    points : int
        Phase points: one more than frequency values.
    overlapping : bool

    Returns
    -------
    float
        At least 1 (Greenhall & Riley 2003, combined algorithm, d = 2 and unmodified variance: F = m).
    """
    stride = m if overlapping else 1
    span = 1 + 2 * m  # L = m/F + m·d with F = m, d = 2
    if points < span:
        return 1.0
    terms = 1 + stride * (points - span) // m
    width = min(terms, 3 * stride)
    # Differences of phase noise (α > 0) are sharp at whole numbers and have no limit for infinite factors.
    factor = float(m) if m < _WIDE or alpha > 0 else math.inf
    j, weight = _grid(width, stride)
    z = _sz(np.concatenate([[0.0], j / stride]), factor, alpha)
    head = j < width
    inner = 2 * np.sum((weight * (1 - j / terms) * z[1:] ** 2)[head])
    total = z[0] ** 2 + (1 - width / terms) * z[-1] ** 2 + inner
    return max(1.0, float(terms * z[0] ** 2 / total))


def _grid(width: int, stride: int) -> tuple[Array, Array]:
    """Indices 1 … width and how many terms each stands for: all of them, or dense only where it matters."""
    if width <= 4000:
        j = np.arange(1, width + 1, dtype=float)
        return j, np.ones(j.size)
    away = np.unique(np.round(np.geomspace(1, stride, 400)))
    near = [k * stride + sign * away for k in range(4) for sign in (-1, 1)]
    grid = np.concatenate([*near, np.arange(4.0) * stride, np.linspace(1, width, 2000).round()])
    j = np.unique(grid[(grid >= 1) & (grid <= width)])
    edges = np.concatenate([[0.5], 0.5 * (j[1:] + j[:-1]), [width + 0.5]])
    return j, np.diff(edges)


def _sw(t: Array, alpha: int) -> Array:
    """Generalised autocovariance of the phase noise (Greenhall & Riley 2003, table of sw)."""
    a = np.abs(t)
    if alpha in (2, 0, -2, -4):
        sign, power = {2: (-1, 1), 0: (1, 3), -2: (-1, 5), -4: (1, 7)}[alpha]
        return sign * a**power
    sign, power = {1: (1, 2), -1: (-1, 4), -3: (1, 6)}[alpha]
    return np.asarray(sign * a**power * np.log(np.where(a == 0, 1.0, a)))


def _sx(t: Array, factor: float, alpha: int) -> Array:
    if math.isinf(factor):
        return _sw(t, alpha + 2)
    near = 1 / factor
    return factor**2 * (2 * _sw(t, alpha) - _sw(t - near, alpha) - _sw(t + near, alpha))


def _sz(t: Array, factor: float, alpha: int) -> Array:
    """Autocovariance of the second differences: d = 2."""
    shifted = [_sx(t + k, factor, alpha) for k in (-2, -1, 0, 1, 2)]
    return shifted[0] - 4 * shifted[1] + 6 * shifted[2] - 4 * shifted[3] + shifted[4]


def _interval(adev: float, edf: float) -> tuple[float, float]:
    from scipy.special import gammaincinv

    tail = (1 - CONFIDENCE) / 2
    upper, lower = (2 * float(gammaincinv(edf / 2, p)) for p in (1 - tail, tail))
    return adev * math.sqrt(edf / upper), adev * math.sqrt(edf / lower)
