"""Captures of builds that the tools' bench integrates: the explanation never sees where they come from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from benchfit.capture.model import Capture, Channel
from benchfit.pipeline import Found, explain
from benchfit.sheet.model import Sheet
from tools.bench import simulate
from tools.bench.chain import Input, measure
from tools.bench.simulate import Waves


def recorded(
    waves: Waves,
    nodes: Sequence[str],
    *,
    cycles: float = 6.3,
    samples: int = 4000,
    seed: int = 0,
    begin: float | None = None,
    length: float | None = None,
    inputs: Mapping[str, Mapping[str, Any]] | None = None,
    timebase: float = 0.0,
) -> Capture:
    """What an 8-bit scope shows of some nodes; ``inputs`` changes a channel's setting (see Input)."""
    settings = {n: Input(**{"noise_divisions": 0.03, **(inputs or {}).get(n, {})}) for n in nodes}
    span = length if length is not None else cycles * waves.period
    interval = float(f"{span / samples:.3g}")
    record = measure(waves, settings, interval, samples, begin=begin, seed=seed, timebase=timebase)
    channels = []
    for node in nodes:
        values = record.channels[node]
        steps = np.diff(np.unique(values))
        channels.append(Channel(node, "V", values, float(steps.min()) if steps.size else 0.0))
    return Capture("bench.csv", record.interval, record.start, tuple(channels))


def shot(circuit: str, parts: Mapping[str, float], nodes: Sequence[str], **more: Any) -> Capture:
    """One capture of a build; ``probe``: node → (Ω, F); what else simulate or the scope take by name."""
    bench = {k: more.pop(k) for k in ("probe", "start", "threshold_noise", "lag", "output_drop") if k in more}
    seed = more.get("seed", 0)
    noisy = bench.get("threshold_noise") or bench.get("lag")
    waves = simulate(circuit, parts, seed=seed, cycles=12 if noisy else 1, **bench)
    return recorded(waves, nodes, **more)


def explained(
    circuit: str, parts: Mapping[str, float], sheet: str, nodes: Sequence[str], **more: Any
) -> Found:
    """The explanation of one capture with a build sheet (its text)."""
    return explain(shot(circuit, parts, nodes, **more), Sheet.parse(sheet))


def first(found: Found) -> tuple[str, ...]:
    """The causes of the first suspect."""
    return tuple(found.explanation.suspects[0].causes)


def codes(found: Found) -> set[str]:
    """Codes of the warnings."""
    return {w.code for w in found.explanation.warnings}
