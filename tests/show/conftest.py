"""Options of the golden reports."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parent))

GOLDEN = Path(__file__).parent / "golden"


@pytest.fixture
def golden() -> Callable[[str, str], None]:
    """Compare a printed report with the file kept for it; with REFRESH_GOLDEN=1 set, rewrite the file."""

    def compare(name: str, text: str) -> None:
        path = GOLDEN / name
        if os.environ.get("REFRESH_GOLDEN"):
            path.parent.mkdir(exist_ok=True)
            path.write_text(text, encoding="utf-8", newline="\n")
        assert path.exists(), (
            f"{path} is missing: run REFRESH_GOLDEN=1 pytest tests/show and read what it wrote"
        )
        assert text == path.read_text(encoding="utf-8"), (
            f"{path} differs: REFRESH_GOLDEN=1 pytest tests/show rewrites it"
        )

    return compare
