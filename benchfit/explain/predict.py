"""What a build should do before power is applied: closed form at the nominals, bands over the tolerances, advice."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from benchfit.circuits.model import Node
from benchfit.errors import Remark
from benchfit.explain.assemble import assemble_bare
from benchfit.explain.cautions import cautions
from benchfit.explain.model import Array, Model, View
from benchfit.explain.rest import running_range
from benchfit.explain.spread import principal_points
from benchfit.quantity import percent, si
from benchfit.sheet.model import Sheet

DRAWS = 20_000


def predict(sheet: Sheet) -> dict[str, Any]:
    """The prediction record (contract, section 5).

    Raises
    ------
    SheetError
        Where the sheet names no circuit or misses a part.
    """
    model = assemble_bare(sheet)
    view = model.views[0].without_probe()
    node = next((n for n in model.circuit.nodes if n.shape != "square"), model.circuit.nodes[0])
    nominal = model.nominal
    with np.errstate(all="ignore"):
        cycle = model.circuit.cycle(model.parts_of(view, model.values(nominal)))
    failing = [c for c in cycle.conditions if not float(np.ravel(c.margin)[0]) > 0]
    warnings = cautions(model, sheet, [])
    warnings += [Remark(code, says) for code, mask, says in cycle.remarks if bool(np.all(mask))]
    record: dict[str, Any] = {
        "schema": 1,
        "circuit": model.circuit.name,
        "title": sheet.title,
        "oscillates": not failing,
    }
    if failing:
        condition = failing[0]
        limits = _limits_words(model, nominal, condition.part)
        says = condition.says + (f"; {limits}" if limits else "")
        warnings.insert(0, Remark("latch-up" if condition.code == "latched" else "no-oscillation", says))
        record |= {"predicted": None, "band": None, "miss": None}
    else:
        states = principal_points(nominal, np.diag(model.spread**2))
        record["predicted"] = _predicted(model, view, node, states)
        record["band"], record["root_sum_square"], record["monte_carlo"] = _bands(model, view)
        record["miss"] = _miss(model, view, sheet)
        record["contributions"] = _contributions(model, view)
        record["margins"] = _margins(model, nominal)
        warnings += _probe_note(model, sheet, nominal)
    record["capture_advice"] = _advice(model, node, record["predicted"])
    record["warnings"] = [{"code": w.code, "says": w.says} for w in warnings]
    return record


def _quantity(values: Array, unit: str) -> dict[str, Any]:
    u = float(np.sqrt(np.sum(np.nan_to_num(values[1:] - values[0]) ** 2)))
    return {"value": float(values[0]), "u": u, "unit": unit}


def _predicted(model: Model, view: View, node: Node, states: Array) -> dict[str, Any]:
    f, duty = model.frequency_and_duty(states, view)
    seen = View(node.name, node.shape, view.loads, view.swaps, view.added_C, view.added_R, view.capacitor)
    found = model.constants_of(seen, model.values(states))
    record = {"frequency": _quantity(f, "Hz"), "duty": _quantity(duty, "1"), "period": _quantity(1 / f, "s")}
    charge = found.get("charge_share", duty) * found["period"]
    record["charge_time"] = _quantity(charge, "s")
    record["discharge_time"] = _quantity(found["period"] - charge, "s")
    for name in ("upper", "lower"):
        if name in found:
            record[name] = _quantity(found[name], "V")
    return record


def _bands(model: Model, view: View) -> tuple[dict[str, Any], dict[str, Any], dict[str, Any]]:
    """Worst case over the tolerance limits, root-sum-square (± 2 u), Monte Carlo (JCGM 101: 95 % interval)."""
    worst: dict[str, Any] = {}
    square: dict[str, Any] = {}
    carlo: dict[str, Any] = {}
    rng = np.random.default_rng(101)
    wide = [i for i, p in enumerate(model.parameters) if p.part is not None and p.limits[1] > p.limits[0]]
    low = np.array([p.limits[0] for p in model.parameters])
    high = np.array([p.limits[1] for p in model.parameters])
    states = np.tile(model.nominal, (DRAWS, 1))
    states[:, wide] = rng.uniform(low[wide], high[wide], (DRAWS, len(wide)))
    with np.errstate(all="ignore"):
        drawn = model.frequency_and_duty(states, view)
        for slot, name in enumerate(("frequency", "duty")):
            ends = [_corner(model, view, slot, sign, wide, low, high) for sign in (-1, 1)]
            worst[name] = [float(x) if math.isfinite(x) else None for x in ends]
            sample = drawn[slot][np.isfinite(drawn[slot])]
            if sample.size:
                worst[name] = [
                    _reach(worst[name][0], float(sample.min()), min),
                    _reach(worst[name][1], float(sample.max()), max),
                ]
                carlo[name] = [float(x) for x in np.quantile(sample, (0.025, 0.975))]
            points = model.frequency_and_duty(principal_points(model.center, np.diag(model.spread**2)), view)[
                slot
            ]
            u = float(np.sqrt(np.sum(np.nan_to_num(points[1:] - points[0]) ** 2)))
            ends = [float(points[0]) - 2 * u, float(points[0]) + 2 * u]
            square[name] = ends if slot == 0 else [max(ends[0], 0.0), min(ends[1], 1.0)]
    carlo["oscillates"] = float(np.mean(np.isfinite(drawn[0])))
    return worst, square, carlo


def _reach(a: float | None, b: float, pick: Any) -> float:
    return b if a is None else float(pick(a, b))


def _corner(
    model: Model, view: View, slot: int, sign: int, wide: list[int], low: Array, high: Array
) -> float:
    """Extreme over the box of limits: walk to the corner that each parameter's own slope points to, until it
    stays."""
    state = model.nominal.copy()
    best = sign * float(model.frequency_and_duty(state[None, :], view)[slot][0])
    for _ in range(4):
        trial = np.tile(state, (2 * len(wide), 1))
        trial[np.arange(len(wide)), wide] = low[wide]
        trial[len(wide) + np.arange(len(wide)), wide] = high[wide]
        x = sign * model.frequency_and_duty(trial, view)[slot]
        x = np.where(np.isfinite(x), x, -np.inf)
        state = state.copy()
        state[wide] = np.where(x[: len(wide)] > x[len(wide) :], low[wide], high[wide])
        now = sign * float(model.frequency_and_duty(state[None, :], view)[slot][0])
        if not np.isfinite(now):
            return math.nan
        if now <= best + 1e-15 * abs(best):
            best = max(best, now)
            break
        best = now
    return sign * best


def _miss(model: Model, view: View, sheet: Sheet) -> dict[str, Any] | None:
    """on_paper for each target, and each tolerance's share of the variance of ln f (of duty)."""
    found: dict[str, Any] = {}
    f, duty = model.frequency_and_duty(model.nominal[None, :], view)
    for name, target, value in (("frequency", sheet.target_frequency, f), ("duty", sheet.target_duty, duty)):
        if target is None:
            continue
        found[name] = {
            "target": target.nominal,
            "on_paper": float(value[0]) / target.nominal - 1,
            "shares": _variance_shares(model, view, 0 if name == "frequency" else 1),
        }
    if "frequency" not in found and not found:
        return {"frequency": {"target": None, "on_paper": None, "shares": _variance_shares(model, view, 0)}}
    return found


