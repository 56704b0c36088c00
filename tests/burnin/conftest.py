"""What the burn-in's tests share: small records, captures and logs, all invented."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from benchfit.burnin.contents import Entry, Identity, Wanted
from benchfit.burnin.log import LogWriter
from benchfit.capture.model import Capture, Channel

SHEET = 'title = "Sluice gate ticker"\ncircuit = "op-amp"\n\n[parts]\nR = "10k 1%"\n'
IDENTITY = Identity("Sluice gate ticker", "op-amp", SHEET, "abc", "test")
START = 1_750_000_000.0


def record(frequency: float | None = 12.3, u: float = 1e-3, **parts: float) -> dict[str, Any]:
    """A result record with a frequency and parts."""
    measured: dict[str, Any] = {"oscillates": frequency is not None, "frequency": None}
    if frequency is not None:
        measured["frequency"] = {"value": frequency, "u": 2 * u, "unit": "Hz", "u_noise": u}
    return {
        "schema": 1,
        "capture": {"path": "x.csv", "channels": [{"name": "CH1", "node": "capacitor"}]},
        "measured": measured,
        "parts": {name: {"value": value, "u": 0.1 * value, "unit": "Ω"} for name, value in parts.items()},
    }


def failed(says: str = "no reply", status: int = 4) -> dict[str, Any]:
    """The record of a failed acquisition."""
    return {"schema": 1, "capture": {"path": "x"}, "error": {"status": status, "says": says}}


def capture(seed: int = 0, samples: int = 300) -> Capture:
    """A capture quantised in steps of 0.04 V, with an empty cell and an overload."""
    volts = np.round(np.random.default_rng(seed).normal(size=samples) / 0.04) * 0.04
    volts[3] = np.nan
    over = np.zeros(samples, bool)
    over[5] = True
    return Capture("a b.csv", 1e-4, -0.5, (Channel("CH1", "V", volts, 0.04, over), Channel("CH2", "V", volts * 2)))


@pytest.fixture
def log_at(tmp_path: Path) -> Iterator[Callable[..., LogWriter]]:
    """Opens logs in a folder of the test's own, and closes what the test left open."""
    opened: list[LogWriter] = []

    def open_(name: str = "run.db", identity: Identity = IDENTITY, units: Mapping[str, str] | None = None,
              wanted: Wanted | None = None) -> LogWriter:  # fmt: skip
        writer = LogWriter.open(tmp_path / name, identity, units or {"": "nowhere"}, wanted)
        opened.append(writer)
        return writer

    yield open_
    for writer in opened:
        writer.close()


def fill(writer: LogWriter, rows: Any, unit: str = "", every: float = 60.0, start: float = START) -> None:
    """Append records, ``every`` seconds apart; a row is a record or a frequency."""
    entries = [
        Entry(
            unit,
            start + i * every,
            row if isinstance(row, Mapping) else record(float(row)),
            1000.0 + i * every,
        )
        for i, row in enumerate(rows)
    ]
    for i in range(0, len(entries), 500):
        writer.append(entries[i : i + 500])
