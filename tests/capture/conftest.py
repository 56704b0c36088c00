"""What the tests of the capture room share: a place to write small files to."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest


@pytest.fixture
def write(tmp_path: Path) -> Callable[..., Path]:
    """A function that writes a file and returns its path."""

    def save(content: str | bytes, name: str = "shot.csv") -> Path:
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return path

    return save
