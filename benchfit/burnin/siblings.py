"""Several units in one run: which one departs from its siblings, what all do together taken off.

Every unit's block means are taken relative to its own mean, the median of its siblings' is subtracted block
by block (what room and supply do to all is then gone), and the difference is analysed for drift as a
quantity of its own. With two units no one can say which of them departs.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from benchfit.burnin import drift
from benchfit.burnin.blocks import Array, Blocks, block, edges
from benchfit.burnin.result import Departure

FACTOR = 4.0
"""Times its u (siblings' spread included) that a movement or a distance must be, to be called a departure."""


def departures(quantity: str, series: Mapping[str, tuple[Array, Array]]) -> list[Departure]:
    """Compare the units in one quantity.

    Parameters
    ----------
    quantity : str
    series : mapping
        Unit → (times s on one axis for all, values), NaN where unknown.

    Returns
    -------
    list of Departure
        One for each unit, where there are at least three that were measured over the same time.
    """
    if len(series) < 3:
        return []
    every = np.sort(np.concatenate([t for t, _ in series.values()]))
    if every.size < 3 * drift.LEAST:
        return []
    zero = float(every[0])
    longest = max((t for t, _ in series.values()), key=lambda t: t.size)
    borders = edges(np.maximum.accumulate(longest - zero))
    table, counts, when = _table(series, borders, zero)
    whole = np.isfinite(table).all(axis=0)
    if np.count_nonzero(whole) < drift.LEAST:
        return []
    table, counts, when = table[:, whole], counts[:, whole], when[whole]
    level = table.mean(axis=1)
    relative = table / level[:, None] - 1
    return _compared(quantity, list(series), level, relative, counts, when)


def _table(series: Mapping[str, tuple[Array, Array]], borders: Array, zero: float) -> tuple[Array, Array, Array]:
    """Block means of all units on common borders (units, blocks), NaN where empty; counts; mean times."""
    size = borders.size - 1
    table, counts, times = (np.full((len(series), size), np.nan) for _ in range(3))
    for row, (t, values) in enumerate(series.values()):
        known = np.isfinite(values)
        found = block(t[known] - zero, values[known], borders)
        full = found.place
        table[row, full], counts[row, full], times[row, full] = found.mean, found.count, found.time
    with np.errstate(invalid="ignore"):
        return table, counts, times.mean(axis=0)


def _compared(
    quantity: str, names: list[str], level: Array, relative: Array, counts: Array, when: Array
) -> list[Departure]:
    span = float(when[-1] - when[0])
    found: list[drift.Drift] = []
    distance = []
    for i in range(len(names)):
        others = [j for j in range(len(names)) if j != i]
        y = relative[i] - np.median(relative[others], axis=0)
        # The median of n siblings adds about 1/n of one unit's variance to the difference.
        weight = counts[i] / (1 + 1.25 / len(others))
        blocks = Blocks(when - when[0], np.zeros(when.size), weight, y, 0.0, 0, np.arange(when.size))
        found.append(drift.analyse(drift.basis(blocks, span), y))
        distance.append(level[i] / float(np.median(level[others])) - 1)
    return [_departure(quantity, names, i, found, np.array(distance)) for i in range(len(names))]


def _departure(quantity: str, names: list[str], i: int, found: list[drift.Drift], distance: Array) -> Departure:
    own = found[i]
    others = [j for j in range(len(names)) if j != i]
    spread = _spread(np.array([found[j].change for j in others]))
    u_change = math.hypot(own.u_change, spread)
    u_level = _spread(distance[others])
    is_departing = own.law != "none" and abs(own.change) > FACTOR * u_change
    is_off = u_level > 0 and abs(distance[i]) > FACTOR * u_level
    scale = u_change / own.u_change if own.u_change > 0 else 1.0
    return Departure(
        names[i], quantity, is_departing, own.law, own.change, u_change, own.rate, own.u_rate * scale,
        float(distance[i]), u_level, bool(is_off),
    )  # fmt: skip


def _spread(values: Array) -> float:
    """Robust standard deviation of few values about their median, with a factor for their fewness."""
    if values.size < 2:
        return 0.0
    away = np.abs(values - np.median(values))
    few = 1 + 2 / values.size
    return few * 1.4826 * float(np.median(away)) if values.size > 2 else few * float(values.std(ddof=1))