def _variance_shares(model: Model, view: View, slot: int) -> list[dict[str, Any]]:
    wide = [i for i, p in enumerate(model.parameters) if p.part is not None and p.spread > 0]
    state = np.tile(model.center, (2 * len(wide), 1))
    rows = np.arange(len(wide))
    state[rows, wide] += model.spread[wide]
    state[len(wide) + rows, wide] -= model.spread[wide]
    with np.errstate(all="ignore"):
        x = model.frequency_and_duty(state, view)[slot]
    x = np.log(x) if slot == 0 else x
    parts = np.nan_to_num((x[: len(wide)] - x[len(wide) :]) / 2) ** 2
    total = float(np.sum(parts))
    if total == 0:
        return []
    order = np.argsort(-parts)
    shares = [(model.parameters[wide[k]].name, float(parts[k] / total)) for k in order]
    return [{"cause": name, "share": share} for name, share in shares if share > 1e-6]


def _contributions(model: Model, view: View) -> list[dict[str, Any]]:
    """What each tolerance moves the frequency by, from limit to limit, everything else nominal (fractions of f)."""
    wide = [i for i, p in enumerate(model.parameters) if p.part is not None and p.limits[1] > p.limits[0]]
    state = np.tile(model.nominal, (2 * len(wide) + 1, 1))
    rows = np.arange(len(wide))
    state[1 + rows, wide] = [model.parameters[i].limits[0] for i in wide]
    state[1 + len(wide) + rows, wide] = [model.parameters[i].limits[1] for i in wide]
    with np.errstate(all="ignore"):
        f, _ = model.frequency_and_duty(state, view)
    change = f / f[0] - 1
    found = []
    for k, i in enumerate(wide):
        ends = [float(change[1 + k]), float(change[1 + len(wide) + k])]
        if all(math.isfinite(e) for e in ends) and max(map(abs, ends)) > 1e-6:
            found.append({"part": model.parameters[i].name, "at_low": ends[0], "at_high": ends[1]})
    return sorted(found, key=lambda c: -max(abs(c["at_low"]), abs(c["at_high"])))


