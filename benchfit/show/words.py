"""What a result says, in words: shared by the printed report, the page and the lot."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence

from benchfit.explain.result import (
    AsFound,
    Changed,
    Explanation,
    Miss,
    NextReading,
    PartFound,
    Quantity,
    Remedy,
    Suspect,
)
from benchfit.quantity import percent, si

LABELS = {
    "frequency": "frequency",
    "period": "period",
    "duty": "duty cycle",
    "jitter": "period jitter, rms",
    "charge_time": "charge lasts",
    "discharge_time": "discharge lasts",
    "upper": "charge ends at",
    "lower": "discharge ends at",
    "charge_asymptote": "charge heads for",
    "discharge_asymptote": "discharge heads for",
    "charge_time_constant": "charge time constant",
    "discharge_time_constant": "discharge time constant",
    "high": "output high level",
    "low": "output low level",
    "rise_time": "output rise time",
    "fall_time": "output fall time",
}
"""Names of the record in words."""

VERDICTS = {"pass": "PASS", "conditional": "CONDITIONAL", "fail": "FAIL"}

RULE = (
    "Pass only if |miss| + U ≤ limit, fail only if |miss| − U > limit, conditional between them "
    "(guard band, JCGM 106); judged without the probe."
)

NOTHING = "no part is off beyond its tolerance"


def label(name: str) -> str:
    """A measured quantity's name in words."""
    return LABELS.get(name, name.replace("_", " "))


def amount(name: str, q: Quantity | None) -> str:
    """A quantity with its U (k = 2) and an SI prefix, a duty cycle in per cent; "" where it is not known."""
    if q is None or q.value is None or not math.isfinite(q.value):
        return ""
    return percent(q.value, q.u) if name == "duty" else si(q.value, q.unit, q.u)


def plain_amount(name: str, value: float | None, unit: str) -> str:
    """A value without U, as a target or a nominal is given."""
    if value is None or not math.isfinite(value):
        return ""
    return percent(value) if name == "duty" else si(value, unit)


def change(x: float | None) -> str:
    """A relative change, "+12.0 %" or, far off, "× 10.2"; "" where it is not known."""
    if x is None or not math.isfinite(x):
        return ""
    if x >= 1 or x <= -0.9:
        return f"× {1 + x:.3g}"
    return f"{100 * x:+.{_decimals(x)}f} %"


def _decimals(x: float) -> int:
    return 1 if abs(x) >= 0.0995 else 2


def chance(p: float) -> str:
    """A probability in whole per cent, never 0 or 100."""
    if not math.isfinite(p):
        return "?"
    if p > 0.99:
        return "> 99 %"
    return "< 1 %" if p < 0.01 else f"{100 * p:.0f} %"


def listed(names: Sequence[str], last: str = "and") -> str:
    """ "a, b and c"."""
    if len(names) < 2:
        return "".join(names)
    return f"{', '.join(names[:-1])} {last} {names[-1]}"


def accused(suspect: Suspect) -> str:
    """The causes of a suspect, or that it is the hypothesis that nothing is off."""
    return listed(suspect.causes) if suspect.causes else "nothing beyond tolerance"


def charge(suspect: Suspect) -> str:
    """The suspect's sentence, after the names of its causes where it does not name them itself."""
    said = suspect.says.rstrip(".")
    if not suspect.causes:
        return said if "nothing" in said else f"nothing off: {said}" if said else NOTHING
    if all(re.search(rf"(?<!\w){re.escape(name)}(?!\w)", said) for name in suspect.causes):
        return said
    return f"{listed(suspect.causes)}: {said}" if said else listed(suspect.causes)


def units(miss_name: str) -> str:
    """Unit of a miss's target."""
    return "" if miss_name == "duty" else "Hz"


def expanded(explanation: Explanation, name: str) -> float | None:
    """U (k = 2) of a miss as a fraction of the target; None where it is not known."""
    q, miss = explanation.measured.get(name), (explanation.miss or {}).get(name)
    if q is None or q.u is None or miss is None or not miss.target:
        return None
    return 2 * q.u / abs(miss.target)


