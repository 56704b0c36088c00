"""What the program said of a build, held against the truth."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from tools.bench.builds import Build

SURE = 0.9
# Two faults are needed where the best single cause misfits by this much more (chi-square).
PAIRED = 14.0
BINS = (0.0, 0.05, 0.2, 0.5, 0.8, 0.95, 1.0001)


@dataclass(frozen=True)
class Outcome:
    """One build's score. ``truth``: posterior of the true cause as the bench judges it; ``most``: the
    greatest one.

    ``parts``: (name, known_from, error/u, u over the bench's u or None). ``probe``: error/u of the frequency
    without the probe. ``share``: (said, true) share of the fault, as a fraction of the target.
    """

    circuit: str
    seed: int
    nodes: tuple[str, ...]
    kind: str
    how: str
    causes: tuple[str, ...]
    change: tuple[float, ...]
    oscillates: bool
    said_oscillates: bool | None
    suspects: tuple[tuple[tuple[str, ...], float], ...]
    settled: bool | None
    truth: float | None
    most: float | None
    excess: float | None
    parts: tuple[tuple[str, str, float, float | None], ...]
    probe: float | None
    share: tuple[float, float, float] | None
    seconds: float
    error: str

    @property
    def first_right(self) -> bool:
        """Whether the first suspect is the truth."""
        return bool(self.suspects) and set(self.suspects[0][0]) == set(self.causes)

    @property
    def in_three(self) -> bool:
        """Whether the truth is among the first three suspects."""
        return any(set(c) == set(self.causes) for c, _ in self.suspects[:3])

    @property
    def settled_wrong(self) -> bool:
        """Whether it was called settled, and is not so.

        The one of two faults that shows is no wrong answer.
        """
        if not self.settled or self.first_right:
            return False
        hidden = self.kind == "two" and (self.excess is None or self.excess < PAIRED)
        return not (hidden and self.suspects[0][0] and set(self.suspects[0][0]) < set(self.causes))

    @property
    def failures(self) -> list[str]:
        """What went wrong, in words."""
        found = []
        if self.error:
            return ["no answer"]
        if self.kind == "healthy" and not self.first_right:
            found.append("healthy accused")
        if self.settled_wrong:
            found.append("settled on a wrong answer")
        if self.kind == "single" and self.truth is not None and self.truth >= SURE and not self.first_right:
            found.append("first suspect wrong" if self.in_three else "not among the first three")
        if self.kind == "single" and self.most is not None and self.most < SURE and self.settled:
            found.append("settled where nothing decides")
        if self.kind == "two" and self.excess is not None and self.excess >= PAIRED and not self.in_three:
            found.append("two faults not named")
        if self.oscillates != self.said_oscillates:
            found.append("oscillation misread")
        return found


def _kind(build: Build) -> str:
    if not build.fault.causes:
        return "healthy"
    return "single" if len(build.fault.causes) == 1 or build.fault.how in ("swap", "family") else "two"


def score(
    build: Build,
    record: Mapping[str, Any] | None,
    seconds: float,
    error: str,
    judged: Mapping[str, Any] | None,
) -> Outcome:
    """Compare a record (section 5 of the contract) with the build that it is about."""
    nominal = build.design.nominal()
    change = tuple(v / nominal[k] - 1 if nominal.get(k) else v for k, v in build.fault.values.items())
    said = [] if record is None else record.get("suspects") or []
    suspects = tuple((tuple(s["causes"]), float(s["probability"])) for s in said)
    measured = {} if record is None else record.get("measured") or {}
    return Outcome(
        circuit=build.design.circuit,
        seed=build.seed,
        nodes=build.nodes,
        kind=_kind(build),
        how=build.fault.how,
        causes=build.fault.causes,
        change=change,
        oscillates=build.waves.oscillates,
        said_oscillates=measured.get("oscillates"),
        suspects=suspects,
        settled=None if record is None else record.get("settled"),
        truth=None if judged is None else float(judged["truth"]),
        most=None if judged is None else max(float(v) for _, v in judged["posterior"]),
        excess=None if judged is None else float(judged["excess"]),
        parts=_parts(build, record, judged),
        probe=_probe(build, record),
        share=_share(build, record),
        seconds=seconds,
        error=error,
    )


def _parts(
    build: Build, record: Mapping[str, Any] | None, judged: Mapping[str, Any] | None
) -> tuple[tuple[str, str, float, float | None], ...]:
    found = []
    for name, part in ((record or {}).get("parts") or {}).items():
        true, value, u = build.true.get(name), part.get("value"), part.get("u")
        if true is None or value is None or not u:
            continue
        own = None
        if judged is not None and name in judged["u"]:
            spec = build.design.spec(name)
            expected = judged["u"][name] * (abs(true) if spec.log else 1.0)
            own = u / expected if expected > 0 else None
        found.append((name, str(part.get("known_from")), (value - true) / u, own))
    return tuple(found)


def _probe(build: Build, record: Mapping[str, Any] | None) -> float | None:
    without = (record or {}).get("without_probe")
    if not without or not without.get("frequency") or not np.isfinite(build.lifted):
        return None
    q = without["frequency"]
    return None if q.get("value") is None or not q.get("u") else float((q["value"] - build.lifted) / q["u"])


def _share(build: Build, record: Mapping[str, Any] | None) -> tuple[float, float, float] | None:
    miss = ((record or {}).get("miss") or {}).get("frequency")
    if not miss or not miss.get("shares") or _kind(build) != "single":
        return None
    if not (np.isfinite(build.restored) and np.isfinite(build.frequency)):
        return None
    said = sum(s["share"] for s in miss["shares"] if s["cause"] in build.fault.causes and s["share"] is not None)
    back = (build.frequency - build.restored) / build.target
    alone = (build.alone - build.nominal) / build.target
    return float(said), back, 0.5 * (back + alone) if np.isfinite(alone) else back


def _rate(hits: Sequence[bool]) -> str:
    if not len(hits):
        return "none"
    return f"{100 * float(np.mean(hits)):5.1f} %  ({int(np.sum(hits))} of {len(hits)})"


def _judged_lines(outcomes: Sequence[Outcome]) -> list[str]:
    single = [o for o in outcomes if o.kind == "single" and o.oscillates]
    clear = [o for o in single if o.truth is not None and o.truth >= SURE]
    open_ = [o for o in single if o.most is not None and o.most < SURE]
    wide = [o for o in single if o.most is not None and o.most < 0.7]
    healthy = [o for o in outcomes if o.kind == "healthy" and o.oscillates]
    two = [o for o in outcomes if o.kind == "two" and o.oscillates]
    needed = [o for o in two if o.excess is not None and o.excess >= PAIRED]
    still = [o for o in outcomes if not o.oscillates]
    return [
        f"single faults that can be identified   {len(clear)} of {len(single)}",
        f"  first suspect right                  {_rate([o.first_right for o in clear])}",
        f"  named within the first three         {_rate([o.in_three for o in clear])}",
        f"  settled                              {_rate([bool(o.settled) for o in clear])}",
        f"single faults that nothing decides     {len(open_)}",
        f"  not settled                          {_rate([not o.settled for o in open_])}",
        f"  not settled, best under 0.7          {_rate([not o.settled for o in wide])}",
        f"  truth within the first three         {_rate([o.in_three for o in open_])}",
        f"healthy builds accused                 {_rate([not o.first_right for o in healthy])}",
        f"settled on a wrong answer, of all      {_rate([o.settled_wrong for o in outcomes])}",
        f"  or on one of two, the other hidden   {_rate([bool(o.settled) and not o.first_right for o in outcomes])}",
        f"two faults that no single cause explains {len(needed)} of {len(two)}",
        f"  both named in one of three           {_rate([o.in_three for o in needed])}",
        f"  first right                          {_rate([o.first_right for o in needed])}",
        f"two faults, all: both in one of three  {_rate([o.in_three for o in two])}",
        f"does not oscillate: seen               {_rate([o.said_oscillates is False for o in still])}",
        f"  truth within the first three         {_rate([o.in_three for o in still])}",
        f"no answer at all                       {_rate([bool(o.error) for o in outcomes])}",
    ]


def _number_lines(outcomes: Sequence[Outcome]) -> list[str]:
    runs = [o for o in outcomes if o.oscillates]
    z = np.array([abs(p[2]) for o in runs for p in o.parts])
    seen = np.array([abs(p[2]) for o in runs for p in o.parts if p[1] == "capture"])
    clear = [o for o in runs if o.kind == "single" and o.truth is not None and o.truth >= SURE]
    widths = np.array([p[3] for o in clear for p in o.parts if p[3] is not None])
    seen_widths = np.array([p[3] for o in clear for p in o.parts if p[3] is not None and p[1] == "capture"])
    probes = np.array([abs(o.probe) for o in runs if o.probe is not None])
    shares = [o.share for o in clear if o.share is not None]
    good = [abs(a - b) <= max(0.1 * abs(b), 0.005) for a, b, _ in shares]
    fair = [abs(a - b) <= max(0.1 * abs(b), 0.005) for a, _, b in shares]
    seconds = np.array([o.seconds for o in outcomes])
    return [
        f"parts within 2 u                       {_rate(list(z <= 2))}",
        f"  those known from the capture         {_rate(list(seen <= 2))}",
        f"  u over the bench's u, mean (median)  {_mean(widths)}; from the capture {_mean(seen_widths)}",
        f"without the probe within 2 u           {_rate(list(probes <= 2))}",
        f"fault's share within 10 % or 0.005     {_rate(good)}",
        f"  of the mean over both orders         {_rate(fair)}",
        f"seconds an explanation                 mean {seconds.mean():.3f}, median {np.median(seconds):.3f}, "
        f"95 % {np.percentile(seconds, 95):.3f}",
    ]


def _mean(x: Any) -> str:
    return f"{np.mean(x):.2f} ({np.median(x):.2f})" if len(x) else "none"


def _reliability(outcomes: Sequence[Outcome]) -> list[str]:
    pairs = [(p, set(c) == set(o.causes)) for o in outcomes if o.oscillates for c, p in o.suspects]
    lines = ["suspects given p between: how many, mean p, share right"]
    for low, high in itertools.pairwise(BINS):
        mine = [(p, hit) for p, hit in pairs if low <= p < high]
        if mine:
            lines.append(
                f"  {low:.2f} to {min(high, 1):.2f}   {len(mine):5d}   {np.mean([p for p, _ in mine]):.3f}   "
                f"{np.mean([hit for _, hit in mine]):.3f}"
            )
    return lines


def report(outcomes: Sequence[Outcome]) -> str:
    """The figures of a study, then each circuit's, as text."""
    lines = [
        *_judged_lines(outcomes),
        *_number_lines(outcomes),
        *_reliability(outcomes),
        "by circuit: identified first right; healthy accused; settled wrong",
    ]
    for circuit in dict.fromkeys(o.circuit for o in outcomes):
        mine = [o for o in outcomes if o.circuit == circuit]
        clear = [o for o in mine if o.kind == "single" and o.truth is not None and o.truth >= SURE]
        healthy = [o for o in mine if o.kind == "healthy" and o.oscillates]
        lines.append(
            f"  {circuit:26s} {_rate([o.first_right for o in clear]):22s} "
            f"{_rate([not o.first_right for o in healthy]):22s} "
            f"{_rate([o.settled_wrong for o in mine])}"
        )
    kinds: dict[str, int] = {}
    for o in outcomes:
        for failure in o.failures:
            kinds[failure] = kinds.get(failure, 0) + 1
    return "\n".join([*lines, "failures: " + ", ".join(f"{v} {k}" for k, v in sorted(kinds.items()))])
