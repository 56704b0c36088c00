"""Spoilt files: bytes flipped, cut, shuffled, joined. Each ends as a capture or in one CaptureError, in time."""

from __future__ import annotations

import random
import time
import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from benchfit.capture import Capture, read
from benchfit.errors import CaptureError
from tools.csv_families import FAMILIES, Style, is_possible, make, relaxation, styles

LONGEST = 10.0


def _flip(data: bytes, rng: random.Random, other: bytes) -> bytes:
    spoilt = bytearray(data)
    for _ in range(rng.choice((1, 1, 2, 5, 20, 200))):
        spoilt[rng.randrange(len(spoilt))] = rng.choice((rng.randrange(256), *b',;\t .-+eE0\n\r"#(\0'))
    return bytes(spoilt)


def _cut(data: bytes, rng: random.Random, other: bytes) -> bytes:
    a, b = sorted((rng.randrange(len(data) + 1), rng.randrange(len(data) + 1)))
    return rng.choice((data[:a], data[a:], data[a:b], data[:a] + data[b:]))


def _shuffle(data: bytes, rng: random.Random, other: bytes) -> bytes:
    lines = data.splitlines(keepends=True)
    a, b = sorted((rng.randrange(len(lines) + 1), rng.randrange(len(lines) + 1)))
    part = lines[a:b]
    rng.shuffle(part)
    return b"".join(lines[:a] + part + lines[b:])


def _join(data: bytes, rng: random.Random, other: bytes) -> bytes:
    place = rng.randrange(len(data) + 1)
    return rng.choice(
        (
            data + other,
            data + data,
            data[:place] + other,
            data[:place] + other + data[place:],
            other + b"\n" + data,
        )
    )


def _cells(data: bytes, rng: random.Random, other: bytes) -> bytes:
    words = (
        b"",
        b"OL",
        b"nan",
        b"inf",
        b"1e400",
        b"-1e-400",
        b"9.91e37",
        b"0x1F",
        b"1e308",
        b"\xff",
        b"a" * 300,
        b"999999999999999999999",
    )
    lines = data.split(b"\n")
    for _ in range(rng.choice((1, 3, 30))):
        place = rng.randrange(len(lines))
        cells = lines[place].split(b",")
        cells[rng.randrange(len(cells))] = rng.choice(words)
        lines[place] = b",".join(cells)
    return b"\n".join(lines)


def _columns(data: bytes, rng: random.Random, other: bytes) -> bytes:
    lines = data.split(b"\n")
    first = rng.randrange(len(lines) + 1)
    change = rng.choice(
        (
            lambda cells: cells[1:],
            lambda cells: cells[::-1],
            lambda cells: cells * 2,
            lambda cells: [*cells, b""],
        )
    )
    return b"\n".join(lines[:first] + [b",".join(change(line.split(b","))) for line in lines[first:]])


MUTATIONS: tuple[Callable[[bytes, random.Random, bytes], bytes], ...] = (
    _flip,
    _cut,
    _shuffle,
    _join,
    _cells,
    _columns,
)


def _originals() -> list[bytes]:
    every = [(family, style) for family in FAMILIES for style in styles() if is_possible(family, style)]
    chosen = random.Random(5).sample(every, 160) + [(family, Style()) for family in FAMILIES]
    return [
        make(family, relaxation(40 + k % 30, 1 + k % 3, k), style).data
        for k, (family, style) in enumerate(chosen)
    ]


def _try(path: Path, data: bytes, rng: random.Random) -> Capture | CaptureError:
    path.write_bytes(data)
    options = rng.choice(
        (
            {},
            {},
            {"interval": 1e-6},
            {"frame": 2},
            {"columns": {"time": 0, "CH1": 1}},
            {"columns": {"increment": 0, "CH1": 1}},
        )
    )
    try:
        return read(path, **options)
    except CaptureError as error:
        return error


def _check(capture: Capture) -> None:
    assert capture.interval > 0
    assert np.isfinite(capture.start)
    assert capture.samples >= 2
    for channel in capture.channels:
        assert channel.values.shape == (capture.samples,)
        assert channel.values.dtype == np.float64
        assert not np.isinf(channel.values).any()
        assert channel.overloaded is None or channel.overloaded.shape == (capture.samples,)
        assert np.isfinite(channel.resolution)


def _run(count: int, seed: int, folder: Path) -> tuple[int, int]:
    rng = random.Random(seed)
    originals = _originals()
    read_well = refused = 0
    for k in range(count):
        data = rng.choice(originals)
        for _ in range(rng.choice((1, 1, 2, 3))):
            data = rng.choice(MUTATIONS)(data, rng, rng.choice(originals)) or b" "
        began = time.monotonic()
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                result = _try(folder / "spoilt.csv", data, rng)
        except Exception as error:  # what the test is for: nothing but CaptureError may come
            pytest.fail(f"file {k} of seed {seed}: {error!r} from {data[:400]!r}")
        assert time.monotonic() - began < LONGEST, f"file {k} of seed {seed} took too long"
        if isinstance(result, Capture):
            _check(result)
            read_well += 1
        else:
            assert "\n" not in result.says
            refused += 1
    return read_well, refused


def test_some_hundred_spoilt_files(tmp_path: Path) -> None:
    read_well, refused = _run(400, 1, tmp_path)
    assert read_well > 80
    assert refused > 40


@pytest.mark.long
@pytest.mark.timeout(3600)
def test_twenty_thousand_spoilt_files(tmp_path: Path) -> None:
    read_well, refused = _run(20_000, 2, tmp_path)
    assert read_well + refused == 20_000
