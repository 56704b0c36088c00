"""A real charge of a resistor–capacitor model cell (pyABF project, model_vc_step.abf, MIT licence): τ 348 to 352 µs.

The recording lies beside the project, in ``shared/published/model_cell_rc``, and is never copied.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from benchfit.capture.model import Capture, Channel
from benchfit.cycle import Assignment, measure

FOLDER = Path(__file__).resolve().parents[2].parent / "shared" / "published" / "model_cell_rc"


@pytest.mark.parametrize(("name", "tolerance"), [("mean20", 2e-6), ("sweep0", 5e-6)])
def test_time_constant(name: str, tolerance: float) -> None:
    path = FOLDER / f"model_vc_step_{name}.csv"
    if not path.exists():
        pytest.skip(f"{path.name} is not there: the folder shared does not lie beside the project")
    t, _, current = np.loadtxt(path, delimiter=",", skiprows=1).T
    # From 0.6 ms after the step, when the amplifier has settled, to where the next thing happens.
    inside = (t >= 8.4e-3) & (t < 30e-3)
    capture = Capture(path.name, 50e-6, 8.4e-3, (Channel("current", "pA", current[inside]),))
    found = measure(capture, [Assignment("current", "capacitor")])
    assert not found.oscillates
    tau = 1.0 / found.value("ramp_curvature")
    assert 348e-6 - tolerance < tau < 352e-6 + tolerance
    assert abs(tau - 350e-6) < 3.0 * found.u("ramp_curvature") * tau**2 + 2e-6
    assert found.value("rest") == pytest.approx(-158.9, abs=0.5)
