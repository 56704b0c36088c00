"""Files replaced in one step, and the standard streams."""

from __future__ import annotations

import io
import sys
from pathlib import Path

import pytest

from benchfit.commands import streams
from benchfit.errors import UsageError


def test_a_file_is_replaced_whole():
    """While it is written the old one stays; afterwards nothing else is left."""
    Path("a.txt").write_text("old")
    with streams.replacing("a.txt") as scratch:
        scratch.write_text("new")
        assert scratch.suffix == ".txt"
        assert Path("a.txt").read_text() == "old"
    assert Path("a.txt").read_text() == "new"
    assert [path.name for path in Path().iterdir()] == ["a.txt"]


def test_a_failure_leaves_what_was_there():
    """No half-written file, no scratch file."""
    Path("a.txt").write_text("old")
    with pytest.raises(ZeroDivisionError), streams.replacing("a.txt") as scratch:
        scratch.write_text("half")
        raise ZeroDivisionError
    assert Path("a.txt").read_text() == "old"
    assert [path.name for path in Path().iterdir()] == ["a.txt"]


def test_what_the_system_refuses_is_one_sentence():
    """A full disk and a missing folder are named with the file; another file's trouble is not ours."""
    with (
        pytest.raises(UsageError, match=r"a\.txt: cannot be written: No space left"),
        streams.replacing("a.txt"),
    ):
        raise OSError(28, "No space left on device")
    with pytest.raises(UsageError, match=r"gone/a\.txt: cannot be written"):
        streams.write("gone/a.txt", "text")
    with pytest.raises(FileNotFoundError), streams.replacing("a.txt"):
        Path("elsewhere.csv").read_text()


def test_a_link_keeps_pointing():
    """The file behind a link is replaced, not the link."""
    Path("real.txt").write_text("old")
    try:
        Path("link.txt").symlink_to("real.txt")
    except OSError:
        pytest.skip("no links here")
    streams.write("link.txt", "new")
    assert Path("link.txt").is_symlink()
    assert Path("real.txt").read_text() == "new"


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_colour_and_width(monkeypatch):
    """Colour only on a terminal that can, and never with NO_COLOR; nothing is wrapped in a pipe."""
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setenv("COLUMNS", "93")
    monkeypatch.setattr(sys, "stdout", io.StringIO())
    assert not streams.colour()
    assert streams.width() == streams.UNWRAPPED
    monkeypatch.setattr(sys, "stdout", Terminal())
    assert streams.colour()
    assert streams.width() == 93
    monkeypatch.setenv("NO_COLOR", "1")
    assert not streams.colour()
    monkeypatch.setenv("NO_COLOR", "")
    assert streams.colour()
    monkeypatch.setenv("TERM", "dumb")
    assert not streams.colour()
