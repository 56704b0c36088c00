"""Real recordings beside the project, against the values read from them by hand."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from benchfit.capture import read
from benchfit.errors import CaptureError

WILD = Path(__file__).parents[2].parent / "shared" / "wild"
EXPECTED = WILD / "expected.json"
FILES: list[dict[str, Any]] = json.loads(EXPECTED.read_text())["files"] if EXPECTED.exists() else []
# What the user has to tell of a file that cannot tell it.
OPTIONS: dict[str, dict[str, Any]] = {"real02.csv": {"interval": 1e-3}}
# Names as the contract wants them: the header's without its unit, CH1, CH2, … where it has none.
NAMES = {
    "real01.csv": ("1", "2"), "real02.csv": ("CH1", "CH2"), "real03.csv": ("CH1",), "real04.csv": ("CH1",),
    "real05.csv": ("CH1", "CH2"), "real06.csv": ("CH1", "CH2"), "real07.csv": ("CH1", "CH2"), "real08.csv": ("C1", "C2"),
    "real09.csv": ("ch1", "ch2"), "real10.csv": ("Kanal A", "Kanal B"), "real14.csv": ("CH1",),
}  # fmt: skip

pytestmark = pytest.mark.skipif(not FILES, reason=f"the real recordings are not at hand: no {EXPECTED}")


@pytest.fixture(params=FILES, ids=lambda file: file["file"])
def file(request: pytest.FixtureRequest) -> dict[str, Any]:
    """One entry of the table of expected values."""
    return request.param


def _allowed(expected: dict[str, Any], key: str) -> list[float]:
    also = expected.get("also_acceptable", {}).get("rows" if key == "data_rows" else key, [])
    return [expected[key], *also]


def test_real_file(file: dict[str, Any]) -> None:
    name, expected = file["file"], file["expected"]
    if file["role"] == "reject" or expected.get("also_acceptable", {}).get("refuse_time"):
        with pytest.raises(CaptureError) as error:
            read(WILD / name)
        assert name in error.value.says
        return
    capture = read(WILD / name, **OPTIONS.get(name, {}))
    assert capture.samples in _allowed(expected, "data_rows")
    assert tuple(channel.name for channel in capture.channels) == NAMES[name]
    assert any(
        capture.interval == pytest.approx(value, rel=1e-3)
        for value in _allowed(expected, "sample_interval_s")
    )
    if expected["first_time_s"] is not None:
        assert capture.start == pytest.approx(expected["first_time_s"], abs=1e-3 * capture.interval)
        end = capture.start + (capture.samples - 1) * capture.interval
        assert end == pytest.approx(expected["last_time_s"], abs=1.01 * capture.interval)
    _check_extremes(capture, expected, envelope=capture.samples != expected["data_rows"])


def _check_extremes(capture: Any, expected: dict[str, Any], envelope: bool) -> None:
    columns = expected["min_max"]
    kept = [column for column in columns if "Peak Detect" not in column["channel"]]
    assert len(capture.channels) == len(kept)
    for channel, column in zip(capture.channels, kept, strict=True):
        assert channel.unit == column["unit"]
        assert channel.minimum == pytest.approx(column["min"], rel=1e-9, abs=1e-12)
        assert channel.maximum == pytest.approx(column["max"], rel=1e-9, abs=1e-12)
        inside = column["min"] < np.min(channel.values) and np.max(channel.values) < column["max"]
        assert inside == envelope


def test_increments_are_added_up_when_the_user_says_so() -> None:
    """The discharge of which the table gives a fit of its own: 11.8 ms over the first 30 ms (own_reading)."""
    capture = read(WILD / "real11.csv", columns={"increment": 0, "uc": 1})
    assert {"increments", "uneven-time"} <= {remark.code for remark in capture.warnings}
    assert capture.start == pytest.approx(4e-6)
    assert capture.start + (capture.samples - 1) * capture.interval == pytest.approx(0.100108, rel=1e-2)
    early = capture.time < 0.03
    slope = np.polyfit(capture.time[early], np.log(capture.channels[0].values[early]), 1)[0]
    assert -1 / slope == pytest.approx(11.8e-3, rel=0.02)


def test_the_file_without_time_is_not_given_one() -> None:
    with pytest.raises(CaptureError, match="--interval"):
        read(WILD / "real02.csv")
