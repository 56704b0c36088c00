"""A small integrator for switched circuits: many builds (or many cycles) side by side.

A rig (one circuit on the bench) is a set of modes. In each mode the states obey a differential equation,
which is integrated with the Runge–Kutta pair of Dormand and Prince (J. Comput. Appl. Math. 6 (1980) 19),
order 5(4), every element with its own step size. A mode ends at an event g(y) >= 0, or when its time is up.
The event is located on the integrator itself (shorter and shorter steps from the same start), and samples are
taken the same way: there is no interpolation formula, and nothing here knows that the solution may be an
exponential.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Numbers = dict[str, Any]
RTOL = 1e-10
MOST_STEPS = 6000

_A = (
    (),
    (1 / 5,),
    (3 / 40, 9 / 40),
    (44 / 45, -56 / 15, 32 / 9),
    (19372 / 6561, -25360 / 2187, 64448 / 6561, -212 / 729),
    (9017 / 3168, -355 / 33, 46732 / 5247, 49 / 176, -5103 / 18656),
    (35 / 384, 0.0, 500 / 1113, 125 / 192, -2187 / 6784, 11 / 84),
)
_E = (71 / 57600, 0.0, -71 / 16695, 71 / 1920, -17253 / 339200, 22 / 525, -1 / 40)


class Values:
    """Numbers of one shape (n,), by name: the parts of n builds, or of n cycles of one build."""

    def __init__(self, values: Mapping[str, Array]) -> None:
        self.__dict__.update(values)

    def __getattr__(self, name: str) -> Array:
        raise AttributeError(f"the bench was given no {name}")

    def take(self, index: NDArray[np.int64]) -> Values:
        """The same numbers for some of the elements."""
        return Values({k: v[index] for k, v in self.__dict__.items()})

    def changed(self, **values: Array) -> Values:
        """A copy in which some numbers are others."""
        return Values({**self.__dict__, **values})

    @property
    def size(self) -> int:
        """How many elements there are side by side."""
        return int(next(iter(self.__dict__.values())).size)


@dataclass(frozen=True, eq=False)
class End:
    """A way out of a mode: when g(y), shape (n,), turns from negative to positive; y then jumps to
    ``jump(y)``."""

    when: Callable[[Array], Array]
    then: str
    jump: Callable[[Array], Array] | None = None


@dataclass(frozen=True, eq=False)
class Mode:
    """One stretch of the cycle, bound to the parts of n elements.

    ``rates(y)`` is dy/dt, shape (states, n); ``nodes(y)`` the voltages that a probe would see. ``lasts`` is
    the time (s) after which the mode ends of itself for ``then``.
    """

    rates: Callable[[Array], Array]
    nodes: Callable[[Array], dict[str, Array]]
    ends: tuple[End, ...] = ()
    lasts: Array | None = None
    then: str = ""
    jump: Callable[[Array], Array] | None = None


@dataclass(frozen=True, eq=False)
class Rig:
    """One circuit on the bench.

    ``modes`` maps each mode's name to what binds it to parts; ``first`` is the mode whose entry starts a
    cycle; ``high`` names the modes in which the output is high (or, without an output, the capacitor
    charges). ``running(p)`` and ``rest(p)`` give (mode, y) to start from: somewhere
    in the cycle, and at power-on. ``horizon(p)`` is a time (s) in which any cycle that comes has come.
    ``defaults`` are the values of parts that were not given; ``fill(parts)`` adds those that follow other
    parts.
    """

    name: str
    nodes: tuple[str, ...]
    first: str
    high: frozenset[str]
    modes: Mapping[str, Callable[[Values], Mode]]
    running: Callable[[Values], tuple[str, Array]]
    rest: Callable[[Values], tuple[str, Array]]
    horizon: Callable[[Values], Array]
    required: tuple[str, ...]
    defaults: Mapping[str, Any] = field(default_factory=dict)
    fill: Callable[[Numbers], Numbers] = dict


@dataclass(frozen=True, eq=False)
class Steps:
    """Accepted steps of one mode: elements, start times, lengths (s) and start states (states, n)."""

    mode: str
    element: NDArray[np.int64]
    time: Array
    length: Array
    state: Array


@dataclass(frozen=True, eq=False)
class Entry:
    """Elements that changed mode: when (s), from which state and into which."""

    before: str
    after: str
    element: NDArray[np.int64]
    time: Array
    left: Array
    entered: Array


@dataclass(eq=False)
class Run:
    """What happened: final times, states and modes, cycles completed, which elements came to rest."""

    time: Array
    state: Array
    mode: list[str]
    cycles: NDArray[np.int64]
    resting: NDArray[np.bool_]
    steps: list[Steps] = field(default_factory=list)
    entries: list[Entry] = field(default_factory=list)


def advance(rates: Callable[[Array], Array], y: Array, h: Array) -> tuple[Array, Array, Array]:
    """One step of length h (n,) from y (states, n): new state, error estimate, dy/dt at the end."""
    k = [rates(y)]
    for row in _A[1:]:
        total = row[0] * k[0]
        for a, slope in zip(row[1:], k[1:], strict=True):
            if a:
                total = total + a * slope
        z = y + h * total
        k.append(rates(z))
    error = _E[0] * k[0]
    for e, slope in zip(_E[1:], k[1:], strict=True):
        if e:
            error = error + e * slope
    return z, h * error, k[-1]


def _locate(mode: Mode, when: Callable[[Array], Array], y: Array, h: Array) -> Array:
    """Fraction of the step at which the event comes, by the Illinois variant of the rule of false
    position."""
    lo, hi = np.zeros_like(h), np.ones_like(h)
    g_lo, g_hi = when(y), when(advance(mode.rates, y, h)[0])
    side = np.zeros(h.size, dtype=int)
    for turn in range(60):
        x = (lo * g_hi - hi * g_lo) / np.where(g_hi == g_lo, 1.0, g_hi - g_lo)
        x = np.where((x > lo) & (x < hi) & (turn % 8 < 7), x, 0.5 * (lo + hi))
        g = when(advance(mode.rates, y, x * h)[0])
        up = g >= 0
        hi, g_hi = np.where(up, x, hi), np.where(up, g, g_hi)
        lo, g_lo = np.where(up, lo, x), np.where(up, g_lo, g)
        g_lo = np.where(up & (side > 0), 0.5 * g_lo, g_lo)
        g_hi = np.where(~up & (side < 0), 0.5 * g_hi, g_hi)
        side = np.where(up, 1, -1)
        if np.all((hi - lo < 4e-16) | (np.abs(g) < 1e-15) | ((hi - lo) < 1e-13)):
            break
    return np.where(np.abs(g) < 1e-15, x, hi)


class _Pass:
    """One stay of a group of elements in one mode."""

    def __init__(self, mode: Mode, y: Array, left: Array, rtol: float) -> None:
        self.mode, self.y, self.left, self.rtol = mode, y.copy(), left, rtol
        n = y.shape[1]
        self.spent = np.zeros(n)
        self.exit = np.full(n, -1)  # index of the End; len(ends): time up; -2: deadline; -3: at rest
        self.scale = np.maximum(np.abs(y), 1e-3)
        lasts = np.full(n, np.inf) if mode.lasts is None else np.broadcast_to(mode.lasts, (n,)).astype(float)
        self.timed = np.isfinite(lasts)
        self.limit = np.minimum(lasts, left)
        self.exit[self.limit <= 0] = np.where(lasts <= left, len(mode.ends), -2)[self.limit <= 0]
        for j, end in enumerate(mode.ends):
            self.exit[(self.exit == -1) & (end.when(self.y) >= 0)] = j
        self.lasts = lasts
        slope = np.max(np.abs(mode.rates(self.y)) / self.scale, axis=0)
        self.h = np.minimum(0.01 / np.maximum(slope, 1e-300), self.limit)
        self.record: list[tuple[NDArray[np.int64], Array, Array, Array]] = []
        self.mode_of: Callable[[NDArray[np.int64]], Mode] = lambda some: mode
        self._bound: tuple[bytes, Mode] = (b"", mode)

    def work(self, keep: bool) -> None:
        """Step until every element has left; one that takes too many steps is left where it is."""
        for _ in range(MOST_STEPS):
            live = np.flatnonzero(self.exit == -1)
            if live.size == 0:
                return
            self._step(live, keep)
        self.exit[self.exit == -1] = -2

    def _step(self, live: NDArray[np.int64], keep: bool) -> None:
        whole = live.size == self.exit.size
        if not whole and self._bound[0] != live.tobytes():
            self._bound = (live.tobytes(), self.mode_of(live))
        mode = self.mode if whole else self._bound[1]
        y, scale = self.y[:, live], self.scale[:, live]
        room = (self.limit - self.spent)[live]
        h = np.minimum(self.h[live], room)
        new, error, slope = advance(mode.rates, y, h)
        size = np.max(
            np.abs(error) / (0.01 * self.rtol * scale + self.rtol * np.maximum(np.abs(y), np.abs(new))),
            axis=0,
        )
        size = np.where(np.isfinite(size), size, 1e9)
        good = size <= 1
        grow = np.clip(0.9 * np.maximum(size, 1e-10) ** -0.2, 0.2, 5.0)
        self.h[live] = h * grow
        moved = np.where(good, h, 0.0)
        leave = np.full(live.size, -1)
        for j, end in enumerate(mode.ends):
            hit = np.flatnonzero(good & (end.when(new) >= 0))
            if hit.size:
                self._hit(live, hit, j, y, h, new, moved, leave)
        up = (leave == -1) & good & (h >= room)
        leave[up] = np.where(self.lasts <= self.left, len(mode.ends), -2)[live][up]
        still = np.max(np.abs(slope) * h / scale, axis=0) < 30 * self.rtol
        leave[(leave == -1) & good & still & ~self.timed[live]] = -3
        if keep:
            done = np.flatnonzero(good)
            self.record.append((live[done], self.spent[live[done]].copy(), moved[done], y[:, done]))
        self.y[:, live] = np.where(good, new, y)
        self.spent[live] += moved
        self.scale[:, live] = np.maximum(scale, np.abs(self.y[:, live]) * 0.1)
        self.exit[live] = leave

    def _hit(
        self,
        live: NDArray[np.int64],
        hit: NDArray[np.int64],
        j: int,
        y: Array,
        h: Array,
        new: Array,
        moved: Array,
        leave: NDArray[np.int64],
    ) -> None:
        part = self.mode_of(live[hit])
        x = _locate(part, part.ends[j].when, y[:, hit], h[hit])
        earlier = x * h[hit] < moved[hit]
        first = hit[earlier | (leave[hit] == -1)]
        x = x[earlier | (leave[hit] == -1)]
        moved[first] = x * h[first]
        leave[first] = j
        new[:, first] = advance(self.mode_of(live[first]).rates, y[:, first], moved[first])[0]


def run(
    rig: Rig,
    p: Values,
    mode: str,
    y: Array,
    *,
    cycles: int | None = None,
    until: Array | None = None,
    keep: bool = False,
    rtol: float = RTOL,
) -> Run:
    """Integrate n elements from one mode and their states y (states, n).

    Parameters
    ----------
    cycles : int or None
        Stop each element when it has entered ``rig.first`` that many times.
    until : Array (n,) or None
        Stop at this time (s); default the rig's horizon for each cycle asked for.
    keep : bool
        Record the steps, for sampling.
    rtol : float
        Error allowed in one step, relative to the state.

    An element whose modes chase each other (an output that never reaches its rails, say) is left where it is
    after a few hundred changes: it has not completed its cycles.
    """
    n = p.size
    if until is None:
        until = rig.horizon(p) * (cycles or 1)
    out = Run(np.zeros(n), np.array(y, dtype=float), [mode] * n, np.zeros(n, dtype=int), np.zeros(n, dtype=bool))
    waiting: dict[str, NDArray[np.int64]] = {mode: np.arange(n)}
    for _ in range(400 * (cycles or 1)):
        if not waiting:
            break
        name = max(waiting, key=lambda k: waiting[k].size)
        index = waiting.pop(name)
        _stay(rig, p, name, index, until, cycles, keep, rtol, out, waiting)
    return out


def _stay(
    rig: Rig,
    p: Values,
    name: str,
    index: NDArray[np.int64],
    until: Array,
    cycles: int | None,
    keep: bool,
    rtol: float,
    out: Run,
    waiting: dict[str, NDArray[np.int64]],
) -> None:
    mine = p.take(index)
    stay = _Pass(rig.modes[name](mine), out.state[:, index], until[index] - out.time[index], rtol)
    stay.mode_of = lambda some: rig.modes[name](mine.take(some))
    stay.work(keep)
    for element, spent, length, state in stay.record:
        out.steps.append(Steps(name, index[element], out.time[index[element]] + spent, length, state))
    out.time[index] += stay.spent
    left = stay.y.copy()
    mode = stay.mode
    for j in range(len(mode.ends) + 1):
        some = np.flatnonzero(stay.exit == j)
        if not some.size:
            continue
        bound = stay.mode_of(some)
        after, jump = (bound.then, bound.jump) if j == len(mode.ends) else (bound.ends[j].then, bound.ends[j].jump)
        state = left[:, some] if jump is None else jump(left[:, some])
        out.state[:, index[some]] = state
        out.entries.append(Entry(name, after, index[some], out.time[index[some]].copy(), left[:, some], state))
        _enter(rig, after, index[some], cycles, out, waiting)
    over = np.flatnonzero(stay.exit < 0)
    out.state[:, index[over]] = left[:, over]
    out.resting[index[stay.exit == -3]] = True
    for i in index[over]:
        out.mode[int(i)] = name


def _enter(
    rig: Rig,
    name: str,
    index: NDArray[np.int64],
    cycles: int | None,
    out: Run,
    waiting: dict[str, NDArray[np.int64]],
) -> None:
    for i in index:
        out.mode[int(i)] = name
    if name == rig.first:
        out.cycles[index] += 1
        if cycles is not None:
            index = index[out.cycles[index] < cycles]
    if index.size:
        waiting[name] = np.concatenate([waiting[name], index]) if name in waiting else index
