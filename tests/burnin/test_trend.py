"""The trend of whole logs: what the contract says of it, in data, text, JSON, CSV and picture."""

from __future__ import annotations

import csv
import io
import json
import math
import re

import numpy as np
import pytest

from benchfit.burnin.alarms import Cleared, Raised
from benchfit.burnin.contents import Entry
from benchfit.burnin.reader import LogReader
from benchfit.burnin.siblings import departures
from benchfit.burnin.trend import trend
from benchfit.errors import LogError, UsageError
from benchfit.show.trend import record_line, render
from benchfit.show.trend_record import csv_lines, record

from .conftest import START, failed, fill
from .conftest import record as one

RNG = np.random.default_rng


def slow_down(n=120, size=0.01, noise=1e-4, seed=0):
    """Frequencies whose period grows by ``size`` over the run."""
    return 12.0 / (1 + size * np.linspace(0, 1, n) + noise * RNG(seed).normal(size=n))


@pytest.fixture
def drifting(log_at):
    """A log of two hours with a drift, two failures, a gap, an alarm, notes and a limit."""
    log = log_at()
    log.note("23 °C, lot 7")
    log.bounds({"frequency": "2 %"})
    f = slow_down()
    rows = [one(x, R=1e4) for x in f]
    rows[30] = failed("timed out")
    rows[31] = failed("timed out")
    entries = []
    for i, row in enumerate(rows):
        at = START + 60.0 * i + (600.0 if i >= 80 else 0.0)
        alarms = (Raised("frequency", f[100], 11.76, 12.24, "2 %"),) if i == 100 else ()
        alarms = (Cleared("frequency"),) if i == 110 else alarms
        gap = (START + 60.0 * 79, "interrupted") if i == 80 else None
        entries.append(Entry("", at, row, 5000.0 + at - START, alarms=alarms, gap=gap))
    log.append(entries)
    log.close("completed")
    return log.path


def test_the_record_has_what_the_contract_says(drifting):
    """Names, shapes and sums of section 8, and JSON that is JSON."""
    found = record(trend(drifting))
    json.dumps(found, allow_nan=False)
    assert {"schema", "run", "quantities", "causes", "stability", "alarms"} <= found.keys()
    run = found["run"]
    assert (run["title"], run["records"], run["failures"]) == ("Sluice gate ticker", 120, 2)
    assert (run["started"], run["notes"]) == ("2025-06-15T15:06:40.000000Z", ["23 °C, lot 7"])
    (gap,) = run["gaps"]
    assert (gap["from"], gap["to"]) == ("2025-06-15T16:25:40.000000Z", "2025-06-15T16:36:40.000000Z")
    frequency = found["quantities"]["frequency"]
    assert frequency["first"] == pytest.approx(12.0, rel=1e-3)
    assert frequency["last"] == pytest.approx(12.0 / 1.01, rel=1e-3)
    assert frequency["u"] > 0
    assert frequency["drift_model"] == "linear"
    hours = (119 * 60 + 600) / 3600
    drift = frequency["drift"]
    assert drift["unit"] == "Hz/h"
    # The gap makes the drift two straight lines; a straight line is still the best of the laws.
    assert drift["value"] == pytest.approx(-12 * 0.01 / hours, rel=0.1)
    assert found["quantities"]["R"]["drift_model"] == "none"
    (alarm,) = found["alarms"]
    assert {"seq", "acquired", "quantity", "value", "limit"} <= alarm.keys()
    assert (alarm["seq"], alarm["limit"], alarm["cleared"]) == (
        101,
        12.24 if alarm["value"] > 12.24 else 11.76,
        111,
    )
    for entry in found["stability"]:
        assert {"averaging_time", "adev", "u"} <= entry.keys()
    assert found["stability"][0]["averaging_time"] == pytest.approx(60.0)


def test_stability_of_what_was_measured(log_at):
    """White frequency noise of 1e-5: the deviation at one interval is that, and falls as 1/√τ."""
    log = log_at()
    fill(log, 12 * (1 + 1e-5 * RNG(2).normal(size=1024)))
    found = {d.averaging_time: d for d in trend(log.path).units[0].stability}
    for m in (1, 4, 16, 64):
        d = min(found.values(), key=lambda e: abs(e.averaging_time - 60 * m))
        assert d.adev == pytest.approx(1e-5 / math.sqrt(m), rel=4 * d.u / d.adev)