def misses(explanation: Explanation, name: str) -> bool:
    """Whether the build is off its target by more than can be told, or is not passed."""
    miss = (explanation.miss or {}).get(name)
    if miss is None or miss.miss is None:
        return False
    return explanation.verdict not in (None, "pass") or abs(miss.miss) > (expanded(explanation, name) or 0.0)


def judged(explanation: Explanation, name: str) -> tuple[Quantity | None, float | None]:
    """What is held against the target, the probe lifted where that is known, and its miss as a fraction."""
    lifted = (explanation.without_probe or {}).get(name)
    miss = (explanation.miss or {}).get(name)
    q = lifted if lifted is not None else explanation.measured.get(name)
    if q is None or miss is None or not miss.target or lifted is None:
        return q, None if miss is None else miss.miss
    return q, q.value / miss.target - 1


def against_target(explanation: Explanation, name: str, miss: Miss) -> str:
    """How what is judged stands to its target, as a clause."""
    target = plain_amount(name, miss.target, units(name))
    q, off = judged(explanation, name)
    if off is None:
        return f"its target is {target}"
    if q is not None and q.u is not None and miss.target and abs(off) <= 2 * q.u / abs(miss.target):
        return f"on its target of {target} within the uncertainty"
    if off >= 1 or off <= -0.9:
        return f"{1 + off:.3g} times its target of {target}"
    side = "above" if off > 0 else "below"
    return f"{change(abs(off)).lstrip('+')} {side} its target of {target}"


def verdict_sentence(explanation: Explanation) -> str:
    """What the build does, against its target; the probe lifted, where there is one."""
    word = VERDICTS.get(explanation.verdict or "", "")
    head = f"{word}: " if word else ""
    if not explanation.oscillates:
        finding = explanation.finding.rstrip(".")
        rest = f": {finding[0].lower()}{finding[1:]}" if finding else ""
        return f"{head}{'does' if head else 'Does'} not oscillate{rest}."
    runs = amount("frequency", judged(explanation, "frequency")[0])
    if not runs:
        return f"{head}{'the' if head else 'The'} frequency cannot be told from this capture."
    misses = explanation.miss or {}
    text = f"{head}{'runs' if head else 'Runs'} at {runs}"
    if (explanation.without_probe or {}).get("frequency") is not None:
        text += " with the probe lifted"
    if (miss := misses.get("frequency")) is not None:
        text += f", {against_target(explanation, 'frequency', miss)}"
    if (miss := misses.get("duty")) is not None:
        duty = amount("duty", judged(explanation, "duty")[0]) or "unknown"
        text += f"; duty cycle {duty}, {against_target(explanation, 'duty', miss)}"
    no_target = explanation.circuit is not None and not any(misses.values())
    return text + ("; the sheet gives no target." if no_target else ".")


def blame_sentence(explanation: Explanation) -> str:
    """Which part is to blame and how sure that is, or that it cannot be told and what would tell."""
    if explanation.circuit is None:
        return _likely_circuits(explanation)
    if not explanation.suspects:
        return "The capture is not good enough to say anything of the parts." + _best_reading(explanation)
    first = explanation.suspects[0]
    sure = f"{chance(first.probability)} sure"
    if explanation.settled:
        if not first.causes:
            allowed = "; the tolerances together allow this miss" if _is_off(explanation) else ""
            return f"Nothing to blame: {NOTHING} ({sure}){allowed}."
        word = "To blame" if _is_off(explanation) else "Found off"
        return f"{word}, {sure}: {charge(first)}."
    live = live_suspects(explanation.suspects)
    named = [f"{accused(s)} ({chance(s.probability)})" for s in live]
    if len(live) == 1:
        return f"Most likely, but not settled: {named[0]}.{_best_reading(explanation)}"
    if not first.causes:
        others = listed(named[1:], "and")
        verb = "is" if len(named) == 2 else "are"
        return (
            f"Most likely nothing is off beyond its tolerance ({chance(first.probability)}), but {others} {verb} "
            f"not ruled out.{_best_reading(explanation)}"
        )
    word = "To blame" if _is_off(explanation) else "Off"
    return f"{word} is {listed(named, 'or')}: this capture cannot tell which.{_best_reading(explanation)}"


