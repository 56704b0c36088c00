"""What a log says, put together: drift of everything, its cause, stability, alarms, which unit departs."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from benchfit.burnin import causes, drift
from benchfit.burnin.alarms import Limit, parse_limit
from benchfit.burnin.blocks import Array, Blocks, block, edges
from benchfit.burnin.contents import Alarm, Series
from benchfit.burnin.leaving import leaving
from benchfit.burnin.reader import LogReader
from benchfit.burnin.reduced import decimated, replayed
from benchfit.burnin.result import AlarmSeen, Drawn, GapSeen, Leaving, QuantityTrend, Trend, UnitTrend
from benchfit.burnin.siblings import departures
from benchfit.burnin.stability import overlapping_allan
from benchfit.burnin.timeline import stretches, timeline
from benchfit.errors import BenchfitError, UsageError

BuildOf = Callable[[str, Sequence[str]], causes.Build]
"""(build sheet as text, nodes that were probed) → the build's forward model."""
COMPARED = ("frequency", "duty", "upper", "lower", "high", "low")


def trend(
    path: str | Path,
    build_of: BuildOf | None = None,
    *,
    limits: Sequence[str] = (),
    unit: str | None = None,
    patience: float = 0.5,
) -> Trend:
    """What the log at ``path`` says; it may be written meanwhile.

    Parameters
    ----------
    path : str or Path
    build_of : callable, optional
        Makes the forward model of the build sheet in the log; without it no causes are given.
    limits : sequence of str
        Limits in place of those that the log was written with.
    unit : str, optional
        One unit alone.
    patience : float
        Seconds that the file's inside is looked over for damage.

    Raises
    ------
    LogError
        Where it is no log of this version, damaged, or empty of records.
    UsageError
        Where a limit or the unit is not known.
    """
    with LogReader.open(path, patience) as log:
        run = log.run()
        names = log.units()
        if unit is not None and unit not in names:
            raise UsageError(f"{path}: there is no unit {unit}; there is {', '.join(n or '(unnamed)' for n in names)}")
        chosen = [unit] if unit is not None else names
        model = _build(log, run.sheet, build_of)
        alarms = [_seen(alarm) for alarm in log.alarms() if alarm.unit in chosen]
        specs = list(limits) or [f"{name}={text}" for name, text in log.limits().items()]
        if limits:
            alarms = []
        units: list[UnitTrend] = []
        common: dict[tuple[str, str], tuple[Array, Array]] = {}
        errors: Counter[str] = Counter()
        for name in chosen:
            series = log.series(name)
            time = timeline(series.session, series.acquired, series.steady)
            bounds = _limits(specs, series)
            if limits:
                alarms += replayed(series, bounds)
            units.append(unit_trend(series, time, bounds, model))
            if len(chosen) > 2:
                common |= _for_comparison(name, series)
            errors.update(_errors(log, series))
        failures = sum(one.failures for one in units)
        return Trend(
            str(path), run.title, run.circuit, run.started, run.ended,
            sum(one.records for one in units), failures, run.is_closed,
            tuple(GapSeen(g.began, g.ended, g.why, g.unit) for g in log.gaps()),
            run.notes,
            tuple((event.at, event.says) for event in log.events()),
            tuple(units),
            tuple(sorted(alarms, key=lambda alarm: alarm.seq)),
            tuple(_departures(common)),
            tuple(errors.most_common(5)),
        )  # fmt: skip


# --- one unit -------------------------------------------------------------------------------------


def unit_trend(series: Series, time: Array, bounds: Mapping[str, Limit], model: causes.Build | str | None) -> UnitTrend:
    """What one unit's records say.

    Parameters
    ----------
    series : Series
    time : ndarray, shape (n,)
        Seconds since the run's start, of every record.
    bounds : mapping of Limit
        By quantity.
    model : Build, str or None
        The build's forward model, or why there is none.
    """
    good = series.status == 0
    order = np.argsort(time, kind="stable")
    is_sorted = bool(np.all(order == np.arange(order.size)))
    t = time if is_sorted else time[order]
    bases = _Bases(t)
    found: dict[str, QuantityTrend] = {}
    drawn: dict[str, Drawn] = {}
    within: dict[str, tuple[float, float]] = {}
    keep = None if bool(good.all()) else ~good
    for i, name in enumerate(series.names):
        values = series.values[i]
        if keep is not None:
            values = np.where(keep, np.nan, values)
        values = values if is_sorted else values[order]
        known = np.isfinite(values)
        if not known.any():
            continue
        first, last = float(values[np.argmax(known)]), float(values[values.size - 1 - np.argmax(known[::-1])])
        limit = bounds[name].about(first) if name in bounds else None
        if limit is not None:
            within[name] = limit
        one, law = _quantity(series, i, values, (first, last), bases, limit)
        found[name] = one
        if name == "frequency" or one.is_drifting or limit is not None:
            drawn[name] = decimated(t, values, law, inverted=name == "frequency")
    span = float(t[-1]) if t.size else 0.0
    records, failures = int(series.seq.size), int(np.count_nonzero(~good))
    unit = UnitTrend(series.unit, records, failures, span, found, drawn=drawn, limits=within)
    return _with_causes(_with_stability(unit, series, t, order, keep), bases, model)


