"""What the instrument digitises: simulated builds that drift and are trimmed, or patterns for the tests."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from tools.bench import Waves, simulate
from tools.bench.chain import Input, measure, screen

CODES = 256


@dataclass(frozen=True, eq=False)
class Digitised:
    """One channel as converted: volts = codes·step + origin; sample i at start + i·interval (s)."""

    codes: NDArray[np.uint8]
    step: float
    origin: float
    interval: float
    start: float

    @property
    def volts(self) -> NDArray[np.float64]:
        """Shape (samples,)."""
        return self.codes * self.step + self.origin


class Source(Protocol):
    """Something to digitise; ``channels`` are the instrument's names, ``span`` the length of a record (s)."""

    channels: Sequence[str]

    @property
    def span(self) -> float: ...

    def digitise(self, number: int) -> dict[str, Digitised]: ...


@dataclass
class Trimmer:
    """A part that someone turns: from ``low`` to ``high`` and back in ``turn`` s, or left where it is.

    ``at`` is its position from 0 to 1.
    """

    part: str
    low: float
    high: float
    at: float = 0.5
    turn: float = 0.0

    def value(self, elapsed: float) -> float:
        """The part's value (SI) after ``elapsed`` s."""
        at = self.at
        if self.turn > 0:
            phase = (at / 2 + elapsed / self.turn) % 1.0
            at = 2 * phase if phase < 0.5 else 2 - 2 * phase
        return self.low + at * (self.high - self.low)


class CircuitSource:
    """A build on the bench, seen through a scope of eight bits.

    Parameters
    ----------
    circuit, parts
        As ``tools.bench.simulate`` takes them (values in SI).
    nodes : mapping of the instrument's channel name to node
    samples : int
    cycles : float
        Cycles in a record; the time base is set once, from the first period.
    noise : float
        Rms in divisions of the screen.
    drift : mapping of part to relative change per hour
    probe : mapping of node to (resistance, capacitance)
    clock : callable
        Seconds; replaced in tests.
    """

    def __init__(
        self,
        circuit: str,
        parts: Mapping[str, float],
        nodes: Mapping[str, str],
        *,
        samples: int = 4000,
        cycles: float = 10.0,
        noise: float = 0.03,
        drift: Mapping[str, float] | None = None,
        trimmer: Trimmer | None = None,
        probe: Mapping[str, tuple[float, float]] | None = None,
        seed: int = 0,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self.circuit = circuit
        self.parts = dict(parts)
        self.nodes = dict(nodes)
        self.channels = tuple(nodes)
        self.samples = samples
        self.noise = noise
        self.drift = dict(drift or {})
        self.trimmer = trimmer
        self.probe = dict(probe or {})
        self.seed = seed
        self._clock = clock
        self._began = clock()
        self._simulated: tuple[tuple[float, ...], Waves] | None = None
        first = self._waves()
        if not first.oscillates:
            raise ValueError(f"this {circuit} does not oscillate: it ends {first.ends_in}")
        self.interval = cycles * first.period / samples
        seen = first.at(np.linspace(0.0, first.span, 2001)[:-1])
        unknown = set(self.nodes.values()) - set(seen)
        if unknown:
            raise ValueError(f"{circuit} has no node {', '.join(sorted(unknown))}; it has {', '.join(seen)}")
        self._screens = {node: screen(seen[node]) for node in self.nodes.values()}

    @property
    def span(self) -> float:
        """Length of a record (s)."""
        return self.samples * self.interval

    def now(self) -> dict[str, float]:
        """The parts as they are at this moment (SI)."""
        elapsed = self._clock() - self._began
        parts = dict(self.parts)
        if self.trimmer is not None:
            parts[self.trimmer.part] = self.trimmer.value(elapsed)
        for part, per_hour in self.drift.items():
            parts[part] *= 1.0 + per_hour * elapsed / 3600.0
        return parts

    def digitise(self, number: int) -> dict[str, Digitised]:
        """A record of all channels, with noise of its own."""
        waves = self._waves()
        inputs = {
            node: Input(noise_divisions=self.noise, range=self._screens[node]) for node in self.nodes.values()
        }
        record = measure(waves, inputs, self.interval, self.samples, seed=hash((self.seed, number)) % 2**32)
        return {name: self._coded(record.channels[node], node) for name, node in self.nodes.items()}

    def _coded(self, volts: NDArray[np.float64], node: str) -> Digitised:
        low, high = self._screens[node]
        step = (high - low) / CODES
        codes = np.clip(np.rint((volts - low) / step - 0.5), 0, CODES - 1).astype(np.uint8)
        return Digitised(codes, step, low + 0.5 * step, self.interval, -0.5 * self.span)

    def _waves(self) -> Waves:
        parts = self.now()
        key = tuple(float(f"{value:.5g}") for value in parts.values())
        if self._simulated is None or self._simulated[0] != key:
            waves = simulate(self.circuit, parts, probe=self.probe)
            self._simulated = (key, waves)
        return self._simulated[1]


class PatternSource:
    """Records that tell their acquisition: sample i of acquisition n holds code (n·17 + i·37) mod 256.

    ``number_in(volts)`` reads n (modulo 256) back; every byte value occurs, a line end's too.
    """

    def __init__(self, channels: Sequence[str] = ("CH1", "CH2"), samples: int = 1000) -> None:
        self.channels = tuple(channels)
        self.samples = samples
        self.interval = 1e-5

    @property
    def span(self) -> float:
        """Length of a record (s)."""
        return self.samples * self.interval

    def digitise(self, number: int) -> dict[str, Digitised]:
        """The record of acquisition ``number``; a channel's place in the list sets its volts per step."""
        i = np.arange(self.samples)
        codes = ((number * 17 + i * 37) % CODES).astype(np.uint8)
        return {
            name: Digitised(codes, 0.02 * (k + 1), -2.56 * (k + 1), self.interval, -self.span / 4)
            for k, name in enumerate(self.channels)
        }

    def number_in(self, volts: NDArray[np.float64], channel: str) -> int:
        """n modulo 256 of the acquisition that a channel's volts are of; -1 where they are of none."""
        k = self.channels.index(channel)
        codes = np.rint((volts + 2.56 * (k + 1)) / (0.02 * (k + 1))).astype(int)
        number = int(codes[0]) * pow(17, -1, CODES) % CODES
        i = np.arange(codes.size)
        return number if np.array_equal(codes, (number * 17 + i * 37) % CODES) else -1


class Replay:
    """Records of another source, digitised beforehand, in turn: an instrument that needs no time."""

    def __init__(self, source: Source, records: int = 16) -> None:
        self.channels = tuple(source.channels)
        self._span = source.span
        self._records = [source.digitise(k) for k in range(records)]

    @property
    def span(self) -> float:
        """Length of a record (s)."""
        return self._span

    def digitise(self, number: int) -> dict[str, Digitised]:
        """The next of the records."""
        return self._records[number % len(self._records)]