def _is_off(explanation: Explanation) -> bool:
    if not explanation.oscillates or explanation.verdict in ("fail", "conditional"):
        return True
    return explanation.verdict is None and any(misses(explanation, name) for name in ("frequency", "duty"))


def live_suspects(suspects: Sequence[Suspect], enough: float = 0.9, most: int = 4) -> list[Suspect]:
    """The first suspects that together have at least 90 %, four at most."""
    live: list[Suspect] = []
    for suspect in suspects[:most]:
        live.append(suspect)
        if math.fsum(s.probability for s in live) >= enough:
            break
    return live


def _best_reading(explanation: Explanation) -> str:
    if not explanation.next_readings:
        return ""
    best = explanation.next_readings[0]
    return f" Read next: {reading(explanation, best)}."


def worthwhile(explanation: Explanation) -> list[NextReading]:
    """The readings worth taking, three at most: they would raise the answer's probability by a point or more.

    Where it is settled already, by five.
    """
    least = 0.05 if explanation.settled else 0.01
    return [r for r in explanation.next_readings if r.would_settle >= least][:3]


def reading(explanation: Explanation, r: NextReading) -> str:
    """What to read, the part's name before it where the text does not say it."""
    is_part = any(p.name == r.node_or_part for p in explanation.parts)
    named = re.search(rf"(?<!\w){re.escape(r.node_or_part)}(?!\w)", r.reading)
    return f"{r.node_or_part}, {r.reading}" if is_part and not named else r.reading


def told(explanation: Explanation) -> list[PartFound]:
    """The parts of which more is known than the sheet says: by capture or reading, or as live suspects."""
    suspected = {name for s in explanation.suspects if s.probability >= 0.05 for name in s.causes}
    return [
        p
        for p in explanation.parts
        if resolved(p) and (p.known_from != "build sheet" or p.name in suspected or p.within is False)
    ]


def said_warnings(explanation: Explanation) -> list[tuple[str, str]]:
    """(code, says) of the warnings, each once, without what the verdict says already."""
    once = dict.fromkeys((w.code, w.says) for w in explanation.warnings)
    return [
        (code, says) for code, says in once if says.rstrip(".") != explanation.finding.rstrip(".") or not says
    ]


def resolved(part: PartFound) -> bool:
    """Whether a part has a value worth showing: a parasitic only where it stands out from nothing."""
    if part.value is None or not math.isfinite(part.value):
        return False
    return part.nominal is not None or (part.u is not None and abs(part.value) > 2 * part.u)


def count(n: float) -> str:
    """A number of things, in groups of three digits from 10 000 on."""
    text = f"{n:.1f}".removesuffix(".0") if abs(n) < 1000 else f"{n:.0f}"
    return text if len(text) < 5 or "." in text else f"{int(text):_}".replace("_", " ")


def _likely_circuits(explanation: Explanation) -> str:
    if not explanation.candidates:
        return "Without a build sheet no part can be judged."
    named = [f"{c.circuit} ({chance(c.score)})" for c in explanation.candidates[:3]]
    return (
        f"Without a build sheet no part can be judged; the waveform could be that of {listed(named, 'or')}."
    )


def ways(remedies: Sequence[Remedy]) -> list[list[Remedy]]:
    """The remedies, those that go together (and so predict the same) as one way."""
    found: list[list[Remedy]] = []
    for remedy in remedies:
        last = found[-1][-1] if found else None
        if last is not None and last.part != remedy.part and dict(last.predicts) == dict(remedy.predicts):
            found[-1].append(remedy)
        else:
            found.append([remedy])
    return found


def exchange(remedy: Remedy, unit: str) -> str:
    """ "R 10.4 kΩ → 8.2 kΩ (E24)"."""
    series = f" ({remedy.series})" if remedy.series else ""
    return f"{remedy.part} {si(remedy.before, unit)} → {si(remedy.after, unit)}{series}"


