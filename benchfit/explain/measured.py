"""The quantities of the record's ``measured`` section: cycle constants with the scope's own terms added."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

import numpy as np

from benchfit.cycle.constants import CycleConstants
from benchfit.explain.model import Array
from benchfit.explain.result import Quantity
from benchfit.sheet.model import Scope

NAMES = (
    "frequency",
    "period",
    "duty",
    "jitter",
    "charge_time",
    "discharge_time",
    "upper",
    "lower",
    "charge_asymptote",
    "charge_time_constant",
    "discharge_asymptote",
    "discharge_time_constant",
    "high",
    "low",
    "rise_time",
    "fall_time",
)
UNITS = {"frequency": "Hz", "duty": "1"}
VOLTS = ("upper", "lower", "charge_asymptote", "discharge_asymptote", "high", "low")


def _derived(
    constants: CycleConstants,
) -> Mapping[str, tuple[Callable[[Mapping[str, float]], float], tuple[str, ...]]]:
    """Name → (function of the constants, the constants it needs)."""
    has_share = "charge_share" in constants
    duty = "high_share" if "high_share" in constants else "charge_share"
    c_start = "charge_start" if "charge_start" in constants else "lower"
    d_start = "discharge_start" if "discharge_start" in constants else "upper"

    def asymptote(start: str, end: str, word: str) -> Callable[[Mapping[str, float]], float]:
        def of(x: Mapping[str, float]) -> float:
            share = x["charge_share"] if word == "charge" else 1 - x["charge_share"]
            return x[start] + (x[end] - x[start]) / -math.expm1(-x[f"{word}_curvature"] * share * x["period"])

        return of

    found: dict[str, tuple[Callable[[Mapping[str, float]], float], tuple[str, ...]]] = {
        "frequency": (lambda x: 1 / x["period"], ("period",)),
        "duty": (lambda x: x[duty], (duty,)),
        "charge_time": (lambda x: x["charge_share"] * x["period"], ("charge_share", "period")),
        "discharge_time": (lambda x: (1 - x["charge_share"]) * x["period"], ("charge_share", "period")),
        "charge_time_constant": (lambda x: 1 / x["charge_curvature"], ("charge_curvature",)),
        "discharge_time_constant": (lambda x: 1 / x["discharge_curvature"], ("discharge_curvature",)),
        "charge_asymptote": (
            asymptote(c_start, "upper", "charge"),
            ("charge_share", "period", "charge_curvature", c_start, "upper"),
        ),
        "discharge_asymptote": (
            asymptote(d_start, "lower", "discharge"),
            ("charge_share", "period", "discharge_curvature", d_start, "lower"),
        ),
    }
    if not has_share and "high_share" in constants:
        found["charge_time"] = (lambda x: x["high_share"] * x["period"], ("high_share", "period"))
        found["discharge_time"] = (lambda x: (1 - x["high_share"]) * x["period"], ("high_share", "period"))
    return found


def measured(constants: CycleConstants, scope: Scope, output_times: bool) -> dict[str, Quantity | None]:
    """Every quantity of the contract's ``measured`` section; None where the record does not give it.

    ``u_noise`` is type A; ``u`` adds the timebase to times and each channel's gain and offset to voltages (type B,
    rectangles: JCGM 100, 4.3.7). ``output_times``: the output's high and low times are those of charge and discharge.
    """
    found: dict[str, Quantity | None] = dict.fromkeys(NAMES)
    if not constants.oscillates:
        return _single_ramp(constants, scope, found)
    point = {n: constants.value(n) for n in constants.names}
    derived = _derived(constants)
    for name in NAMES:
        if name == "jitter":
            if constants.jitter is not None:
                j, u = constants.jitter
                found[name] = Quantity(j, _clock(u, j, scope), "s", u)
            continue
        if name in ("charge_time", "discharge_time") and "charge_share" not in constants and not output_times:
            continue
        if name in derived:
            function, needs = derived[name]
            if not all(n in constants for n in needs):
                continue
            word = name.split("_")[0]
            if name.endswith(("asymptote", "time_constant")) and _straight(constants, f"{word}_curvature"):
                continue
            value, noise = _propagate(function, needs, point, constants)
        elif name in constants:
            value, noise = constants.value(name), constants.u(name)
        else:
            continue
        if name == "upper" and constants.highest is not None:
            value, noise = constants.highest
        if name == "lower" and constants.lowest is not None:
            value, noise = constants.lowest
        found[name] = _with_scope(name, value, noise, constants, scope)
    return found


def _straight(constants: CycleConstants, name: str) -> bool:
    return constants.value(name) < 2 * constants.u(name)


def _propagate(
    function: Callable[[Mapping[str, float]], float],
    needs: tuple[str, ...],
    point: Mapping[str, float],
    constants: CycleConstants,
) -> tuple[float, float]:
    """Value and u of a function of the constants: first order, full covariance (JCGM 100, 5.2)."""
    value = function(point)
    rows = [constants.names.index(n) for n in needs]
    covariance: Array = constants.covariance[np.ix_(rows, rows)]
    slope = []
    for name, row in zip(needs, rows, strict=True):
        step = max(1e-6 * abs(point[name]), 1e-3 * math.sqrt(constants.covariance[row, row]), 1e-300)
        up, down = dict(point), dict(point)
        up[name] += step
        down[name] -= step
        slope.append((function(up) - function(down)) / (2 * step))
    s = np.array(slope)
    return value, float(np.sqrt(max(s @ covariance @ s, 0.0)))


def _clock(u: float, value: float, scope: Scope) -> float:
    return math.hypot(u, scope.timebase / math.sqrt(3.0) * value)


def _with_scope(name: str, value: float, noise: float, constants: CycleConstants, scope: Scope) -> Quantity:
    if name == "duty":
        return Quantity(value, noise, "1", noise)
    if name in VOLTS:
        node = next(
            (
                n
                for n in constants.spans
                if (n == "output" or n.startswith("collector")) == (name in ("high", "low"))
            ),
            next(iter(constants.spans), ""),
        )
        low, high = constants.spans.get(node, (0.0, 0.0))
        offset = scope.offset if scope.offset is not None else 0.02 * (high - low)
        u = math.sqrt(noise**2 + (scope.gain**2 * value**2 + offset**2) / 3)
        return Quantity(value, u, "V", noise)
    unit = "Hz" if name == "frequency" else "s"
    return Quantity(value, _clock(noise, value, scope), unit, noise)


def _single_ramp(
    constants: CycleConstants, scope: Scope, found: dict[str, Quantity | None]
) -> dict[str, Quantity | None]:
    """A single charge or discharge still gives its asymptote and time constant."""
    if (
        "ramp_asymptote" in constants
        and "ramp_curvature" in constants
        and not _straight(constants, "ramp_curvature")
    ):
        rising = "ramp_start" not in constants or constants.value("ramp_asymptote") > constants.value(
            "ramp_start"
        )
        word = "charge" if rising else "discharge"
        kappa, u = constants.value("ramp_curvature"), constants.u("ramp_curvature")
        found[f"{word}_time_constant"] = Quantity(
            1 / kappa, _clock(u / kappa**2, 1 / kappa, scope), "s", u / kappa**2
        )
        found[f"{word}_asymptote"] = _with_scope(
            f"{word}_asymptote",
            constants.value("ramp_asymptote"),
            constants.u("ramp_asymptote"),
            constants,
            scope,
        )
    return found
