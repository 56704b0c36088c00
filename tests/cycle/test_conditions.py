"""What benches do to a record: found, dealt with and named, on captures from integrated circuits."""

from __future__ import annotations

import numpy as np
import pytest

from benchfit.cycle import measure
from tools.cycle_families import FAMILIES

# What may come beside the remark that is asked for.
ALSO = {
    "ringing": {"glitches"}, "clean, lamp": set(), "glitches": {"missing-cycles", "poor-fit"},
    "missing or double": {"few-cycles"}, "few cycles": set(),
}


@pytest.mark.parametrize("family", [f for f in FAMILIES if f != "glitches"])
@pytest.mark.parametrize("seed", [0, 1])
def test_named_and_dealt_with(family: str, seed: int) -> None:
    case = FAMILIES[family](seed)
    found = measure(case.capture, case.assignments)
    codes = {r.code for r in found.remarks}
    assert found.oscillates
    assert (case.code in codes) or not case.code
    assert codes <= {case.code} | ALSO.get(family, set())
    for remark in found.remarks:
        assert len(remark.says) > 20
        assert "nan" not in remark.says
    for name, wanted in case.truth.items():
        if name in found:
            assert abs(found.value(name) - wanted) < 4.5 * found.u(name), name


@pytest.mark.long
@pytest.mark.parametrize("family", list(FAMILIES))
def test_rates(family: str) -> None:
    """Named in nearly all captures beyond the trigger, in next to none of the clean ones; constants within 3 u."""
    hits, false, within = [], [], []
    for seed in range(100, 160):
        case = FAMILIES[family](seed)
        found = measure(case.capture, case.assignments)
        codes = {r.code for r in found.remarks}
        hits.append(case.code in codes)
        false.append(bool(codes - {case.code} - ALSO.get(family, set())))
        within += [
            abs(found.value(n) - t) < 3 * found.u(n) for n, t in case.truth.items() if n in found
        ]
    if FAMILIES[family](0).code:
        assert np.mean(hits) >= 0.93
    assert np.mean(false) <= 0.05
    assert np.mean(within) >= 0.97
