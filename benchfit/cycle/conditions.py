"""What benches do to a record: each condition found, and said in one sentence."""

from __future__ import annotations

import numpy as np

from benchfit.cycle.arrays import Array
from benchfit.cycle.observed import Observed
from benchfit.cycle.scatter import student
from benchfit.cycle.sequence import Sequence
from benchfit.cycle.trace import Trace
from benchfit.errors import Remark

_DRIFT = 2e-4
_SURE = 5.0
_LINE = 1e-5


def sampling(period: float, shares: tuple[float, ...], samples: int, interval: float) -> list[Remark]:
    """``few-cycles`` and ``coarse-sampling``, by the counts that the contract gives."""
    remarks = []
    cycles = samples * interval / period
    if np.floor(cycles + 1e-3) < 3:
        remarks.append(
            Remark(
                "few-cycles",
                f"the record holds {cycles:.2g} cycles, fewer than three whole ones: take a longer one",
            )
        )
    per_cycle = period / interval
    shortest = min((min(s, 1.0 - s) for s in shares), default=1.0) * per_cycle
    if per_cycle < 12:
        remarks.append(Remark("coarse-sampling", f"a cycle has only {per_cycle:.3g} samples: use a faster time base"))
    elif shortest < 4:
        remarks.append(
            Remark(
                "coarse-sampling",
                f"the shortest phase of the cycle has only {max(shortest, 0.0):.2g} samples: its course is unresolved",
            )
        )
    return remarks


def quantisation(traces: list[Trace]) -> list[Remark]:
    """``quantised``: noise under half a step."""
    remarks = []
    for trace in traces:
        # A step adds resolution²/12 to the variance of what it rounds.
        sigma = float(np.sqrt(max(trace.noise**2 - trace.resolution**2 / 12.0, 0.0)))
        if trace.resolution > 0 and sigma < 0.5 * trace.resolution:
            remarks.append(
                Remark(
                    "quantised",
                    f"{trace.node}: the noise ({sigma:.2g} V) is under half a step of {trace.resolution:.3g} V, so that"
                    " averaging gains little: use a finer range",
                )
            )
    return remarks


def coupling(traces: list[Trace]) -> list[Remark]:
    """``ac-coupled``, where it was declared."""
    return [
        Remark(
            "ac-coupled",
            f"{t.node} was captured a.c.-coupled: its levels are known only as differences, and the coupling's droop"
            " bends its phases: capture it d.c.-coupled if you can",
        )
        for t in traces
        if t.assignment.coupling == "ac"
    ]


def clipping(traces: list[Trace]) -> list[Remark]:
    """``clipped``, with the end of the range that was hit."""
    remarks = []
    for trace in traces:
        for side, level in (("top", trace.clipped[1]), ("bottom", trace.clipped[0])):
            if level is not None:
                remarks.append(
                    Remark(
                        "clipped",
                        f"{trace.node} is clipped at the {side}, at {level:.4g} V: use a larger range",
                    )
                )
    return remarks


def irregularities(node: str, order: Sequence) -> list[Remark]:
    """``startup`` and ``missing-cycles`` from the order of a node's events."""
    remarks = []
    if order.leading > 1.0:
        remarks.append(
            Remark(
                "startup",
                f"{node}: the first phase lasts {order.leading:.3g} times as long as the others; left out",
            )
        )
    elif order.leading < 1.0:
        remarks.append(
            Remark("startup", f"{node}: the record begins with a pulse that is no part of the cycle; left out")
        )
    if order.missing or order.doubled:
        parts = [f"{order.missing} too long"] if order.missing else []
        parts += [f"{order.doubled} too short"] if order.doubled else []
        remarks.append(
            Remark(
                "missing-cycles",
                f"{node}: some phases are out of line ({', '.join(parts)}); they are left out",
            )
        )
    return remarks


def drift(observed: Observed) -> list[Remark]:
    """``drifting``: the period or a level changes steadily within the record."""
    says = []
    periods = observed.series.get("period")
    if periods is not None and periods.size >= 6:
        change, sure = _trend(periods)
        if sure and abs(change) > _DRIFT * periods.mean():
            says.append(f"the period changes by {100 * change / periods.mean():+.2g} % from start to end")
    swing = abs(observed.value("upper") - observed.value("lower")) if "upper" in observed.names else 0.0
    for name in ("upper", "lower"):
        levels = observed.series.get(name)
        if levels is not None and levels.size >= 6 and swing > 0:
            change, sure = _trend(levels)
            if sure and abs(change) > 2e-3 * swing:
                says.append(f"the {name} turning voltage changes by {change:+.2g} V")
    return [Remark("drifting", "within the record " + " and ".join(says))] if says else []


def _trend(x: Array) -> tuple[float, bool]:
    """Change from first to last by a straight line, and whether it stands out of the scatter about it."""
    n = x.size
    k = np.arange(n) - (n - 1) / 2.0
    slope = float(k @ x / (k @ k))
    rest = x - x.mean() - slope * k
    # Neighbours may go together; their covariance belongs to the slope's error.
    squares = float(rest @ rest)
    variance = squares / (n - 2)
    together = float(rest[1:] @ rest[:-1]) / max(squares, 1e-300)
    factor = (1 + together) / (1 - together) if together > 2.0 / np.sqrt(n) else 1.0
    error = np.sqrt(variance * min(factor, n / 2.0) / (k @ k))
    return slope * (n - 1), abs(slope) > _SURE * student(n - 2) ** 1.5 * error


def _beat(observed: Observed, interval: float) -> float:
    """Samples by which sampling alone may swing the periods."""
    if "upper" not in observed.names:
        return 1.5
    return 0.5 if observed.value("period") < 16.0 * interval else 0.0


def ripple(observed: Observed, interval: float) -> list[Remark]:
    """``ripple``: periods or levels swing to and fro at one frequency, as supply ripple makes them."""
    for name, what in (
        ("period", "period"),
        ("upper", "upper turning voltage"),
        ("lower", "lower turning voltage"),
    ):
        x = observed.series.get(name)
        if x is None or x.size < 24:
            continue
        x = x[: 1 << 16]
        k = np.arange(x.size)
        rest = x - np.polynomial.polynomial.Polynomial.fit(k, x, 2)(k)
        power = np.abs(np.fft.rfft(rest))[2 : (x.size + 1) // 2] ** 2
        total = float(power.sum())
        if total == 0.0:
            continue
        # Fisher's test of the largest periodogram ordinate against all others.
        g, m = float(power.max()) / total, power.size
        if m * (1.0 - g) ** (m - 1) < _LINE:
            at = (int(power.argmax()) + 2) / x.size / float(observed.value("period"))
            size = float(np.sqrt(power.max())) * 2.0 / x.size
            # Samples that run nearly in step with the cycle make a beat of their own.
            if name == "period" and size < _beat(observed, interval) * interval:
                continue
            mean = abs(float(x.mean()))
            return [
                Remark(
                    "ripple",
                    f"the {what} swings by {100 * size / mean if mean else 0:.2g} % at {at:.4g} Hz (or an alias of it):"
                    " look for ripple on the supply or pick-up",
                )
            ]
    return []