class _Bases:
    """Blocks and the analysis' bases over one time axis, made once for each pattern of missing records."""

    def __init__(self, time: Array) -> None:
        self.time = time
        self.span = float(time[-1]) if time.size else 0.0
        self.borders = edges(time) if time.size > 1 and self.span > 0 else np.array([-np.inf, np.inf])
        self.means: dict[str, Blocks] = {}
        self.drifts: dict[str, drift.Drift] = {}
        self._known: dict[bytes, drift.Basis] = {}

    def blocks(self, name: str, values: Array) -> Blocks:
        found = block(self.time, values, self.borders)
        self.means[name] = found
        return found

    def basis(self, blocks: Blocks) -> drift.Basis | None:
        if blocks.time.size < drift.LEAST or self.span <= 0:
            return None
        key = blocks.time.tobytes() + blocks.count.tobytes()
        if key not in self._known:
            if len(self._known) > 40:  # every quantity missing in records of its own: keep memory bounded
                self._known.clear()
            self._known[key] = drift.basis(blocks, self.span)
        return self._known[key]


def _quantity(
    series: Series,
    i: int,
    values: Array,
    ends: tuple[float, float],
    bases: _Bases,
    limit: tuple[float, float] | None,
) -> tuple[QuantityTrend, drift.Drift | None]:
    name = series.names[i]
    blocks = bases.blocks(name, values)
    count = int(np.count_nonzero(np.isfinite(values)))
    mean = float(np.average(blocks.mean, weights=blocks.count))
    systematic = math.sqrt(max(_or_zero(series.u[i]) ** 2 - _or_zero(series.noise[i]) ** 2, 0.0))
    plain = QuantityTrend(
        name, series.units[i], series.kinds[i], count, *ends, mean,
        math.hypot(systematic, blocks.scatter / math.sqrt(count)),
        scatter=blocks.scatter, left_out=blocks.left_out,
    )  # fmt: skip
    base = bases.basis(blocks)
    if base is None:
        return plain, None
    if np.ptp(blocks.mean) <= 1e-14 * np.max(np.abs(blocks.mean)):
        still = replace(plain, law="none", probability=1.0, drift=0.0, u_drift=0.0, change=0.0, u_change=0.0)
        return replace(still, drift_now=0.0, scatter=0.0, wander=0.0), None
    if name == "frequency":
        return _frequency(plain, blocks, base, bases, systematic, limit)
    found = drift.analyse(base, blocks.mean)
    bases.drifts[name] = found
    leaves = None if limit is None else leaving(base, blocks.mean, found, *limit)
    return _judged(plain, found, systematic, leaves), found


def _judged(plain: QuantityTrend, found: drift.Drift, systematic: float, leaves: Leaving | None) -> QuantityTrend:
    """The plain facts with the drift that was found."""
    ranked = sorted(((p, law) for law, p in found.probability.items() if law != found.law), reverse=True)
    has_parameter = found.law in ("settling", "logarithmic", "step")
    return replace(
        plain,
        u=math.hypot(systematic, found.sigma / math.sqrt(plain.records)),
        law=found.law,
        probability=found.probability[found.law],
        runner_up=(ranked[0][1], ranked[0][0]),
        drift=found.rate,
        u_drift=found.u_rate,
        change=found.change,
        u_change=found.u_change,
        drift_now=found.rate_now,
        parameter=found.shape.parameter if has_parameter else math.nan,
        u_parameter=found.u_parameter if has_parameter else math.nan,
        scatter=found.sigma,
        wander=found.walk,
        leaving=leaves,
    )


def _frequency(
    plain: QuantityTrend,
    blocks: Blocks,
    base: drift.Basis,
    bases: _Bases,
    systematic: float,
    limit: tuple[float, float] | None,
) -> tuple[QuantityTrend, drift.Drift]:
    """The frequency's drift, by the law of the period's: parts set times, and the laws are the parts'."""
    period = 1 / blocks.mean
    found = drift.analyse(base, period)
    bases.drifts["period of frequency"] = found
    leaves = None
    if limit is not None and limit[0] > 0:
        leaves = leaving(base, period, found, 1 / limit[1], 1 / limit[0])
        leaves = replace(leaves, low=limit[0], high=limit[1], limit=None if leaves.limit is None else 1 / leaves.limit)
    f = plain.mean
    at = {"none": f, "step": f}.get(found.law) or 1 / float(found.curve(np.array([base.span]))[0])
    change = -found.change * f**2
    if found.law != "none":
        start = float(found.curve(np.array([0.0]))[0])
        change = 1 / (start + found.change) - 1 / start
    turned = replace(
        found,
        change=change,
        u_change=found.u_change * f**2,
        rate=-found.rate * f**2 if found.law in ("none", "step") else change / base.span,
        u_rate=found.u_rate * f**2,
        rate_now=-found.rate_now * at**2,
        sigma=found.sigma * f**2,
        walk=found.walk * f**2,
    )
    return _judged(plain, turned, systematic, leaves), found


