"""Killed at random instants while it records at full speed: tools/kill_study.py, a few kills here."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from tools import kill_study


def killed(kills: int, seed: int, folder: Path) -> None:
    done, records, wrong = kill_study.study(kills, seed, folder, is_quiet=True)
    assert wrong == []
    assert done == kills
    assert records > kills, "the study did not record anything between the kills"


def test_a_few_kills(tmp_path):
    """The log opens, holds every printed line, seq has no hole, interruptions are gaps."""
    killed(4, 7, tmp_path)


@pytest.mark.long
@pytest.mark.timeout(1800)
def test_two_hundred_kills(tmp_path):
    """From start-up to the middle of commits and checkpoints."""
    killed(200, 1, tmp_path)
