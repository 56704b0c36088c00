"""The burn-in itself: acquire when it is due, explain, write, and only then say so."""

from __future__ import annotations

import math
import threading
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from benchfit.burnin.alarms import Cleared, Limit, Raised, Watch
from benchfit.burnin.clock import Reading, now, spoken, steady, stepped
from benchfit.burnin.contents import Entry
from benchfit.burnin.log import LogWriter
from benchfit.burnin.packing import Scalar, rounded, scalars
from benchfit.burnin.reader import line
from benchfit.burnin.schedule import Cadence, next_slot
from benchfit.burnin.source import Arrival, Source
from benchfit.capture.model import Capture
from benchfit.errors import BenchfitError, InstrumentError

KEPT = 20
"""Raw captures kept while one alarm stands, besides those that raise and clear it."""
LOOK = 1.0
"""How often a folder is looked into where nothing else is said (s)."""
_NAP = 0.2

Why = Literal["completed", "stopped", "alarm"]


@dataclass(frozen=True)
class Plan:
    """What is to be done.

    Attributes
    ----------
    every : float
        Seconds between slots; 0: as fast as it goes. A folder is looked into at every slot.
    count, time : int, float or None
        Records (failed ones too) and seconds after which it is complete, interrupted sessions included.
    limits : tuple of Limit
    keep : "all", "alarms" or "none"
        Which raw captures the log keeps; a capture that could not be explained counts as an alarm.
    is_stopping : bool
        An alarm ends the run.
    give_up : float or None
        Seconds without a capture after which it ends with an InstrumentError.
    """

    every: float
    count: int | None = None
    time: float | None = None
    limits: tuple[Limit, ...] = ()
    keep: Literal["all", "alarms", "none"] = "alarms"
    is_stopping: bool = False
    give_up: float | None = None


@dataclass(frozen=True, eq=False)
class Logged:
    """A record that is on the disk: ``record`` is what is printed of it; ``done`` counts towards the plan."""

    seq: int
    unit: str
    acquired: float
    record: Mapping[str, Any]
    scalars: Mapping[str, Scalar]
    alarms: tuple[Raised | Cleared, ...]
    done: int
    skipped: int


@dataclass(eq=False)
class _Unit:
    name: str
    source: Source
    cadence: Cadence
    watches: list[Watch]
    heard: float
    kept: int = 0

    @property
    def in_alarm(self) -> bool:
        return any(watch.standing for watch in self.watches)