def changed(c: Changed) -> str:
    """ "C 22 nF → 18 nF"; a part that came or went has "absent" on one side."""
    before, after = (si(x, c.unit) if x is not None else "absent" for x in (c.before, c.after))
    return f"{c.part} {before} → {after}"


def as_left_rows(as_found: AsFound) -> list[list[str]]:
    """(as found, predicted or as left; frequency; duty cycle), with U."""
    sides = (
        ("as found", as_found.before), ("predicted", as_found.predicted), ("as left", as_found.obtained)
    )  # fmt: skip
    rows = [[name, *(amount(n, side.get(n)) for n in ("frequency", "duty"))] for name, side in sides]
    return [row for row in rows if any(row[1:])]


def as_left_sentences(as_found: AsFound) -> list[str]:
    """What was changed, and whether that did it."""
    named = listed([changed(c) for c in as_found.changed])
    if not named:
        what = "No nominal differs from the record's."
    elif any(c.is_taken for c in as_found.changed):
        what = f"No nominal differs from the record's; taken as the change is its remedy {named}."
    else:
        what = f"Changed: {named}."
    effects = {
        "as predicted": "The change did it: as left is as predicted.",
        "partly": "The change went the right way, but not to where it was predicted to go.",
        "not by this change": "The change did not do what was predicted of it.",
    }
    unknown = "The record predicts nothing of such a change." if named else ""
    effect = effects.get(as_found.effect or "", unknown)
    return [what, effect] if effect else [what]


def budget_rows(miss: Miss | None, most: int = 8) -> list[tuple[str, float, float | None]]:
    """(cause, share, u) of a budget that is known: on paper, the shares by falling size, unexplained.

    Shares under 1 % of the largest, and those beyond ``most``, are one row "n others"; the rows add up to
    the miss.
    """
    if miss is None or miss.miss is None:
        return []
    shares = sorted((s for s in miss.shares if s.share), key=lambda s: -abs(s.share))
    largest = abs(shares[0].share) if shares else 0.0
    kept = [s for s in shares[:most] if abs(s.share) >= 0.01 * largest]
    if len(shares) - len(kept) == 1:
        kept = shares
    others = shares[len(kept) :]
    rows: list[tuple[str, float, float | None]] = []
    if miss.on_paper:
        rows.append(("on paper", miss.on_paper, None))
    rows += [(s.cause, s.share, s.u) for s in kept]
    if others:
        rows.append((f"{len(others)} others", math.fsum(s.share for s in others), None))
    if miss.unexplained is not None and abs(miss.unexplained) >= 5e-5:
        rows.append(("unexplained", miss.unexplained, None))
    return rows


def share_decimals(rows: Sequence[tuple[str, float, float | None]]) -> int:
    """Decimals of a budget in per cent: as many for all rows."""
    return 1 if max((abs(x) for _, x, _ in rows), default=0.0) >= 0.00995 else 2


def share(x: float | None, decimals: int = 1, *, signed: bool = True) -> str:
    """A share, or its U, in per cent of the target without the sign "%"; "" where it is not known."""
    if x is None or not math.isfinite(x):
        return ""
    if abs(x) >= 1000:
        return f"{100 * x:{'+' if signed else ''}.3g}"
    return f"{round(100 * x, decimals) + 0.0:{'+' if signed else ''}.{decimals}f}"


def share_half(u: float | None, decimals: int = 1) -> str:
    """ "± 0.6", the U (k = 2) of a share; "" where it is not known or rounds to nothing."""
    half = share(None if u is None else 2 * abs(u), decimals, signed=False)
    return f"± {half}" if half.strip("0.") else ""


def identity(explanation: Explanation) -> list[str]:
    """Title, circuit and notes of a build, as short texts."""
    notes: Mapping[str, str] = explanation.record_notes
    texts = [explanation.title, explanation.circuit or "", *(f"{k} {v}" for k, v in notes.items())]
    return [t for t in texts if t]
