"""Bytes: encodings, compressions, standard input, limits."""

from __future__ import annotations

import bz2
import gzip
import io
import lzma
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from benchfit.capture import read
from benchfit.capture.source import Source
from benchfit.errors import CaptureError

Write = Callable[..., Path]
TEXT = "# Prüfstand, 23 °C\nTime (µs);Gerät (V)\n" + "".join(
    f"{k * 0.5:.2f};{k % 9 / 4:.2f}\n" for k in range(400)
)


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize(
    "encoding", ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "utf-32", "latin-1", "cp1252"]
)
def test_encodings_and_line_ends(encoding: str, end: str, write: Write) -> None:
    capture = read(write(TEXT.replace("\n", end).encode(encoding)))
    assert capture.channels[0].name == "Gerät"
    assert capture.samples == 400
    assert capture.interval == pytest.approx(0.5e-6)
    np.testing.assert_array_equal(capture.channels[0].values, [k % 9 / 4 for k in range(400)])


def test_garbage_glued_to_the_header(write: Write) -> None:
    capture = read(
        write(
            b"\x00\x01\xff\xfe\x03Time (s),CH1 (V)\n"
            + "".join(f"{k * 1e-3:.3f},{k % 7}\n" for k in range(99)).encode()
        )
    )
    assert capture.samples == 99
    assert capture.interval == pytest.approx(1e-3)


def _zstd(data: bytes) -> bytes:
    return pytest.importorskip("zstandard").ZstdCompressor().compress(data)


PACKERS = {"gzip": gzip.compress, "bzip2": bz2.compress, "xz": lzma.compress, "zstd": _zstd}


@pytest.mark.parametrize("packer", PACKERS)
@pytest.mark.parametrize("name", ["shot.csv.packed", "shot.csv"])
def test_compressed_files_are_known_by_their_bytes(packer: str, name: str, write: Write) -> None:
    capture = read(write(PACKERS[packer](TEXT.encode()), name))
    assert capture.samples == 400
    assert packer in capture.notes["encoding"]


@pytest.mark.parametrize("packer", ["gzip", "bzip2", "xz"])
def test_a_damaged_archive_is_read_as_far_as_it_goes(packer: str, write: Write) -> None:
    rng = np.random.default_rng(1)
    text = "Time (s),CH1 (V)\n" + "".join(
        f"{k * 1e-6:.6f},{v:.6f}\n"
        for k, v in enumerate(rng.random(100_000 if packer == "bzip2" else 40_000))
    )
    packed = PACKERS[packer](text.encode())
    capture = read(write(packed[: len(packed) * 3 // 4]))
    assert 1000 < capture.samples < text.count("\n") - 1
    assert "damaged" in {remark.code for remark in capture.warnings}


@pytest.mark.parametrize("packer", ["gzip", "bzip2", "xz"])
def test_an_archive_without_content(packer: str, write: Write) -> None:
    with pytest.raises(CaptureError):
        read(write(PACKERS[packer](b"")))
    with pytest.raises(CaptureError):
        read(write(PACKERS[packer](TEXT.encode())[:12]))


def test_standard_input() -> None:
    capture = read("-", stdin=io.BytesIO(TEXT.encode()))
    assert capture.samples == 400
    assert capture.path == "-"
    with pytest.raises(CaptureError, match="standard input"):
        read("-", stdin=io.BytesIO(b""))


# -- limits --------------------------------------------------------------------------------------------------


def test_a_bomb_of_one_line_stops_early(write: Write) -> None:
    bomb = write(gzip.compress(bytes(b"0" * (300 << 20)), 1))
    with pytest.raises(CaptureError, match="line of more than 1 MiB"):
        read(bomb)


def test_a_bomb_of_rows_stops_early(write: Write) -> None:
    row = (
        b"Time (s),CH1 (V)\n"
        + b"".join(b"%.6f,1.5\n" % (k * 1e-6) for k in range(1000))
        + (b"0.001," + b"0" * 1000 + b"\n") * 80_000
    )
    with pytest.raises(CaptureError, match="unpacks to more than 100 times its size"):
        read(write(gzip.compress(row, 1)))


def test_the_limit_can_be_set(write: Write) -> None:
    path = write(TEXT)
    with pytest.raises(CaptureError, match="limit"):
        read(path, limit=1000)
    assert read(path, limit=1_000_000).samples == 400


def test_a_line_without_end_behind_good_rows(write: Write) -> None:
    with pytest.raises(CaptureError, match="line of more than 1 MiB"):
        read(write(TEXT.encode() + b"7" * (3 << 20)))


def test_memory_for_the_values_counts_too(write: Write) -> None:
    rows = "".join(f"{k % 10},{k % 7}\n" for k in range(600_000))
    with pytest.raises(CaptureError, match="values"):
        read(write(rows), interval=1e-6, limit=4_000_000)


def test_blocks_hold_the_whole_text_in_whole_lines(write: Write) -> None:
    text = "".join(f"{k},{k * k}\r\n" for k in range(300_000)).encode()
    with Source(write(text)) as source:
        blocks = list(source.blocks(source.head.offsets[3]))
    assert b"".join(blocks) == text[len(b"0,0\r\n1,1\r\n2,4\r\n") :]
    assert all(block.endswith(b"\n") for block in blocks)
    assert len(blocks) > 3


@pytest.mark.parametrize("packed", [False, True])
def test_a_long_record_is_read_to_the_same_values_by_either_way(packed: bool, write: Write) -> None:
    """Large plain files go to pandas in one call, others block by block."""
    rng = np.random.default_rng(3)
    values = rng.integers(-128, 128, 60_000) * 0.04
    text = "in s,C1 in V,C2 in V\n" + "".join(
        f"{k * 4e-9:.30e},{v:.25E},{-v:.25E}\n" for k, v in enumerate(values)
    )
    capture = read(write(gzip.compress(text.encode(), 1) if packed else text))
    assert capture.samples == 60_000
    assert capture.interval == pytest.approx(4e-9, rel=1e-9)
    np.testing.assert_allclose(capture.channels[0].values, values, rtol=1e-6, atol=1e-12)
    np.testing.assert_array_equal(capture.channels[1].values, -capture.channels[0].values)


# Wide rows, so that few of them make a file that goes to pandas in one call.
LONG = [f"{k * 4e-9:.30e},{k % 100 * 0.04:.28f}" for k in range(80_000)]


@pytest.mark.parametrize("line", [100, 60_000, 79_990])
@pytest.mark.parametrize("spoilt", ["0.1,OL", "0.1", "text", "1e-3,1.0,2.0,3.0", ""])
def test_a_long_record_with_one_odd_line(spoilt: str, line: int, write: Write) -> None:
    rows = list(LONG)
    rows[line] = rows[line].split(",")[0] + ",OL" if spoilt == "0.1,OL" else spoilt
    path = write("in s,C1 in V\n" + "\n".join(rows) + "\n")
    assert path.stat().st_size > 5 << 20
    capture = read(path)
    assert capture.samples == 80_000
    values = capture.channels[0].values
    assert np.flatnonzero(np.isnan(values)).tolist() == [line]
    assert values[line + 1] == pytest.approx((line + 1) % 100 * 0.04)