def test_failures_and_gaps_are_never_bridged(log_at):
    """With every third acquisition failed no two averages of two records are neighbours."""
    log = log_at()
    rows = [failed() if i % 3 == 2 else one(12 + 1e-4 * x) for i, x in enumerate(RNG(0).normal(size=300))]
    fill(log, rows)
    unit = trend(log.path).units[0]
    assert unit.failures == 100
    assert unit.stability == ()


def test_a_log_that_is_being_written_can_be_read(log_at):
    """And says that it is not closed."""
    log = log_at()
    fill(log, slow_down(40))
    found = trend(log.path)
    assert found.records == 40
    assert not found.is_closed
    assert "being written" in render(found, width=300)


def test_other_limits_are_tried_on_the_records(drifting):
    """--limit: the alarms that they would have raised, and when they are left."""
    found = trend(drifting, limits=["frequency=0.5%"])
    assert found.alarms[0].quantity == "frequency"
    assert 55 <= found.alarms[0].seq <= 65
    assert "outside" in found.units[0].quantities["frequency"].leaving.why
    wide = trend(drifting, limits=["frequency=2%"])
    leaves = wide.units[0].quantities["frequency"].leaving
    assert wide.alarms == ()
    assert leaves.earliest <= leaves.at <= leaves.latest
    assert leaves.at / 3600 == pytest.approx(2 * (119 * 60 + 600) / 3600, rel=0.25)
    with pytest.raises(UsageError, match="did you mean frequency"):
        trend(drifting, limits=["frequncy=1%"])


def test_empty_and_short_logs(log_at):
    """No records, one record, three records, only failures: no number that was not earned."""
    log = log_at()
    assert trend(log.path).records == 0
    fill(log, [12.0])
    found = trend(log.path)
    assert found.units[0].quantities["frequency"].law is None
    assert "Too few records" in render(found)
    assert record(found)["quantities"]["frequency"]["drift"] is None
    other = log_at("failed.db")
    fill(other, [failed("no reply")] * 5)
    text = render(trend(other.path))
    assert "No record has a frequency" in text
    assert "5 × no reply" in text


def test_constant_values(log_at):
    """One capture again and again: no drift, no deviation, no division by zero."""
    log = log_at()
    fill(log, [12.0] * 50)
    found = trend(log.path)
    assert found.units[0].quantities["frequency"].law == "none"
    assert found.units[0].stability == ()
    json.dumps(record(found), allow_nan=False)
    assert "does not drift" in render(found)


def test_quantities_that_come_and_go(log_at):
    """A part that only some records have is taken from those."""
    log = log_at()
    rows = [
        one(12.0 + 1e-4 * x, **({"R_leak": 5e6 + 10 * x} if i % 2 else {}))
        for i, x in enumerate(RNG(0).normal(size=80))
    ]
    fill(log, rows)
    found = trend(log.path).units[0].quantities["R_leak"]
    assert found.records == 40
    assert found.mean == pytest.approx(5e6, rel=1e-4)


def test_the_text(drifting):
    """The answer first; every line within the width; alarms, gaps and failures with their times."""
    text = render(trend(drifting), width=80)
    assert all(len(line) <= 80 for line in text.splitlines())
    lines = text.splitlines()
    assert lines[0] == "Sluice gate ticker, op-amp"
    assert "The frequency changed by" in text
    assert "2 × timed out" in text
    assert "(interrupted)" in text
    assert "cleared by #111" in text
    assert "note: 23 °C, lot 7" in text
    assert "\x1b" not in text
    assert "\x1b[1m" in render(trend(drifting), colour=True)


def test_the_table(drifting):
    """One row a record, each quantity with its u, failed ones with their error, numbers to the bit."""
    with LogReader.open(drifting) as log:
        text = "".join(csv_lines(log.quantities(), log.rows(), has_units=False))
        first = next(log.records(1))
    rows = list(csv.DictReader(io.StringIO(text)))
    assert len(rows) == 120
    assert list(rows[0]) == ["seq", "acquired", "status", "error", "frequency", "frequency_u", "R", "R_u"]
    assert float(rows[0]["frequency"]) == first["measured"]["frequency"]["value"]
    assert (rows[30]["status"], rows[30]["error"], rows[30]["frequency"]) == ("4", "timed out", "")


def test_the_picture(drifting, tmp_path):
    """PNG, SVG and PDF; another ending is refused; axes of the caller's."""
    from matplotlib.figure import Figure

    from benchfit.show.trend_plot import plot

    found = trend(drifting)
    for ending in ("png", "svg", "pdf"):
        path = tmp_path / f"trend.{ending}"
        plot(found, path)
        assert path.stat().st_size > 5000
    with pytest.raises(UsageError):
        plot(found, tmp_path / "trend.gif")
    axes = Figure().subplots(3, 1)
    plot(found, axes=axes)
    assert axes[0].get_ylabel() == "frequency (Hz)"


