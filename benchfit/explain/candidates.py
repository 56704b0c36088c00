"""Which circuit could have made this waveform, where no sheet names one: scores from the waveform alone."""

from __future__ import annotations

import math

from benchfit import circuits
from benchfit.circuits.model import Features
from benchfit.cycle.constants import CycleConstants
from benchfit.explain.result import Candidate


def features_of(constants: CycleConstants) -> Features:
    """What can be told from the waveform, on scales that no part's value changes."""

    def get(name: str) -> float | None:
        return constants.value(name) if name in constants else None

    upper, lower = get("upper"), get("lower")
    period = constants.value("period")
    share = get("charge_share")
    ratios: dict[str, float | None] = {"charge": None, "discharge": None}
    asymptotes: dict[str, float | None] = {"charge": None, "discharge": None}
    taus: dict[str, float | None] = {"charge": None, "discharge": None}
    if share is not None and upper is not None and lower is not None:
        for word, part, start, end in (
            ("charge", share, lower, upper),
            ("discharge", 1 - share, upper, lower),
        ):
            kappa = get(f"{word}_curvature")
            start = get(f"{word}_start") or start
            if kappa is None:
                continue
            x = kappa * part * period
            ratios[word] = x
            if kappa > 2 * constants.u(f"{word}_curvature"):
                asymptotes[word] = start + (end - start) / -math.expm1(-x)
                taus[word] = 1 / kappa
    return Features(
        upper=upper,
        lower=lower,
        charge_share=share,
        high_share=get("high_share"),
        high=get("high"),
        low=get("low"),
        charge_bend=ratios["charge"],
        discharge_bend=ratios["discharge"],
        charge_asymptote=asymptotes["charge"],
        discharge_asymptote=asymptotes["discharge"],
        charge_tau=taus["charge"],
        discharge_tau=taus["discharge"],
        jumps="charge_start" in constants and "discharge_start" in constants,
        holds=any(n.startswith("base") for n in constants.spans),
    )


def candidates_of(constants: CycleConstants) -> tuple[Candidate, ...]:
    """Circuits with their scores, best first; scores sum to 1."""
    seen = features_of(constants)
    scores = {name: max(circuits.get(name).likeness(seen), 0.0) for name in circuits.names()}
    total = sum(scores.values())
    if total <= 0:
        return ()
    ranked = sorted(scores.items(), key=lambda pair: -pair[1])
    return tuple(Candidate(name, score / total) for name, score in ranked if score / total > 0.02)
