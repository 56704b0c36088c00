"""What to read next: for each reading that a bench can give, how far it should raise the first probability.

Under the present posterior each live hypothesis predicts the reading with a spread; readings are drawn from the
mixture and the first probability that each would leave is averaged (preposterior analysis; Lindley 1956).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np

from benchfit.explain.model import Array, Model, View
from benchfit.explain.parts import Averaged
from benchfit.explain.result import NextReading
from benchfit.explain.spread import principal_points

# Meters as they stand on a bench (common practice): limits as a fraction of the reading.
METER = {
    "resistor": 0.005,
    "capacitor": 0.02,
    "supply": 0.003,
    "level": 0.01,
    "threshold": 0.02,
    "current": 0.01,
}
DRAWS = 60
WORTH = 0.005


@dataclass(frozen=True)
class _Offer:
    reading: str
    about: str
    cost: float


def next_readings(model: Model, averaged: Averaged, readings: Sequence[str]) -> tuple[NextReading, ...]:
    """The readings worth taking, best first."""
    if len(averaged.live) < 2:
        return ()
    rng = np.random.default_rng(20)
    found = []
    for offer, means, covariances in _offers(model, averaged, readings):
        rise = _expected_rise(averaged.weights, means, covariances, rng)
        if rise >= WORTH:
            found.append((rise - offer.cost, NextReading(offer.reading, offer.about, float(rise))))
    found.sort(key=lambda pair: -pair[0])
    return tuple(f for _, f in found[:5])


Predicted = tuple["_Offer", list[Array], list[Array]]


def _offers(model: Model, averaged: Averaged, readings: Sequence[str]) -> Iterator[Predicted]:
    for i, p in enumerate(model.parameters):
        kind = p.part.kind if p.part else ""
        if kind in METER and p.name not in readings:
            how = {
                "resistor": "resistance, one end lifted",
                "capacitor": "capacitance, out of circuit, at its working frequency",
                "supply": "d.c. voltage at the pin",
                "level": "level of the unloaded output",
                "threshold": "threshold, by itself",
                "current": "current, by a meter in its leg",
            }[kind]
            means = [np.array([w.mean[i]]) for w in averaged.live]
            scale = 1.0 if p.coordinate == "log" else max(abs(p.nominal), 1e-12)
            noise = (METER[kind] * scale / np.sqrt(3)) ** 2
            yield (
                _Offer(f"{how}: {p.name}", p.name, {"threshold": 0.2, "capacitor": 0.02}.get(kind, 0.0)),
                means,
                [np.array([[w.covariance[i, i] + noise]]) for w in averaged.live],
            )
    view = model.views[0]
    node = next((n for n in model.circuit.nodes if n.shape != "square"), None)
    if node is None:
        return
    if not view.timing:
        seen = replace(view, timing=node.name, shape=node.shape, loads={})
        offer = _Offer(f"capture the {node.name} node (d.c. coupled, ×10 probe)", node.name, 0.0)
        yield from _capture_offer(model, averaged, seen, offer)
    elif view.loads:
        words = "frequency with the probe lifted (at the output, or by a ×100 probe)"
        yield from _capture_offer(
            model, averaged, view.without_probe(), _Offer(words, view.timing, 0.0), True
        )
    capacitor = view.capacitor
    nominal = float(model.values(model.nominal)[capacitor])
    added = _Added(model, replace(view, timing=view.timing or node.name), 0.5 * nominal)
    yield from added.offers(averaged, capacitor)


def _vector(model: Model, view: View, states: Array, period_only: bool) -> Array:
    found = model.constants_of(view, model.values(states))
    rows = [np.log(found["period"])]
    if not period_only:
        for name in ("charge_share", "high_share"):
            if name in found:
                rows.append(found[name])
        for name in ("upper", "lower"):
            if name in found:
                rows.append(found[name] / model.swing)
        for name in ("charge_curvature", "discharge_curvature"):
            if name in found:
                rows.append(found[name] * found["period"] / 2)
    return np.stack([np.broadcast_to(r, states.shape[:-1]) for r in rows], axis=-1)


def _noise(size: int) -> Array:
    """Typical spread of what a second capture gives: 5e-4 in ln T, 0.1 % share, 1 % of the swing, 2 % bend."""
    typical = [5e-4, 1e-3, 1e-3, 0.01, 0.01, 0.02, 0.02]
    return np.diag(np.square(typical[:size] if size == 1 else (typical + [0.02] * size)[:size]))


def _capture_offer(
    model: Model, averaged: Averaged, view: View, offer: _Offer, period_only: bool = False
) -> Iterator[Predicted]:
    means, covariances = [], []
    for w in averaged.live:
        with np.errstate(all="ignore"):
            points = _vector(model, view, principal_points(w.mean, w.covariance), period_only)
        if not np.all(np.isfinite(points[0])):
            return
        moves = np.nan_to_num(points[1:] - points[0])
        means.append(points[0])
        covariances.append(moves.T @ moves + _noise(points.shape[1]))
    yield offer, means, covariances


@dataclass(frozen=True)
class _Added:
    """The same capture with a known capacitor across the timing one: T goes by the whole resistance."""

    model: Model
    view: View
    extra: float

    def offers(self, averaged: Averaged, capacitor: str) -> Iterator[Predicted]:
        means, covariances = [], []
        for w in averaged.live:
            states = principal_points(w.mean, w.covariance)
            with np.errstate(all="ignore"):
                values = self.model.values(states)
                bare = self.model.constants_of(self.view, values)["period"]
                more = {**values, capacitor: values[capacitor] + self.extra}
                full = self.model.constants_of(self.view, more)["period"]
                points = np.log(full / bare)[:, None]
            if not np.isfinite(points[0, 0]):
                return
            moves = np.nan_to_num(points[1:] - points[0])
            means.append(points[0])
            covariances.append(moves.T @ moves + np.array([[5e-3**2]]))
        from benchfit.quantity import si

        yield (
            _Offer(
                f"the same capture with a known capacitor of about {si(self.extra, 'F')} across {capacitor}",
                capacitor,
                0.01,
            ),
            means,
            covariances,
        )


def _expected_rise(
    weights: Array, means: Sequence[Array], covariances: Sequence[Array], rng: np.random.Generator
) -> float:
    """E[largest posterior probability after the reading] − the largest now."""
    factors = [np.linalg.cholesky(c + (1e-9 * np.trace(c) + 1e-30) * np.eye(len(c))) for c in covariances]
    total = 0.0
    for q, mean, factor in zip(weights, means, factors, strict=True):
        draws = mean + rng.standard_normal((DRAWS, mean.size)) @ factor.T
        logs = []
        for p, other, root in zip(weights, means, factors, strict=True):
            white = np.linalg.solve(root, (draws - other).T)
            logs.append(np.log(p) - 0.5 * np.sum(white**2, axis=0) - np.sum(np.log(np.diag(root))))
        table = np.array(logs)
        table = np.exp(table - table.max(axis=0))
        total += q * float(np.mean(table.max(axis=0) / table.sum(axis=0)))
    return max(total - float(np.max(weights)), 0.0)
