"""Suspects as a bench hears them: probabilities that share between look-alikes, what is settled, what is ruled
out."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from benchfit.explain import odds
from benchfit.explain.model import Array, Model
from benchfit.explain.result import RuledOut, Suspect
from benchfit.explain.weigh import Weighed
from benchfit.quantity import percent, si

SHOWN = 0.005
SURE = 0.9
MATTERS = 0.03

# Bayes factor within which two hypotheses count as look-alikes: the data prefer neither by more than 20 : 1.
ALIKE = math.log(20.0)

PLAIN = {
    "R_leak": "a leak from the timing node to ground (capacitor, board, probe or device)",
    "R_leak_supply": "a leak from the timing node to the supply",
    "I_leak": "a constant current out of the timing node (input bias or device leakage)",
    "C_stray": "stray capacitance on the timing node",
    "ESR": "series resistance in the capacitor's leg",
    "C_slope": "a capacitance that changes with voltage (class-2 ceramic)",
    "delay": "dead time at the switching",
    "slew": "a slow output (slew rate)",
}


def change_of(model: Model, name: str, state: Array) -> float:
    """Effective/nominal − 1 of a part; the value in SI of a parasitic or of a part whose nominal is 0."""
    value = float(model.values(state)[name])
    nominal = float(model.values(model.nominal)[name])
    if nominal == 0 or not math.isfinite(nominal):
        return value
    return value / nominal - 1


def _says(model: Model, w: Weighed, alike: Sequence[Weighed]) -> str:
    if not w.causes:
        return "nothing is off beyond its tolerance"
    is_swap = any({*s} == set(w.causes) for s in model.circuit.swaps) and _swapped(model, w)
    if is_swap:
        said = f"{w.causes[0]} and {w.causes[1]} are exchanged"
    else:
        said = " and ".join(_one(model, name, w) for name in w.causes)
    others = [" with ".join(a.causes) if a.causes else "nothing off" for a in alike]
    if others:
        said += f"; this capture cannot tell it from {_listed(others[:3])}"
    return said


def _listed(words: Sequence[str]) -> str:
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} or {words[-1]}"


def _swapped(model: Model, w: Weighed) -> bool:
    values, nominal = model.values(w.mode), model.values(model.nominal)
    a, b = w.causes
    return bool(
        abs(math.log(float(values[a]) / float(nominal[b]))) < 0.3
        and abs(math.log(float(values[b]) / float(nominal[a]))) < 0.3
    )


def _one(model: Model, name: str, w: Weighed) -> str:
    part = model.circuit.part(name)
    i = model.index[name]
    value = float(model.values(w.mean)[name])
    u = math.sqrt(max(w.covariance[i, i], 0.0))
    if part.coordinate in ("log", "inverse") and part.kind != "parasitic":
        u *= abs(value)
    if part.kind == "parasitic":
        return f"{PLAIN.get(name, part.says)}, about {si(value, part.unit)}"
    change = change_of(model, name, w.mean)
    nominal = float(model.values(model.nominal)[name])
    if nominal == 0:
        return f"{name} ({part.says}) is {si(value, part.unit, u)} instead of 0"
    for factor, words in ((10.0, "ten times too large"), (0.1, "ten times too small")):
        if abs(math.log(max(value / nominal, 1e-9) / factor)) < 0.15:
            return f"{name} ({part.says}) is {words}, a wrong decade: {si(value, part.unit, u)}"
    direction = "above" if value > nominal else "below"
    return (
        f"{name} ({part.says}) is {percent(abs(change))} {direction} its nominal: {si(value, part.unit, u)}"
    )


def lookalikes(w: Weighed, weighed: Sequence[Weighed]) -> list[Weighed]:
    """Hypotheses of as few causes that the data do not tell from this one."""
    return [
        o for o in weighed if o is not w and o.order <= w.order and o.log_evidence > w.log_evidence - ALIKE
    ]


def settled(model: Model, weighed: Sequence[Weighed]) -> bool:
    """Whether the first is at 0.9, by its prior odds and with equal prior odds among its look-alikes.

    A look-alike of "nothing off" counts only where it would matter: a parasitic too small to move the frequency by 3
    % is as good as none.
    """
    first = weighed[0]
    if first.probability < SURE:
        return False
    floor = first.log_evidence - math.log(1e4)
    group = [o for o in weighed[1:] if o.log_evidence > floor and o.order <= max(first.order, 1)]
    if not first.causes:
        group = [o for o in group if _matters(model, o)]
    logs = np.array([first.log_evidence, *(o.log_evidence for o in group)])
    return bool(1 / np.sum(np.exp(logs - logs[0])) >= SURE)


def _matters(model: Model, w: Weighed) -> bool:
    """Whether these causes, as large as this hypothesis takes them to be, move frequency or duty by 3 %."""
    put_right = w.mean.copy()
    for name in w.causes:
        put_right[model.index[name]] = model.parameters[model.index[name]].nominal
    with np.errstate(all="ignore"):
        f, duty = model.frequency_and_duty(np.vstack([w.mean, put_right]), model.views[0])
    moved = abs(math.log(f[0] / f[1])) if np.all(np.isfinite(f)) and f[0] > 0 else math.inf
    return moved > MATTERS or abs(float(duty[0] - duty[1])) > MATTERS


def suspects_of(model: Model, weighed: Sequence[Weighed]) -> tuple[Suspect, ...]:
    """The shown hypotheses, best first; probabilities sum to 1 over those shown."""
    shown = [w for w in weighed if w.probability >= SHOWN][:12] or list(weighed[:1])
    total = sum(w.probability for w in shown) or 1.0
    found = []
    for w in shown:
        alike = [o for o in lookalikes(w, shown) if o.causes] if w.causes else []
        change = {name: change_of(model, name, w.mean) for name in w.causes}
        change = {k: v for k, v in change.items() if math.isfinite(v)}
        found.append(
            Suspect(w.causes, change, w.probability / total if total else 1.0, _says(model, w, alike))
        )
    return tuple(found)


def ruled_out(model: Model, weighed: Sequence[Weighed]) -> tuple[RuledOut, ...]:
    """The commoner single causes that the data speak against, and by what."""
    dead = [w for w in weighed if len(w.causes) == 1 and w.probability < SHOWN]
    dead.sort(key=lambda w: -odds.weight(w.causes[0], model.circuit.part(w.causes[0]).kind))
    found = []
    for w in dead:
        by = _against(model, w)
        if by:
            found.append(RuledOut(w.causes[0], by))
    return tuple(found[:8])


_WORDS = {
    "period": "the period",
    "charge_share": "the share of the charge in the cycle",
    "high_share": "the duty cycle",
    "upper": "the upper turning voltage",
    "lower": "the lower turning voltage",
    "charge_curvature": "the bend of the charge",
    "discharge_curvature": "the bend of the discharge",
    "charge_start": "the start of the charge",
    "discharge_start": "the start of the discharge",
    "charge_bow": "the shape of the charge",
    "discharge_bow": "the shape of the discharge",
    "high": "the output's high level",
    "low": "the output's low level",
    "rise_time": "the output's rise time",
    "fall_time": "the output's fall time",
    "frequency": "the counter's frequency",
}


def _against(model: Model, w: Weighed) -> str:
    """What fits worst under this hypothesis: an observation, or the tolerance of another part."""
    if not np.all(np.isfinite(w.mode)):
        return "with it the circuit would not oscillate"
    with np.errstate(all="ignore"):
        away = (model.observed - model.predict(w.mode)) / np.sqrt(np.diag(model.covariance))
    pull = np.where(
        model.spread > 0, (w.mode - model.center) / np.where(model.spread > 0, model.spread, 1.0), 0.0
    )
    pull[[model.index[c] for c in w.causes]] = 0.0
    j, i = int(np.argmax(np.abs(np.nan_to_num(away)))), int(np.argmax(np.abs(pull)))
    name = w.causes[0]
    if abs(away[j]) >= abs(pull[i]) and abs(away[j]) > 2:
        o = model.observations[j]
        what = _WORDS.get(o.name, f"the reading of {o.name}")
        side = "lower" if away[j] > 0 else "higher"
        return f"with {name} alone, {what} would be {abs(away[j]):.0f} u {side} than it is"
    if abs(pull[i]) > 2:
        p = model.parameters[i]
        who = {"gain": "the scope's gain", "offset": "the scope's offset", "timebase": "the timebase"}.get(
            p.name.split(":")[0], p.name
        )
        return f"with {name} alone, {who} would have to be {abs(pull[i]):.1f} u off its own tolerance"
    return ""
