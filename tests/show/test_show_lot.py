"""Lots: what many units have in common, counted right, told as text, JSON, pictures and a page."""

from __future__ import annotations

import gc
import html
import json
import re
import weakref
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest
from show_examples import fault_settled, lot, probe_loads, unsettled

from benchfit.errors import UsageError
from benchfit.explain.result import Explanation
from benchfit.show.layout import cells
from benchfit.show.lot import lot_of, lot_record, spread_of, tolerance_factor
from benchfit.show.lot_charts import plot_lot
from benchfit.show.lot_page import page_lot, report_lot
from benchfit.show.lot_text import off_parts, render_lot
from benchfit.show.record import dumps, record


@pytest.mark.parametrize("width", [60, 80, 120])
def test_a_lot_is_printed_as_kept(width: int, golden: Callable[[str, str], None]) -> None:
    text = render_lot(lot_of(lot()), width=width)
    assert max(cells(line) for line in text.splitlines()) <= width
    golden(f"lot_{width}.txt", text + "\n")


def test_records_make_the_same_lot_as_explanations() -> None:
    """What is read back from JSON tells of the units what the explanations told, but for the lot's title."""
    units = lot()
    lines = [dumps(record(u) if isinstance(u, Explanation) else u) for u in units]
    again = lot_of((json.loads(line) for line in lines), title="Tide gauge beeper")
    assert again == lot_of(units)


def test_units_are_counted_by_verdict_and_cause() -> None:
    made = lot_of(lot(24, failures=2))
    assert len(made.units) == 26
    assert [u.name for u in made.failures] == ["beeper 025.csv", "beeper 026.csv"]
    assert sum((made.verdicts or {}).values()) == 24
    assert sum(n for _, n in made.causes) == 24
    assert ("R", 1) in made.causes
    assert sum(len(names) for _, names in made.selections) == 24 - (made.verdicts or {})["pass"]


def test_a_unit_with_a_fault_of_its_own_does_not_widen_the_lot() -> None:
    made = lot_of(lot(40))
    assert made.apart == ("beeper 006.csv",)
    r = made.spread("R")
    assert r is not None
    assert r.count == 39
    assert r.highest < 10.2e3


def test_a_cause_that_all_units_share_is_the_lots_and_not_left_out() -> None:
    made = lot_of([fault_settled() for _ in range(8)])
    assert made.apart == ()
    assert made.causes == (("RA and RB", 8),)
    assert {s.name for s in off_parts(made)} == {"RA", "RB"}


def test_a_mean_that_is_off_is_named_and_one_that_is_not_is_not() -> None:
    """C of all units is 6 % high, read to 0.6 %; R is right. Then C is right as well."""
    assert [s.name for s in off_parts(lot_of(lot(40)))] == ["C"]
    assert off_parts(lot_of(lot(40, low_c=0.0))) == []


def test_what_moves_all_units_is_a_nominal_not_a_trimmer() -> None:
    made = lot_of(lot(40))
    assert made.suits is not None
    assert (made.suits[0].part, made.suits[0].after) == ("R", 9.1e3)
    assert "Move the nominal, not every trimmer: R of 9.1 kΩ suits" in render_lot(made)
    assert lot_of(lot(40, low_c=0.0)).suits is None


def test_parts_known_only_together_are_said_to_be() -> None:
    made = lot_of([unsettled() for _ in range(5)])
    c = made.spread("C")
    assert c is not None
    assert c.together == ("R",)
    assert made.together == (("R", "C"),)
    assert "Known only together: R and C; meter one of them" in render_lot(made)
    assert "Known only together: R and C" in page_lot(made)


def test_units_are_judged_without_the_probe() -> None:
    unit = lot_of([probe_loads()]).units[0]
    assert unit.frequency == pytest.approx(12.04)
    assert unit.miss == pytest.approx(12.04 / 12 - 1)


def test_file_names_stay_whole_where_the_last_part_is_not_enough() -> None:
    paths = ["a/unit.csv", "b\\unit.csv", "c/other.csv"]
    bare = [{"schema": 1, "capture": {"path": p}, "error": {"status": 3, "says": "empty"}} for p in paths]
    assert [u.name for u in lot_of(bare).units] == paths
    assert [u.name for u in lot_of(bare[1:]).units] == ["unit.csv", "other.csv"]


def test_tolerance_factors_are_the_handbooks() -> None:
    """NIST/SEMATECH e-Handbook of Statistical Methods, 7.2.6.3: for 43 values, 90 % of the population with
    99 % confidence, k = 2.217 (example's figure from memory; Howe's formula by hand gives 2.2174)."""
    assert tolerance_factor(43, 0.90, 0.99) == pytest.approx(2.217, abs=1e-3)