def _or_zero(x: float) -> float:
    return float(x) if math.isfinite(x) else 0.0


def _with_stability(unit: UnitTrend, series: Series, t: Array, order: Any, keep: Any) -> UnitTrend:
    if "frequency" not in unit.quantities:
        return unit
    values = series.row("frequency")
    values = values if keep is None else np.where(keep, np.nan, values)
    parts, interval = stretches(t, values[order])
    if interval is None:
        return unit
    mean = float(np.nanmean(values))
    found = overlapping_allan([part / mean - 1 for part in parts], interval)
    if not any(d.adev > 0 for d in found):  # one capture again and again
        return unit
    return replace(unit, stability=tuple(found), interval=interval)


# --- causes ---------------------------------------------------------------------------------------


def _build(log: LogReader, sheet: str, build_of: BuildOf | None) -> causes.Build | str | None:
    """The forward model, or why there is none."""
    if build_of is None:
        return None
    if not sheet:
        return "the log has no build sheet"
    nodes: list[str] = []
    for record in log.records(1, 50):
        channels = (record.get("capture") or {}).get("channels") or []
        nodes = [str(channel["node"]) for channel in channels if channel.get("node")]
        if nodes:
            break
    try:
        return build_of(sheet, nodes)
    except BenchfitError as fault:
        return fault.says


def _with_causes(unit: UnitTrend, bases: _Bases, model: causes.Build | str | None) -> UnitTrend:
    frequency = unit.quantities.get("frequency")
    if frequency is None or not frequency.is_drifting:
        return unit
    if model is None or isinstance(model, str):
        return replace(unit, why_no_cause=model or "")
    own = bases.means["frequency"]
    listed = [n for n in causes.quantities(list(unit.quantities)) if _covers(bases.means[n], own)]
    common = own.place
    for name in listed:
        common = np.intersect1d(common, bases.means[name].place)
    own = own.at(common)
    base = bases.basis(own)
    if base is None or not listed:
        return replace(unit, why_no_cause="too little was measured together with the frequency")
    y = np.stack([bases.means[n].at(common).mean for n in listed])
    seen = causes.fingerprint(base, listed, y, 1 / own.mean, bases.drifts["period of frequency"])
    parts = {n: q.mean for n, q in unit.quantities.items() if q.kind == "part" and q.records > 0.5 * frequency.records}
    blamed = causes.blame(model, seen, parts)
    return replace(unit, causes=blamed.causes, unexplained=blamed.unexplained, why_no_cause=blamed.why)


def _covers(one: Blocks, other: Blocks, enough: float = 0.7) -> bool:
    """Known in most of the other's records and blocks."""
    return one.place.size >= enough * other.place.size and one.count.sum() >= enough * other.count.sum()


# --- limits and alarms ----------------------------------------------------------------------------


def _limits(specs: Sequence[str], series: Series) -> dict[str, Limit]:
    units = dict(zip(series.names, series.units, strict=True))
    if not units:
        return {}
    return {limit.quantity: limit for limit in (parse_limit(spec, units) for spec in specs)}


def _seen(alarm: Alarm) -> AlarmSeen:
    limit = alarm.high if alarm.value > alarm.high else alarm.low
    return AlarmSeen(
        alarm.seq, alarm.acquired, alarm.unit, alarm.quantity, alarm.value, limit, alarm.text, alarm.cleared
    )


# --- several units --------------------------------------------------------------------------------


def _for_comparison(name: str, series: Series) -> dict[tuple[str, str], tuple[Array, Array]]:
    good = series.status == 0
    found = {}
    for quantity in COMPARED:
        if quantity in series.names:
            at = np.argsort(series.acquired[good], kind="stable")
            found[quantity, name] = (series.acquired[good][at], series.row(quantity)[good][at])
    return found


def _departures(common: Mapping[tuple[str, str], tuple[Array, Array]]) -> list[Any]:
    found = []
    for quantity in COMPARED:
        rows = {unit: series for (q, unit), series in common.items() if q == quantity}
        found += departures(quantity, rows)
    return found


# --- odds and ends --------------------------------------------------------------------------------


def _errors(log: LogReader, series: Series) -> Counter[str]:
    """What failed records say, by how often; a few hundred are looked at."""
    found: Counter[str] = Counter()
    failed = series.seq[series.status != 0]
    for seq in failed[:: max(1, failed.size // 200)]:
        for record in log.records(int(seq), int(seq)):
            found[str(record["error"].get("says", ""))] += 1
    return found
