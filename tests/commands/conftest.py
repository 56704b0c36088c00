"""A made-up finding, for tests of what the command line does with one; and the sample captures."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

from benchfit import pipeline
from benchfit.errors import CaptureError
from benchfit.explain.result import CaptureFacts, Explanation, Quantity, Suspect
from benchfit.sheet import Sheet

SAMPLES = Path(__file__).resolve().parents[2] / "sample_captures"


@dataclass
class Asked:
    """What the pipeline was asked, in order, and the verdict that it gives."""

    captures: list[Any] = field(default_factory=list)
    sheets: list[Sheet | None] = field(default_factory=list)
    layouts: list[dict[str, Any]] = field(default_factory=list)
    files: list[list[str]] = field(default_factory=list)
    verdict: str | None = "pass"
    fault: Exception | None = None


@dataclass
class FakeCapture:
    path: str
    notes: dict[str, str] = field(default_factory=lambda: {"delimiter": "comma"})


@dataclass
class FakeFound:
    explanation: Explanation
    captures: tuple[Any, ...] = ()
    constants: tuple[Any, ...] = ()

    def record(self) -> dict[str, Any]:
        from benchfit.show.record import record

        return record(self.explanation)

    def plot(self, path: str) -> None:
        Path(path).write_text("a drawing")


def explanation(paths: list[str], verdict: str | None) -> Explanation:
    return Explanation(
        captures=tuple(CaptureFacts(path, 1000, 1e-6, (), 12.0) for path in paths),
        oscillates=True,
        measured={"frequency": Quantity(1234.5, 0.5, "Hz", 0.1), "duty": Quantity(0.5, 0.001, "1", 0.001)},
        circuit=None,
        suspects=(Suspect(("R",), {"R": 0.1}, 0.95, "R is 10 % high"),),
        settled=True,
        verdict=verdict,
    )


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch) -> Asked:
    """The pipeline and the reader replaced: no file is read, nothing is fitted."""
    asked = Asked()

    def read(path: str, also: Any = (), **layout: Any) -> FakeCapture:
        asked.files.append([str(path), *map(str, also)])
        asked.layouts.append(layout)
        if "missing" in str(path):
            raise CaptureError(f"{path}: there is no such file", path=str(path))
        return FakeCapture(str(path))

    def explain(
        capture: Any = None, sheet: Sheet | None = None, *, captures: Any = (), as_found: Any = None
    ) -> FakeFound:
        if asked.fault is not None:
            raise asked.fault
        every = list(captures) or [capture]
        asked.captures.append([c.path for c in every])
        asked.sheets.append(sheet)
        return FakeFound(explanation([c.path for c in every], asked.verdict), tuple(every), (None,))

    monkeypatch.setattr("benchfit.capture.read", read)
    monkeypatch.setattr(pipeline, "explain", explain)
    return asked


@pytest.fixture(autouse=True)
def _plain_surroundings(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Every test has a folder of its own and no colour set from outside."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("NO_COLOR", raising=False)