def test_the_tolerance_interval_holds_what_it_says() -> None:
    """Of 2000 seeded lots of 12 normal units, 95 % ± 2 % have an interval that holds 95 % of them all."""
    from scipy.special import ndtr

    rng = np.random.default_rng(5)
    x = rng.standard_normal((2000, 12))
    k = tolerance_factor(12)
    mean, s = x.mean(axis=1), x.std(axis=1, ddof=1)
    held = ndtr(mean + k * s) - ndtr(mean - k * s) >= 0.95
    assert abs(held.mean() - 0.95) <= 0.02


def test_a_mean_on_its_nominal_is_seldom_called_off() -> None:
    """At 3 u, under 2 % of 1000 seeded lots of 20 units are called off; of those 5 u off over 90 % are."""
    rng = np.random.default_rng(6)

    def called(shift: float) -> int:
        n = 0
        for _ in range(1000):
            values = [(str(i), float(v), 0.0) for i, v in enumerate(100 + shift + rng.standard_normal(20))]
            spread = spread_of("R", "Ω", values, 100.0)
            n += spread is not None and spread.is_off
        return n

    assert called(0.0) < 20
    assert called(5 / np.sqrt(20)) > 900


def test_the_instruments_own_share_does_not_average_out() -> None:
    values = [(str(i), 102.0, 1.0) for i in range(100)]
    spread = spread_of("V_high", "V", values, 100.0)
    assert spread is not None
    assert spread.off_u == pytest.approx(0.01)
    assert not spread.is_off


def test_a_lot_keeps_no_explanation_alive() -> None:
    """Read one by one, at most two explanations are in memory at any time."""
    alive: weakref.WeakSet[Explanation] = weakref.WeakSet()
    most = 0

    class Watched(Explanation):
        __hash__ = object.__hash__

    def units() -> Iterator[Explanation]:
        nonlocal most
        for unit in lot(30, failures=0):
            assert isinstance(unit, Explanation)
            watched = Watched(**vars(unit))
            alive.add(watched)
            del unit
            gc.collect()
            most = max(most, len(alive))
            yield watched

    assert len(lot_of(units()).units) == 30
    assert most <= 2


def test_the_lots_json_is_strict() -> None:
    made = lot_record(lot_of(lot()))
    assert json.loads(dumps(made)) == made
    assert made["spreads"]["C"]["is_off"] is True
    assert made["move_nominal"] == {"part": "R", "to": 9.1e3, "suits": 16}
    assert made["errors"][0]["path"] == "beeper 025.csv"


def test_a_lots_page_is_whole_and_holds_every_unit(tmp_path: Path) -> None:
    made = lot_of(lot(30))
    path = tmp_path / "lot.html"
    report_lot(made, path)
    text = path.read_text(encoding="utf-8")
    shown = html.unescape(re.sub(r"<[^>]+>", " ", text))
    for unit in made.units:
        assert unit.name in shown
    assert "Move the nominal, not every trimmer" in shown
    assert text.count("<svg") == 2
    assert "<script" not in text
    assert re.findall(r'(?:src|href)="([^#"]+)"', text) == ["data:,"]


def test_hostile_names_stay_text_on_a_lots_page() -> None:
    bad = {
        "schema": 1,
        "capture": {"path": "<b>x</b>.csv"},
        "error": {"status": 3, "says": "<script>1</script>\x1b"},
    }
    text = page_lot(lot_of([bad, *lot(4)], title="<i>lot</i>"))
    assert not re.search(r"<(b|i|script)\b", text)
    assert "\x1b" not in text


@pytest.mark.parametrize("kind", ["frequency", "parts"])
def test_lots_are_drawn(kind: str, tmp_path: Path) -> None:
    path = tmp_path / "lot.svg"
    plot_lot(lot_of(lot(200)), path, kind=kind)  # type: ignore[arg-type]
    assert path.stat().st_size < 500_000
    assert plot_lot(lot_of([]), kind=kind).axes  # type: ignore[arg-type]


def test_a_unit_far_off_does_not_squeeze_the_others() -> None:
    """It is named at the edge of the picture instead."""
    made = lot_of(lot())
    assert made.apart == ("beeper 006.csv",)
    ax = plot_lot(made, kind="frequency").axes[0]
    low, high = ax.get_xlim()
    assert 436.41 < low < 490.4
    assert high < 600
    assert [t.get_text() for t in ax.texts] == ["← beeper 006.csv: 436.4 Hz"]


def test_no_other_picture_of_a_lot_is_promised() -> None:
    with pytest.raises(UsageError, match="there are frequency, parts"):
        plot_lot(lot_of(lot()), kind="pie")  # type: ignore[arg-type]


def test_an_empty_lot_is_no_accident() -> None:
    assert "lot of 0 units" in render_lot(lot_of([]))
