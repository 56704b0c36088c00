"""One shot split over several files, and the face of the room."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from benchfit.capture import read
from benchfit.errors import CaptureError

Write = Callable[..., Path]


def part(source: str, n: int = 100, start: float = -1e-3, step: float = 1e-5, phase: int = 0) -> str:
    head = f"Record Length,{n}\nSample Interval,{step:.3e}\nVertical Units,V\nHorizontal Units,s\nSource,{source}\n"
    return head + "".join(f"{start + k * step:.6e},{(k + phase) % 9 / 4}\n" for k in range(n))


def test_files_of_one_shot_are_one_capture(write: Write) -> None:
    first, second = write(part("CH1"), "a.csv"), write(part("CH2", phase=3), "b.csv")
    capture = read(first, [second])
    assert [channel.name for channel in capture.channels] == ["CH1", "CH2"]
    assert capture.samples == 100
    np.testing.assert_array_equal(capture["CH2"].values, read(second).channels[0].values)
    assert capture.path == str(first)


def test_equal_names_are_told_apart(write: Write) -> None:
    first, second = write("in s,U in V\n" + part("", 100).split("Source,\n")[1], "a.csv"), write(
        "in s,U in V\n" + part("", 100).split("Source,\n")[1], "b.csv")  # fmt: skip
    assert [channel.name for channel in read(first, [second]).channels] == ["U", "U (b)"]
    nameless = "second,Volt\n" + part("", 100).split("Source,\n")[1]
    first, second = write(nameless, "a.csv"), write(nameless, "b.csv")
    assert [channel.name for channel in read(first, [second]).channels] == ["CH1", "CH2"]


@pytest.mark.parametrize(
    ("other", "expected"),
    [
        (part("CH2", n=101), "100 samples there, 101 here"),
        (part("CH2", step=1.1e-5), "1e-05 s between samples there, 1.1e-05 s here"),
        (part("CH2", start=0.0), "the first sample at -0.001 s there, at 0 s here"),
    ],
)
def test_axes_that_differ_are_refused_and_it_is_said_how(other: str, expected: str, write: Write) -> None:
    with pytest.raises(CaptureError, match=expected):
        read(write(part("CH1"), "a.csv"), [write(other, "b.csv")])


def test_importing_the_room_loads_no_pandas() -> None:
    code = "import sys, benchfit.capture; sys.exit('pandas' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
