"""The phase fit against certified values: NIST Statistical Reference Datasets, non-linear regression.

Misra1a and BoxBOD are both b1·(1 − e^(−b2·x)), a capacitor's charge from 0 V (source: NIST/ITL StRD,
https://www.itl.nist.gov/div898/strd/nls/nls_main.shtml; pass rule of this project: six digits in the parameters,
four in their standard deviations).
"""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from benchfit.cycle.phase import fit_exponentials

DATA = Path(__file__).parent / "data"


def certified(name: str) -> tuple[np.ndarray, list[list[float]], float]:
    """Data, (start 1, start 2, value, standard deviation) of each parameter, residual sum of squares."""
    lines = (DATA / f"{name}.dat").read_text().splitlines()
    parameters = [
        [float(x) for x in line.split("=")[1].split()] for line in lines if re.match(r"\s*b\d =", line)
    ]
    squares = next(float(line.split()[-1]) for line in lines if line.startswith("Residual Sum of Squares"))
    data = np.array([[float(x) for x in line.split()] for line in lines[60:] if line.strip()])
    return data, parameters, squares


def digits(found: float, wanted: float) -> float:
    """Digits in which two numbers agree: −log10 of the relative error."""
    return 15.0 if found == wanted else -np.log10(abs(found - wanted) / abs(wanted))


@pytest.mark.parametrize("name", ["Misra1a", "BoxBOD"])
@pytest.mark.parametrize("start", [None, 0, 1], ids=["own scan", "start 1", "start 2"])
def test_certified_charge(name: str, start: int | None) -> None:
    data, parameters, squares = certified(name)
    begin = None if start is None else parameters[1][start]
    fit = fit_exponentials(data[:, 1], data[:, 0], start=0.0, curvature=begin)
    deviation = np.sqrt(np.diag(fit.covariance()))
    assert digits(fit.asymptote, parameters[0][2]) >= 6
    assert digits(fit.model.curvature, parameters[1][2]) >= 6
    assert digits(deviation[0], parameters[0][3]) >= 4
    assert digits(deviation[1], parameters[1][3]) >= 4
    assert digits(fit.rss, squares) >= 8
    assert fit.freedom == len(data) - 2
