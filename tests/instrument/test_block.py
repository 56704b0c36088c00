"""Blocks per IEEE Std 488.2-1992 (8.7.9, 8.7.10) and number lists with SCPI-1999's stand-ins."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchfit.instrument.block import (
    ENCODINGS,
    BlockError,
    Header,
    decode_ascii,
    decode_binary,
    excerpt,
    mark_overloads,
    missing_header_bytes,
    parse_header,
)

BINARY = [encoding for encoding in ENCODINGS if encoding != "ascii"]


@pytest.mark.parametrize(
    ("raw", "expected"),
    [
        # IEEE Std 488.2-1992, 8.7.9.2: #<digits><count>; leading zeros in the count are allowed.
        (b"#15HELLO", Header(5, 3)),
        (b"#205HELLO", Header(5, 4)),
        (b"#800000005HELLO", Header(5, 10)),
        (b"#9000240000", Header(240_000, 11)),
        (b"#0HELLO\n", Header(None, 2)),
        # Common practice above 999,999,999 bytes.
        (b"#(1200000000)", Header(1_200_000_000, 13)),
    ],
)
def test_header(raw: bytes, expected: Header) -> None:
    assert parse_header(raw) == expected


@pytest.mark.parametrize("raw", [b"X15HELLO", b"#X5", b"#2-5", b"#3 12", b"#()x", b"#(12x)"])
def test_header_refused(raw: bytes) -> None:
    with pytest.raises(BlockError) as caught:
        header = parse_header(raw)
        assert header.count is not None
    assert caught.value.kind == "unreadable"


@given(st.binary(max_size=40))
@settings(deadline=None)
def test_header_parser_never_fails_otherwise(raw: bytes) -> None:
    header, kind = None, ""
    try:
        header = parse_header(raw)
    except BlockError as error:
        kind = error.kind
    if header is None:
        assert kind in ("unreadable", "short-block")
    else:
        assert raw.startswith(b"#")
        assert header.size <= len(raw)
        assert header.count is None or header.count >= 0


@given(st.integers(0, 10**9 - 1), st.integers(0, 3))
@settings(deadline=None)
def test_header_arrives_byte_by_byte(count: int, zeros: int) -> None:
    digits = ("0" * zeros + str(count))[-9:]
    whole = f"#{len(digits)}{digits}".encode()
    start = b""
    while missing := missing_header_bytes(start):
        assert len(start) + missing <= len(whole), "asks for bytes that belong to the data"
        start += whole[len(start) : len(start) + missing]
    assert start == whole
    assert parse_header(start).count == int(digits)


@given(
    st.sampled_from(BINARY),
    st.sampled_from(["little", "big"]),
    st.lists(st.integers(-128, 127), min_size=1, max_size=50),
)
@settings(deadline=None)
def test_binary_round_trip(encoding: str, order: str, values: list[int]) -> None:
    if encoding.startswith("uint"):
        values = [value + 128 for value in values]
    letter = {"int8": "b", "uint8": "B", "int16": "h", "uint16": "H", "float32": "f", "float64": "d"}[
        encoding
    ]
    import struct

    raw = struct.pack(f"{'<' if order == 'little' else '>'}{len(values)}{letter}", *values)
    assert decode_binary(raw, encoding, order).tolist() == values


def test_binary_of_a_broken_length() -> None:
    with pytest.raises(BlockError) as caught:
        decode_binary(b"12345", "float32", "little")
    assert caught.value.kind == "wrong-length"
    assert "5 bytes" in caught.value.says


@given(st.lists(st.floats(-1e30, 1e30), min_size=1, max_size=30))
@settings(deadline=None)
def test_ascii_round_trip(values: list[float]) -> None:
    assert decode_ascii(",".join(map(repr, values)).encode() + b"\n").tolist() == values


def test_ascii_names_the_sample() -> None:
    with pytest.raises(BlockError) as caught:
        decode_ascii(b"1.0,2.0,OVER,4.0")
    assert caught.value.kind == "unreadable"
    assert "sample 3" in caught.value.says
    assert "OVER" in caught.value.says


def test_infinity_and_not_a_number() -> None:
    # SCPI-1999 volume 1, 7.2.1.4 and 7.2.1.5: ±infinity is ±9.9E37, not-a-number 9.91E37.
    values, overloaded = mark_overloads(np.array([1.0, 9.9e37, -9.9e37, 9.91e37, 2.0]))
    assert np.isnan(values).tolist() == [False, True, True, True, False]
    assert overloaded is not None
    assert overloaded.tolist() == [False, True, True, False, False]
    as_float32, _ = mark_overloads(np.array([9.91e37, 9.9e37], dtype=np.float32).astype(float))
    assert np.isnan(as_float32).all()


def test_excerpt_is_printable() -> None:
    assert excerpt(b"A\x00\xff" + b"b" * 40).isprintable()
    assert excerpt(b"A\x00").startswith("'A\\x00'")
