"""From parts to waveforms: a build is switched on, left to settle, and looked at."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tools.bench.engine import RTOL, Array, Entry, Rig, Run, Steps, Values, advance, run
from tools.bench.parts import Number, Probe, prepare
from tools.bench.rigs import RIGS

SETTLED = 1e-11


@dataclass(frozen=True, eq=False)
class Waves:
    """What the nodes of one build do over time: ``at(times)`` gives their voltages.

    Attributes
    ----------
    period, high_share : float
        Long-run mean period (s) and share of it in which the circuit charges; NaN where it does not
        oscillate.
    ends_in : str
        The mode in which a build that does not oscillate came to rest ("" where it oscillates).
    starts : ndarray
        Start of every cycle (s) on the waves' own time axis.
    span : float
        Length (s) of what was simulated; beyond it a periodic build repeats, a resting one rests.
    """

    rig: Rig
    values: Values
    steps: tuple[Steps, ...]
    starts: Array
    span: float
    repeats: bool
    period: float
    high_share: float
    ends_in: str = ""
    periods: Array | None = None

    @property
    def oscillates(self) -> bool:
        """Whether the build runs."""
        return not self.ends_in

    def at(self, times: Array) -> dict[str, Array]:
        """Node voltages (V) at times (s, sorted) >= 0."""
        t = np.mod(times, self.span) if self.repeats else np.minimum(times, self.span)
        begin = np.concatenate([s.time for s in self.steps])
        owner = np.concatenate([np.full(s.time.size, i) for i, s in enumerate(self.steps)])
        inner = np.concatenate([np.arange(s.time.size) for s in self.steps])
        order = np.argsort(begin, kind="stable")
        begin, owner, inner = begin[order], owner[order], inner[order]
        which = np.clip(np.searchsorted(begin, t, side="right") - 1, 0, begin.size - 1)
        out = {node: np.empty(t.size) for node in self.rig.nodes}
        for i, steps in enumerate(self.steps):
            mine = np.flatnonzero(owner[which] == i)
            if not mine.size:
                continue
            k = inner[which[mine]]
            mode = self.rig.modes[steps.mode](self.values.take(steps.element[k]))
            h = np.minimum(t[mine] - steps.time[k], steps.length[k])
            state = advance(mode.rates, steps.state[:, k], np.maximum(h, 0.0))[0]
            for node, volts in mode.nodes(state).items():
                out[node][mine] = volts
        return out


def settle(
    rig: Rig, p: Values, most: int = 60, rtol: float = RTOL, close: float = SETTLED
) -> tuple[Run, NDArray[np.bool_]]:
    """Run n builds until their cycles repeat; the last whole cycle, and which builds oscillate."""
    mode, y = rig.running(p)
    y = np.broadcast_to(y, (y.shape[0], p.size)).copy()
    done = run(rig, p, mode, y, cycles=1, rtol=rtol)
    alive = done.cycles >= 1
    for _ in range(most):
        if not alive.any():
            break
        index = np.flatnonzero(alive)
        again = run(rig, p.take(index), rig.first, done.state[:, index], cycles=1, rtol=rtol)
        moved = np.max(np.abs(again.state - done.state[:, index]) / np.maximum(np.abs(again.state), 1e-3), axis=0)
        alive[index[(again.cycles < 1) | (again.time <= 0)]] = False
        done.state[:, index] = again.state
        if np.all(moved[again.cycles >= 1] < close):
            break
    return done, alive


def _draw(rng: np.random.Generator, cycles: int, threshold_noise: float, lag: float) -> dict[str, Array]:
    return {
        "trip_up": threshold_noise * rng.standard_normal(cycles),
        "trip_down": threshold_noise * rng.standard_normal(cycles),
        "late_up": lag * rng.standard_exponential(cycles),
    }


def _repeat(p: Values, n: int) -> Values:
    return Values({k: np.repeat(v[:1], n) for k, v in p.__dict__.items()})


def _chain(rig: Rig, p: Values, first: Array, n: int) -> tuple[Run, Array]:
    """n cycles with their own noise, each from where the one before ended: repeated side by side until they
    agree."""
    y = np.repeat(first[:, None], n, axis=1)
    for _ in range(50):
        done = run(rig, p, rig.first, y, cycles=1, keep=True)
        if (done.cycles < 1).any():
            raise RuntimeError(f"{rig.name}: a cycle did not come; the noise on the thresholds stops this build")
        after = np.concatenate([first[:, None], done.state[:, :-1]], axis=1)
        moved = np.max(np.abs(after - y))
        y = after
        if moved <= 1e-10 * np.max(np.abs(y)):
            break
    return done, done.time


def _share(done: Run, rig: Rig) -> float:
    total = np.zeros(done.time.size)
    since, mode = np.zeros(done.time.size), [rig.first] * done.time.size
    for entry in sorted(done.entries, key=lambda e: float(e.time.min())):
        for i, t in zip(entry.element, entry.time, strict=True):
            if mode[i] in rig.high:
                total[i] += t - since[i]
            since[i], mode[i] = t, entry.after
    return float(total.sum() / done.time.sum())


def simulate(
    circuit_name: str,
    parts: Mapping[str, Number | None],
    *,
    probe: Mapping[str, Probe] | None = None,
    cycles: int = 1,
    seed: int = 0,
    start: str = "running",
    threshold_noise: float = 0.0,
    lag: float = 0.0,
    **options: float,
) -> Waves:
    """Integrate one build.

    Parameters
    ----------
    circuit_name, parts
        As in the build sheet; values in SI, parasitics included; None: not there.
    probe : mapping of node to (resistance in ohm, capacitance in F)
        What hangs on the nodes while they are looked at.
    cycles : int
        How many cycles to integrate where they differ (noise, or start "from rest"); without noise a running
        build is integrated over one settled cycle, which repeats.
    start : "running" or "from rest"
        Settled, or from power-on.
    threshold_noise : float
        Rms of the trip levels from one cycle to the next (V).
    lag : float
        Mean of an exponentially distributed lag at the upper trip (s), on top of ``delay``: a lamp's
        statistical lag.
    options : the rig's own refinements (``valley_bend``, ``lamp_bend``, ...).
    """
    rig = RIGS[circuit_name]
    rng = np.random.default_rng(seed)
    p = prepare(rig, parts, probe, **options)
    mean = p.changed(late_up=p.late_up + lag)
    settled, alive = settle(rig, mean)
    if not alive[0]:
        return _resting(rig, p, start)
    noisy = threshold_noise > 0 or lag > 0
    if start == "running" and not noisy:
        cycles = 1
    own = _repeat(p, cycles).changed(**_draw(rng, cycles, threshold_noise, lag)) if noisy else _repeat(p, cycles)
    if start == "running":
        done, lengths = _chain(rig, own, settled.state[:, 0], cycles)
        return _waves(rig, own, done.steps, lengths, 0.0, not noisy, _share(done, rig))
    return _from_rest(rig, own, cycles, settled.state[:, 0])


def _waves(
    rig: Rig, own: Values, steps: list[Steps], lengths: Array, lead: float, repeats: bool, share: float
) -> Waves:
    starts = lead + np.concatenate([[0.0], np.cumsum(lengths)])
    moved = tuple(replace(s, time=s.time + starts[s.element]) for s in steps)
    return Waves(rig, own, moved, starts, float(starts[-1]), repeats, float(lengths.mean()), share, periods=lengths)


def _from_rest(rig: Rig, own: Values, cycles: int, settled: Array) -> Waves:
    """Power-on, then ``cycles`` cycles."""
    mode, y = rig.rest(own.take(np.array([0])))
    head = run(rig, own.take(np.array([0])), mode, y, cycles=1, keep=True)
    if head.cycles[0] < 1:
        return _resting(rig, own, "from rest")
    done, lengths = _chain(rig, own, head.state[:, 0], cycles)
    waves = _waves(rig, own, done.steps, lengths, float(head.time[0]), False, _share(done, rig))
    return replace(waves, steps=tuple(head.steps) + waves.steps)


def _resting(rig: Rig, p: Values, start: str) -> Waves:
    """A build that does not oscillate: its only way from power-on to where it stays."""
    one = p.take(np.array([0]))
    mode, y = rig.rest(one)
    done = run(rig, one, mode, y, until=rig.horizon(one), keep=True)
    span = float(done.time[0])
    last = Steps(done.mode[0], np.array([0]), np.array([span]), np.zeros(1), done.state[:, :1])
    steps = (*done.steps, last) if start == "from rest" else (replace(last, time=np.zeros(1)),)
    return Waves(
        rig,
        one,
        steps,
        np.empty(0),
        span if start == "from rest" else 0.0,
        False,
        float("nan"),
        float("nan"),
        ends_in=done.mode[0],
    )


def trips(waves_entries: list[Entry]) -> list[tuple[str, str, float]]:
    """The mode changes of the first element in order of time: (from, to, s)."""
    all_of = [
        (e.before, e.after, float(t)) for e in waves_entries for i, t in zip(e.element, e.time, strict=True) if i == 0
    ]
    return sorted(all_of, key=lambda x: x[2])