def _margins(model: Model, state: Array) -> list[dict[str, Any]]:
    """Range of each timing resistor in which the build runs, everything else nominal."""
    found = []
    for p in model.parameters:
        if p.part is None or p.part.kind != "resistor":
            continue
        reach = running_range(model, state, p.name)
        if reach is not None and (reach[0] is not None or reach[1] is not None):
            found.append({"part": p.name, "above": reach[0], "below": reach[1], "unit": reach[2]})
    return found


def _limits_words(model: Model, state: Array, part: str) -> str:
    from benchfit.explain.rest import limits_of

    return limits_of(model, state, part) if part else ""


def _probe_note(model: Model, sheet: Sheet, state: Array) -> list[Remark]:
    view = model.views[0]
    if not view.loads:
        return []
    with np.errstate(all="ignore"):
        on, off = (
            float(model.frequency_and_duty(state[None, :], v)[0][0]) for v in (view, view.without_probe())
        )
    if not math.isfinite(on):
        return [
            Remark(
                "probe-loads",
                "with this probe on the timing node the build will not oscillate at all; probe the "
                "output instead, or use one of higher resistance",
            )
        ]
    moved = on / off - 1
    return (
        [Remark("probe-loads", f"this probe will move the frequency by {percent(moved, signed=True)}")]
        if abs(moved) > 0.01
        else []
    )


def _advice(model: Model, node: Node, predicted: dict[str, Any] | None) -> list[str]:
    """How to capture the build, in sentences."""
    found = []
    has_output = any(n.shape == "square" for n in model.circuit.nodes)
    channels = f"the {node.name} node ({node.says})" + (" and the output together" if has_output else "")
    found.append(f"capture {channels}, d.c. coupled, with a ×10 probe")
    if predicted is not None:
        period = predicted["period"]["value"]
        scale = _per_division(period)
        found.append(
            f"set {si(scale, 's')} per division: some {10 * scale / period:.0f} cycles on ten divisions"
        )
        rise = min(predicted["charge_time"]["value"], predicted["discharge_time"]["value"])
        if rise < 0.02 * period:
            found.append(
                f"the short phase lasts about {si(rise, 's')}: a second capture of it alone, ten points or "
                "more, tells a capacitor from a resistor"
            )
    timing = [p for p in model.parameters if p.part is not None and p.part.kind in ("resistor", "capacitor")]
    single = (
        sum(
            p.part.kind == "resistor" and p.name.startswith("R") and len(p.name) == 1
            for p in timing
            if p.part
        )
        == 1
    )
    found.append(
        "thresholds, leaks and a wrong supply can be told from that capture"
        + (
            "; R and C only as a product: meter one of them, or capture again with a known capacitor across C"
            if single
            else "; which of the timing parts is off can be told where each has a phase of its own"
        )
    )
    return found


def _per_division(period: float) -> float:
    """A 1–2–5 time per division that shows four to ten cycles."""
    wanted = 0.6 * period
    decade = 10 ** math.floor(math.log10(wanted))
    return float(next(m * decade for m in (1, 2, 5, 10) if m * decade >= wanted * 0.999))
