"""What a good explanation of each sample capture must contain, and what it must not claim.

What was built stands in ``tools/make_samples.py`` and was fixed before the program was first run on a
capture. A row that the program fails stays here, marked with what is wrong.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import pytest

import benchfit
from tools.bench import simulate
from tools.make_samples import SAMPLES, make

ROOT = Path(__file__).resolve().parents[1]
FOLDER = ROOT / "sample_captures"
BUILT = {sample.name: sample for sample in SAMPLES}


@dataclass(frozen=True)
class Expected:
    """One row of the table.

    ``first``: the sets of causes one of which must come first. ``live``: causes that must keep a probability
    of at least 0.03 each, because nothing in the capture speaks against them. ``dead``: causes that must stay
    below 0.1. ``settled``: what it must be (None: either). ``verdicts`` allowed; ``warns``: warning codes
    that must be there. ``fails``: what the program gets wrong so far.
    """

    name: str
    first: tuple[tuple[str, ...], ...]
    live: tuple[tuple[str, ...], ...] = ()
    dead: tuple[tuple[str, ...], ...] = ()
    settled: bool | None = None
    verdicts: tuple[str | None, ...] = ("pass", "conditional", "fail")
    warns: tuple[str, ...] = ()
    fails: str = ""


TABLE = (
    Expected(
        "tide_gate_pacer", first=((),), dead=(("R",), ("C",), ("R_leak",), ("delay",)), verdicts=("pass",)
    ),
    Expected(
        "hive_scale_clock", first=(("C",), ("R",)), live=(("C",),), dead=((), ("R_leak",)), verdicts=("fail",)
    ),
    Expected("glasshouse_vent_pulser", first=(("R_leak",),), dead=((), ("R",)), warns=()),
    Expected(
        "mast_beacon",
        first=(("R",), ("C",)),
        dead=((), ("V_strike",), ("V_extinguish",)),
        verdicts=("fail",),
        warns=("probe-loads", "hazard"),
    ),
    Expected(
        "orchard_night_marker",
        first=(("V_strike",),),
        dead=((), ("R",), ("C",), ("V_extinguish",)),
        verdicts=("fail",),
        warns=("hazard",),
    ),
    Expected(
        "seed_drill_pulser",
        first=(("C",),),
        dead=((), ("eta",), ("R_leak",)),
        verdicts=("fail",),
        settled=True,
    ),
    Expected(
        "weir_level_alarm", first=(("R",),), dead=((),), verdicts=(None, "fail"), warns=("no-oscillation",)
    ),
    Expected(
        "letterpress_counter",
        first=(("V_upper", "V_lower"), ("V_upper",), ("V_lower",)),
        dead=((), ("R",), ("C",), ("R_leak",)),
        verdicts=("fail",),
    ),
    Expected(
        "ferry_queue_buzzer",
        # Thresholds at the ends of their limits would do it as well: even "nothing off" cannot be refused.
        first=(("C",), (), ("R",), ("V_upper",), ("V_lower",)),
        live=(("C",), ("R",)),
        settled=False,
        verdicts=("fail",),
    ),
    Expected("rain_gauge_ticker", first=(("RA", "RB"),), dead=((), ("C",), ("k_upper",)), verdicts=("fail",)),
    Expected(
        "henhouse_door_timer", first=((),), dead=(("C",), ("RA",), ("RB",)), verdicts=("pass", "conditional")
    ),
    Expected("dew_pond_pump", first=(("R_leak",),), dead=((), ("RA",), ("RB",)), verdicts=("fail",)),
    Expected("level_crossing_lamps", first=((),), dead=(("R1",), ("C1",), ("R_leak",)), verdicts=("fail",)),
    Expected("misting_bench_clock", first=(("R",), ("C",)), dead=((), ("R_leak",)), verdicts=("fail",)),
    Expected(
        "loom_shuttle_sweep", first=(("slew",),), dead=((), ("R",), ("C",)), verdicts=("fail",), settled=True
    ),
    Expected("sap_flow_ramp", first=(("R_leak",),), dead=((), ("C",), ("I_charge",)), verdicts=("fail",)),
    Expected(
        "barn_owl_camera",
        first=(("RG1", "RG2"), ("RG1",), ("RG2",)),
        dead=((), ("R",), ("C",)),
        verdicts=("fail",),
    ),
    # 38.6 V is 2.9 standard uncertainties from the middle of its limits: "nothing off" stays possible.
    Expected(
        "kiln_damper_pulser",
        first=(("V_breakover",),),
        dead=(("R",), ("C",), ("R_leak",)),
    ),
)


@cache
def explained(name: str) -> dict[str, Any]:
    """The record of one sample; shared by the tests."""
    capture = benchfit.read(str(FOLDER / f"{name}.csv"))
    sheet = benchfit.Sheet.load(str(FOLDER / f"{name}.toml"))
    record: dict[str, Any] = benchfit.explain(capture, sheet).record()
    return record


def _probability(record: dict[str, Any], causes: tuple[str, ...]) -> float:
    return sum(s["probability"] for s in record["suspects"] if set(s["causes"]) == set(causes))


def _rows() -> list[Any]:
    return [
        pytest.param(
            row, id=row.name, marks=[pytest.mark.xfail(reason=row.fails, strict=True)] if row.fails else []
        )
        for row in TABLE
    ]


def test_the_table_has_every_capture():
    assert {row.name for row in TABLE} == set(BUILT) <= {p.stem for p in FOLDER.glob("*.csv")}


@pytest.mark.parametrize("row", _rows())
def test_explanation(row: Expected):
    """First suspect, look-alikes, what must not be claimed, verdict and warnings."""
    record = explained(row.name)
    suspects = record["suspects"]
    said = [(s["causes"], round(s["probability"], 3)) for s in suspects]
    assert any(set(suspects[0]["causes"]) == set(causes) for causes in row.first), said
    for causes in row.live:
        assert _probability(record, causes) >= 0.03, (causes, said)
    for causes in row.dead:
        assert _probability(record, causes) < 0.1, (causes, said)
    if row.settled is not None:
        assert record["settled"] is row.settled, said
    right = any(set(suspects[0]["causes"]) == set(causes) for causes in row.first[:1])
    assert right or not record["settled"], said
    assert record["verdict"] in row.verdicts
    assert set(row.warns) <= {w["code"] for w in record["warnings"]}


@pytest.mark.parametrize("name", [row.name for row in TABLE])
def test_numbers(name: str):
    """Frequency as measured, and with the probe lifted, against the bench; probabilities that sum to one."""
    sample, record = BUILT[name], explained(name)
    assert sum(s["probability"] for s in record["suspects"]) == pytest.approx(1.0, abs=1e-6)
    truth = simulate(sample.circuit, sample.built, probe=sample.probe, seed=sample.seed, cycles=sample.cycles,
                     **sample.options)  # fmt: skip
    assert record["measured"]["oscillates"] is truth.oscillates
    if not truth.oscillates:
        return
    measured = record["measured"]["frequency"]
    assert abs(measured["value"] * truth.period - 1) < 3 * measured["u"] / measured["value"] + 1e-9
    lifted = simulate(
        sample.circuit, sample.built, cycles=400 if "lag" in sample.options else 1, **sample.options
    )
    if sample.probe:
        without = record["without_probe"]["frequency"]
        assert abs(without["value"] - 1 / lifted.period) < 3 * without["u"]


@pytest.mark.parametrize("name", ["tide_gate_pacer", "mast_beacon", "weir_level_alarm"])
def test_captures_are_made_anew_to_the_byte(name: str, tmp_path: Path):
    make(BUILT[name], tmp_path)
    for ending in (".csv", ".toml"):
        assert (tmp_path / name).with_suffix(ending).read_bytes() == (FOLDER / name).with_suffix(
            ending
        ).read_bytes()


@pytest.mark.parametrize("name", sorted(BUILT))
def test_captures_are_small(name: str):
    path = FOLDER / f"{name}.csv"
    assert path.stat().st_size < 300_000
    assert 2000 <= benchfit.read(str(path)).samples <= 10_000


def test_what_was_built_is_said():
    """The folder's own page has a row for every capture."""
    page = (FOLDER / "README.md").read_text(encoding="utf-8")
    assert all(f"| {name} |" in page for name in BUILT)