@dataclass(eq=False)
class Burnin:
    """One session of a burn-in.

    Parameters
    ----------
    plan : Plan
    sources : mapping of Source
        By the units' names; one unit without a name is "".
    log : LogWriter
    explain : callable
        Capture → result record (contract, section 5). A BenchfitError makes a failed record.
    on_record : callable
        Is handed every record after its commit.
    say : callable
        Is handed sentences for people.
    changed : callable
        Says in a sentence that something the run rests on (the build sheet) was changed; "" where not.
    """

    plan: Plan
    sources: Mapping[str, Source]
    log: LogWriter
    explain: Callable[[Capture], Mapping[str, Any]]
    on_record: Callable[[Logged], None]
    say: Callable[[str], None]
    changed: Callable[[], str] = lambda: ""
    stop: threading.Event = field(default_factory=threading.Event)
    why: Why | None = None
    _done: int = 0
    _said: set[str] = field(default_factory=set)
    _is_first: bool = True
    _skipped: int = 0

    def run(self) -> Why:
        """Go on until the plan is complete, ``stop`` is set, or an alarm ends it.

        Raises
        ------
        InstrumentError
            The first connection failed, or there was no capture for ``give_up`` seconds.
        LogError
            The log cannot be written.
        """
        for source in self.sources.values():
            source.open()
        resumed, start = self.log.resumed, steady()
        self._done = resumed.count
        end = math.inf if self.plan.time is None else start + max(0.0, self.plan.time - resumed.time)
        units = [self._unit(name, source, start) for name, source in self.sources.items()]
        number, clock = -1, now()
        while not self._is_over():
            slot = next_slot(start, self._every, number, steady())
            self._wait(min(slot.due, end))
            if self._is_over():
                break
            if steady() >= end:
                self.why = "completed"
                break
            number, self._skipped = slot.number, slot.skipped
            self._late(slot.skipped)
            clock = self._check(clock)
            self._round(units)
        return self.why or "stopped"

    # --- inside ---------------------------------------------------------------------------------------------

    @property
    def _every(self) -> float:
        is_paced = any(source.is_paced for source in self.sources.values())
        return self.plan.every if is_paced else max(self.plan.every, 0.02)

    def _unit(self, name: str, source: Source, start: float) -> _Unit:
        watches = [
            Watch(limit, self.log.first_value(name, limit.quantity), self.log.standing(name, limit.quantity))
            for limit in self.plan.limits
        ]
        for watch in watches:
            watch.prime(self.log.last_values(name, watch.limit.quantity, 50))
        cadence = Cadence(self.plan.every if source.is_paced else None)
        return _Unit(name, source, cadence, watches, start)

    def _is_over(self) -> bool:
        if self.why is None and self.plan.count is not None and self._done >= self.plan.count:
            self.why = "completed"
        if self.why is None and self.stop.is_set():
            self.why = "stopped"
        return self.why is not None

    def _wait(self, due: float) -> None:
        while (left := due - steady()) > 0 and not self.stop.is_set():
            self.stop.wait(min(left, _NAP))  # short naps: a wait cannot be interrupted on every system

    def _round(self, units: list[_Unit]) -> None:
        for unit in units:
            if unit.source.pause > 0:
                self._give_up(unit)
                continue
            for arrival in unit.source.arrivals():
                self._record(unit, arrival)
                if self._is_over():
                    return
            self._give_up(unit)
        if all(unit.source.pause > 0 for unit in units):
            self._wait(steady() + min(unit.source.pause for unit in units))

    def _record(self, unit: _Unit, arrival: Arrival) -> None:
        record = self._explained(arrival)
        is_good = "error" not in record
        if arrival.capture is not None:
            unit.heard = steady()
        found = {one.name: one for one in scalars(record)}
        alarms = tuple(self._alarms(unit, found)) if is_good else ()
        is_kept = self._is_kept(unit, alarms, is_good)
        entry = Entry(
            unit.name, arrival.acquired, record, arrival.steady, arrival.taken,
            arrival.capture if is_kept else None, alarms, self._gap(unit, arrival),
        )  # fmt: skip
        (seq,) = self.log.append([entry])
        self._done += 1
        shown = line(seq, arrival.acquired, unit.name, dict(record))
        logged = Logged(seq, unit.name, arrival.acquired, shown, found, alarms, self._done, self._skipped)
        self.on_record(logged)
        if self.plan.is_stopping and any(isinstance(alarm, Raised) for alarm in alarms):
            self.why = "alarm"

    def _explained(self, arrival: Arrival) -> Mapping[str, Any]:
        if arrival.capture is None:
            error = arrival.error or InstrumentError(f"{arrival.path}: no capture")
            return failure(arrival.path, error.status, error.says)
        try:
            return rounded(self.explain(arrival.capture))
        except BenchfitError as fault:
            return failure(arrival.path, fault.status, fault.says)
        except Exception as fault:  # a run of days must not end by one capture; its record says what happened
            how = f"{type(fault).__name__}: {fault}"
            says = f"{arrival.path}: could not be explained ({how}); please report this."
            return failure(arrival.path, 3, says)

    def _alarms(self, unit: _Unit, found: Mapping[str, Scalar]) -> Iterator[Raised | Cleared]:
        for watch in unit.watches:
            one = found.get(watch.limit.quantity)
            event = watch.step(one.value, one.u_noise) if one else None
            if event is not None:
                yield event

    def _is_kept(self, unit: _Unit, alarms: tuple[Raised | Cleared, ...], is_good: bool) -> bool:
        if self.plan.keep != "alarms":
            return self.plan.keep == "all"
        if any(isinstance(alarm, Raised) for alarm in alarms):
            unit.kept = 0
        if alarms or not is_good:
            return True
        unit.kept += unit.in_alarm
        return unit.in_alarm and unit.kept <= KEPT

    def _gap(self, unit: _Unit, arrival: Arrival) -> tuple[float, str] | None:
        at = arrival.steady if arrival.steady is not None else arrival.acquired
        since = unit.cadence.gap(at)
        is_first, self._is_first = self._is_first, False
        resumed = self.log.resumed
        if is_first and resumed.acquired is not None:
            return resumed.acquired, "stopped" if resumed.in_order else "interrupted"
        return None if since is None else (arrival.acquired - (at - since), "late")

    def _give_up(self, unit: _Unit) -> None:
        limit = self.plan.give_up
        if limit is not None and steady() - unit.heard > limit:
            says = f"{unit.source.name}: no capture for {spoken(limit)}; the burn-in ends here (--give-up)."
            raise InstrumentError(says, resource=unit.source.name, kind="gave-up")

    def _late(self, skipped: int) -> None:
        if skipped and any(source.is_paced for source in self.sources.values()):
            self._say_once(
                "late",
                f"an acquisition takes longer than the {self.plan.every:g} s of --every: slots are skipped",
            )

    def _check(self, before: Reading) -> Reading:
        """Notice a wall clock that was set, and a build sheet that was changed."""
        after = now()
        step = stepped(before, after)
        if step:
            way = "forward" if step > 0 else "back"
            says = f"the wall clock was set {way} by {spoken(abs(step))}"
            self.log.event("clock-step", says, step)
            self.say(f"{says}; the schedule goes on by the steady clock")
        says = self.changed()
        if says and self._say_once("changed", says):
            self.log.event("sheet-changed", says)
        return after

    def _say_once(self, code: str, says: str) -> bool:
        if code in self._said:
            return False
        self._said.add(code)
        self.say(says)
        return True


def failure(path: str, status: int, says: str) -> dict[str, Any]:
    """The record of an acquisition that failed (contract, section 4)."""
    return {"schema": 1, "capture": {"path": path}, "error": {"status": status, "says": says}}
