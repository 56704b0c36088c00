"""One build, one or several captures → an explanation."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from scipy.special import chdtrc, logsumexp

from benchfit.circuits.solve import curve
from benchfit.cycle.constants import CycleConstants
from benchfit.errors import Remark
from benchfit.explain import parts as parts_room
from benchfit.explain.assemble import assemble
from benchfit.explain.budget import miss_of
from benchfit.explain.candidates import candidates_of
from benchfit.explain.cautions import cautions, scope_checks
from benchfit.explain.measured import measured
from benchfit.explain.model import Model
from benchfit.explain.readings import next_readings
from benchfit.explain.refine import refine
from benchfit.explain.remedies import remedies_of
from benchfit.explain.rest import finding, limits_of, weigh_rest
from benchfit.explain.result import CaptureFacts, Explanation, Miss, Quantity
from benchfit.explain.suspects import ruled_out, settled, suspects_of
from benchfit.explain.verdict import judge, without_probe, worst
from benchfit.explain.weigh import Weighed, weigh
from benchfit.sheet.model import Sheet

POOR = 1e-4
# How often a probe's attenuation setting is wrong, before anything was seen: three stars, but quickly found.
WRONG_SETTING = 0.03


def explain(
    captures: Sequence[CycleConstants], sheet: Sheet | None, facts: Sequence[CaptureFacts] = ()
) -> Explanation:
    """Explain a build from the constants of its captures.

    Parameters
    ----------
    captures : sequence of CycleConstants
        Of one build; the first one's conditions are those that ``measured`` and ``miss`` speak of.
    sheet : Sheet or None
        Without a sheet, or without a circuit in it, the measured quantities and candidates are all there is.
    facts : sequence of CaptureFacts
        Passed on to the record.
    """
    sheet = Sheet() if sheet is None else sheet
    first = captures[0]
    same = sheet.circuit is None or _output_times(sheet)
    quantities = measured(first, sheet.scope, same)
    warnings = [r for c in captures for r in c.remarks]
    base = Explanation(
        captures=tuple(facts),
        oscillates=first.oscillates,
        measured=quantities,
        circuit=None if sheet.circuit is None else sheet.circuit.name,
        title=sheet.title,
        record_notes=dict(sheet.record),
    )
    if sheet.circuit is None:
        found = candidates_of(first) if first.oscillates else ()
        misses = _bare_misses(sheet, quantities)
        verdict = worst([_judged(quantities, sheet, n) for n in ("frequency", "duty")])
        return replace(
            base,
            candidates=found,
            miss=misses,
            verdict=verdict,
            warnings=tuple(_unique(warnings + cautions(None, sheet, captures))),
        )
    checked, notes = _attenuated(sheet, captures)
    model = assemble(sheet, checked)
    warnings += notes
    if not first.oscillates:
        return _explain_rest(model, first, sheet, base, warnings)
    return _explain_cycle(model, checked, sheet, base, warnings)


def _attenuated(
    sheet: Sheet, captures: Sequence[CycleConstants]
) -> tuple[list[CycleConstants], list[Remark]]:
    """Volts ten times off are a wrong probe setting, or a part that is a decade off: whichever explains more."""
    right, notes = scope_checks(sheet, captures)
    if not any(n.code == "wrong-attenuation" for n in notes) or not captures[0].oscillates:
        return right, notes
    plain, others = scope_checks(sheet, captures, attenuation=False)
    as_right, as_plain = (_support(weigh(assemble(sheet, c))) for c in (right, plain))
    return (right, notes) if as_right + math.log(WRONG_SETTING) > as_plain else (plain, others)


def _support(weighed: Sequence[Weighed]) -> float:
    """ln of the evidence of all hypotheses together."""
    logs = [w.log_evidence + math.log(w.prior) for w in weighed if np.isfinite(w.log_evidence)]
    return float(logsumexp(logs)) if logs else -math.inf


def _output_times(sheet: Sheet) -> bool:
    """Whether the output is high exactly while the timing node rises."""
    assert sheet.circuit is not None
    build = sheet.build()
    from benchfit.explain.assemble import parameters_of

    model = Model(sheet.circuit, parameters_of(build), (), (), np.empty((0, 0)), 1.0, 1.0)
    with np.errstate(all="ignore"):
        cycle = sheet.circuit.cycle(model.values(model.nominal))
    return all((p.output == "high") == p.rising for p in cycle.phases)


def _unique(remarks: Sequence[Remark]) -> list[Remark]:
    seen: dict[tuple[str, str], Remark] = {}
    for r in remarks:
        seen.setdefault((r.code, r.says), r)
    return list(seen.values())


def _bare_misses(sheet: Sheet, quantities: Mapping[str, Quantity | None]) -> dict[str, Miss] | None:
    found = {}
    for name, target in (("frequency", sheet.target_frequency), ("duty", sheet.target_duty)):
        if target is not None:
            q = quantities.get(name)
            limits = (
                (target.low / target.nominal - 1, target.high / target.nominal - 1) if target.stated else None
            )
            miss = None if q is None else q.value / target.nominal - 1
            found[name] = Miss(target.nominal, None if q is None else q.value, miss, None, limits=limits)
    return found or None


def _judged(quantities: Mapping[str, Quantity | None], sheet: Sheet, name: str) -> str | None:
    target = sheet.target_frequency if name == "frequency" else sheet.target_duty
    q = quantities.get(name)
    return None if target is None or q is None else judge(q, target)


def _explain_cycle(
    model: Model, captures: Sequence[CycleConstants], sheet: Sheet, base: Explanation, warnings: list[Remark]
) -> Explanation:
    weighed = weigh(model)
    if not any(w.probability > 0 for w in weighed):
        says = (
            "none of the causes known for this circuit, one or two at a time, makes this waveform "
            "from the build sheet's parts: "
            "check the circuit, the sheet's values and which node was probed"
        )
        return replace(
            base,
            warnings=tuple(_unique([*warnings, Remark("poor-fit", says)])),
            settled=False,
            miss=_bare_misses(sheet, base.measured),
        )
    model, weighed, poor = _widened(model, weighed)
    sure = settled(model, weighed) and not poor
    weighed = [refine(model, weighed[0]), *weighed[1:]]
    averaged = parts_room.average(weighed)
    built = {n: q for n in ("frequency", "duty") if (q := base.measured.get(n)) is not None}
    bare = without_probe(model, averaged, built)
    judged = bare if bare is not None else built
    misses = {
        name: miss_of(model, averaged, name, target, built[name].value if name in built else None)
        for name, target in (("frequency", sheet.target_frequency), ("duty", sheet.target_duty))
        if target is not None
    }
    verdicts = [
        judge(judged[n], t)
        for n, t in (("frequency", sheet.target_frequency), ("duty", sheet.target_duty))
        if t is not None and n in judged
    ]
    readings = tuple(sheet.readings)
    warnings = warnings + _probe_warning(built, bare) + poor + _cancelling(model, weighed, misses)
    warnings += cautions(model, sheet, captures)
    return replace(
        base,
        parts=parts_room.parts_found(model, averaged, readings),
        unseparated=parts_room.unseparated(model, averaged.live[0].mean),
        miss=misses or None,
        suspects=suspects_of(model, weighed),
        settled=sure,
        ruled_out=ruled_out(model, weighed),
        next_readings=() if sure else next_readings(model, averaged, readings),
        remedies=remedies_of(model, averaged, sheet.target_frequency, sheet.target_duty),
        without_probe=bare,
        verdict=worst(verdicts),
        warnings=tuple(_unique(warnings)),
        model=_curves(model, averaged.live[0]),
    )


def _curves(model: Model, w: Weighed) -> dict[str, tuple[tuple[float, ...], tuple[float, ...]]]:
    """One fitted cycle at each node that the circuit speaks of, and the nominal one ("target:NODE")."""
    found = {}
    view = model.views[0]
    for label, state in (("", w.mode), ("nominal:", model.nominal)):
        seen = view if not label else view.without_probe()
        with np.errstate(all="ignore"):
            cycle = model.circuit.cycle(model.parts_of(seen, model.values(state)))
            for node in {p.node for p in cycle.phases} | ({"output"} if "high" in cycle.levels else set()):
                try:
                    t, v = curve(cycle, node)
                except ValueError:
                    continue
                if np.all(np.isfinite(t)) and np.all(np.isfinite(v)):
                    found[f"{label}{node}"] = (tuple(map(float, t)), tuple(map(float, v)))
    return found


def _probe_warning(built: Mapping[str, Quantity], bare: Mapping[str, Quantity] | None) -> list[Remark]:
    """``probe-loads``: the probe moves frequency or duty by more than 1 % or its own u."""
    if bare is None:
        return []
    for name in ("frequency", "duty"):
        if name not in built or name not in bare:
            continue
        moved = built[name].value - bare[name].value
        share = abs(moved) / abs(bare[name].value) if name == "frequency" else abs(moved)
        if share > 0.01 or abs(moved) > (built[name].u or math.inf):
            from benchfit.quantity import percent, si

            shown = si(bare["frequency"].value, "Hz", bare["frequency"].u) if "frequency" in bare else ""
            return [
                Remark(
                    "probe-loads",
                    f"the probe moves the {name} by {percent(share)}; with the probe removed: {shown}",
                )
            ]
    return []


def _widened(model: Model, weighed: Sequence[Weighed]) -> tuple[Model, list[Weighed], list[Remark]]:
    """Where nothing explains the record, the record is believed less until something does, and that is said.

    The observations' covariance grows by what the best hypothesis leaves over what it should (Birge 1932); the answer
    is then the least bad account with honest widths, and is never settled.
    """
    size = max(len(model.observations), 1)
    found = list(weighed)
    notes: list[Remark] = []
    for _ in range(2):
        live = [w.misfit for w in found if w.probability > 0.02]
        if not live or float(chdtrc(size, min(live))) > POOR:
            break
        notes = [
            Remark(
                "poor-fit",
                "no single cause or pair of causes explains everything that was measured; "
                "what is said of the parts is the least bad account",
            )
        ]
        model = replace(model, covariance=model.covariance * min(min(live) / size, 1e4))
        found = weigh(model, pairs=True)
    return model, found, notes


def _cancelling(model: Model, weighed: Sequence[Weighed], misses: Mapping[str, Miss]) -> list[Remark]:
    """Two faults that nearly cancel in frequency are reported all the same."""
    first = weighed[0]
    miss = misses.get("frequency")
    if miss is None or len(first.causes) < 2 or miss.miss is None:
        return []
    shares = {s.cause: s.share for s in miss.shares}
    mine = [shares.get(c, 0.0) for c in first.causes]
    if len(mine) == 2 and mine[0] * mine[1] < 0 and abs(sum(mine)) < 0.3 * max(map(abs, mine)):
        return [
            Remark(
                "cancelling",
                f"{first.causes[0]} and {first.causes[1]} are both off and nearly cancel in the frequency; "
                "a change of either will show",
            )
        ]
    return []


def _explain_rest(
    model: Model, constants: CycleConstants, sheet: Sheet, base: Explanation, warnings: list[Remark]
) -> Explanation:
    """No oscillation is a finding too: which condition fails, by which cause, and the limits that would mend it."""
    weighed = weigh_rest(model, constants)
    alive = any(w.probability > 0 for w in weighed)
    warnings = warnings + cautions(model, sheet, [constants])
    misses = _bare_misses(sheet, base.measured)
    if misses:
        misses = {k: replace(m, on_paper=_paper(model, k, m.target)) for k, m in misses.items()}
    if not alive:
        says = (
            "the build does not oscillate, and no single cause known for this circuit parks it where it "
            "was seen"
        )
        return replace(
            base,
            settled=False,
            miss=misses,
            verdict=_failed(sheet),
            finding=says,
            warnings=tuple(_unique([*warnings, Remark("no-oscillation", says)])),
        )
    found = finding(model, weighed)
    says = found.says + (f"; {found.limits}" if found.limits else "")
    code = "latch-up" if found.code == "latched" else "no-oscillation"
    warnings = [w for w in warnings if w.code != "no-oscillation"] + [Remark(code, says)]
    if code == "latch-up":
        warnings.append(Remark("no-oscillation", "the build does not oscillate"))
    averaged = parts_room.average(weighed)
    return replace(
        base,
        parts=parts_room.parts_found(model, averaged, tuple(sheet.readings)),
        miss=misses,
        suspects=suspects_of(model, weighed),
        settled=settled(model, weighed),
        finding=says,
        next_readings=()
        if settled(model, weighed)
        else next_readings(model, averaged, tuple(sheet.readings)),
        verdict=_failed(sheet),
        warnings=tuple(_unique(warnings)),
        without_probe=_probe_stops(model, averaged),
    )


def _probe_stops(model: Model, averaged: parts_room.Averaged) -> dict[str, Quantity] | None:
    """Frequency and duty with the probe lifted, where it is the probe that stops the circuit."""
    view = model.views[0]
    if not view.loads:
        return None
    with np.errstate(all="ignore"):
        f, duty = model.frequency_and_duty(np.array([w.mean for w in averaged.live]), view.without_probe())
    ok = np.isfinite(f)
    if not np.any(ok):
        return None
    q = averaged.weights[ok] / averaged.weights[ok].sum()
    result = {}
    for name, x, unit in (("frequency", f[ok], "Hz"), ("duty", duty[ok], "1")):
        mean = float(q @ x)
        result[name] = Quantity(mean, float(np.sqrt(q @ (x - mean) ** 2)) or 0.05 * mean, unit)
    return result


def _paper(model: Model, which: str, target: float) -> float | None:
    with np.errstate(all="ignore"):
        f, duty = model.frequency_and_duty(model.nominal[None, :], model.views[0].without_probe())
    x = float((f if which == "frequency" else duty)[0])
    return x / target - 1 if math.isfinite(x) else None


def _failed(sheet: Sheet) -> str | None:
    targets = [t for t in (sheet.target_frequency, sheet.target_duty) if t is not None and t.stated]
    return "fail" if targets else None


__all__ = ["explain", "limits_of"]
