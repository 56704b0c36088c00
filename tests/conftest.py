"""What every test has: hypothesis without a deadline, and a count of what was skipped."""

from __future__ import annotations

import os

import pytest
from hypothesis import settings

settings.register_profile("benchfit", deadline=None, derandomize="CI" in os.environ)
settings.load_profile("benchfit")


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    """Say how many tests were skipped, also where it is none."""
    terminalreporter.write_line(f"tests skipped: {len(terminalreporter.stats.get('skipped', []))}")