def test_one_line_a_record():
    """When, number, frequency, how far off the first, duty; a failure's reason; alarms."""
    shown = {"seq": 7, "acquired": "2025-06-15T15:06:40.000000Z", **one(12.06)}
    text = record_line(shown, ["ALARM: frequency beyond 2 %"], 12.0)
    assert re.search(r"2025-06-1\d \d\d:\d\d:40  #7  12.0600 ± 0.0020 Hz  \+0.5 % since the first  \[ALARM", text)
    assert record_line({"seq": 8, "acquired": shown["acquired"], **failed("no\x1b reply")}, [], 12.0).endswith(
        "failed: no\\x1b reply"
    )


# --- several units ------------------------------------------------------------------------------------


def several(log_at, strange=2, count=5, n=150):
    """Units that share a room's warming; one of them drifts by itself."""
    names = [f"00{i}" for i in range(count)]
    log = log_at(units={name: name for name in names})
    room = 0.003 * (1 - np.exp(-np.linspace(0, 6, n)))
    for i, name in enumerate(names):
        own = 0.002 * np.linspace(0, 1, n) if i == strange else 0
        fill(
            log,
            12 * (1 + 0.01 * i) / (1 + room + own + 2e-5 * RNG(i).normal(size=n)),
            unit=name,
            start=START + i,
        )
    log.close("completed")
    return log.path


def test_the_unit_that_departs_from_its_siblings(log_at):
    """What the room does to all is taken off; the one that goes its own way is named, and no other."""
    found = trend(several(log_at))
    departing = [d for d in found.departures if d.is_departing]
    assert [d.unit for d in departing] == ["002"]
    assert departing[0].law == "linear"
    assert departing[0].change == pytest.approx(-0.002, rel=0.1)
    assert all(unit.quantities["frequency"].law != "none" for unit in found.units), "all of them warm up"
    text = render(found, width=100)
    assert re.search(r"002 departs in its frequency: -0\.(20|19\d*) ± ", text)
    as_json = record(found)
    assert as_json["quantities"] == {}
    assert set(as_json["units"]) == {"000", "001", "002", "003", "004"}
    json.dumps(as_json, allow_nan=False)


def test_no_unit_departs_where_all_do_the_same(log_at):
    """Ten runs of four alike units: at most one false accusation."""
    wrong = 0
    for run in range(10):
        log = log_at(f"{run}.db", units={name: name for name in "ABCD"})
        for i, name in enumerate("ABCD"):
            fill(log, 12 * (1 + 2e-5 * RNG(100 * run + i).normal(size=60)), unit=name)
        wrong += any(d.is_departing for d in trend(log.path).departures)
    assert wrong <= 1


def test_one_unit_alone(log_at):
    """--unit; a name that is not there is refused with those that are."""
    path = several(log_at)
    found = trend(path, unit="003")
    assert [unit.unit for unit in found.units] == ["003"]
    assert found.records == 150
    assert record(found)["quantities"]["frequency"]["records"] == 150
    with pytest.raises(UsageError, match="no unit 9; there is 000, 001"):
        trend(path, unit="9")


def test_two_units_cannot_accuse_each_other():
    """With two no one can say which departs."""
    t = 60.0 * np.arange(100)
    assert departures("frequency", {"A": (t, 12 + 0 * t), "B": (t, 12 + 1e-3 * t)}) == []


def test_a_unit_that_lies_off_its_siblings(log_at):
    """A level far from where the others are among themselves is said too."""
    log = log_at(units={name: name for name in "ABCDE"})
    for i, name in enumerate("ABCDE"):
        level = 12 * (1 + 1e-3 * RNG(i).normal()) * (1.1 if name == "D" else 1)
        fill(log, level * (1 + 1e-5 * RNG(50 + i).normal(size=50)), unit=name)
    off = [d.unit for d in trend(log.path).departures if d.is_off and d.quantity == "frequency"]
    assert off == ["D"]


def test_a_log_of_another_kind(tmp_path):
    """A sentence, status 5."""
    (tmp_path / "x.csv").write_text("1,2\n")
    with pytest.raises(LogError) as caught:
        trend(tmp_path / "x.csv")
    assert caught.value.status == 5
