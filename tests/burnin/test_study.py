"""The drift study's goals, with fewer runs: tools/study_drift.py is the whole of it."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from tools import study_drift

pytestmark = [pytest.mark.long, pytest.mark.timeout(1800)]


def test_laws(capsys):
    """Each law right in 95 % of its runs, and no drift in 95 % of steady ones."""
    assert study_drift.study_laws(8, np.random.default_rng(11)), capsys.readouterr().out


def test_parts(capsys):
    """Each part named in 95 % of its runs, alone or with those that the captures cannot tell from it."""
    assert study_drift.study_parts(20, np.random.default_rng(11)), capsys.readouterr().out


def test_captures(capsys):
    """The whole way, from a drifting part through captures and a log."""
    assert study_drift.study_captures(30), capsys.readouterr().out
