"""A record's scalars as a few packed bytes, its body and its raw capture compressed.

Scalars: the values of the first n quantities of the log's list (float64, NaN where unknown), then their u,
then the record's own part of it, u_noise (float32 each), all little-endian. The list only grows, so that an
earlier, shorter row is one in which the later quantities are unknown.
"""

from __future__ import annotations

import io
import json
import math
import zlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.model import Capture, Channel
from benchfit.errors import Remark

WIDTH = 16
"""Bytes per quantity."""
_WINDOW = 32768
_ODD = tuple(np.uint64(x) for x in (0x9E3779B97F4A7C15, 0xC2B2AE3D27D4EB4F, 0x165667B19E3779F9))


@dataclass(frozen=True)
class Scalar:
    """One number of a record: ``kind`` is "measured" or "part"; u and u_noise are NaN where unknown."""

    name: str
    unit: str
    kind: str
    value: float
    u: float
    u_noise: float


def scalars(record: Mapping[str, Any]) -> Iterator[Scalar]:
    """The numbers that a result record has under ``measured`` and ``parts`` (contract, section 5)."""
    for kind, section in (("measured", record.get("measured")), ("part", record.get("parts"))):
        for name, entry in (section or {}).items():
            if isinstance(entry, Mapping) and isinstance(entry.get("value"), int | float):
                u, noise = (_number(entry.get(key)) for key in ("u", "u_noise"))
                yield Scalar(name, str(entry.get("unit", "")), kind, float(entry["value"]), u, noise)


def pack(found: Mapping[str, Scalar], names: Sequence[str]) -> bytes:
    """The scalars in the order of ``names``, cut after the last one that is known."""
    known = [i for i, name in enumerate(names) if name in found]
    count = known[-1] + 1 if known else 0
    rows = np.full((3, count), np.nan)
    for i in known:
        one = found[names[i]]
        rows[:, i] = one.value, one.u, one.u_noise
    with np.errstate(over="ignore", under="ignore"):
        wide, narrow = rows[0].astype("<f8"), rows[1:].astype("<f4")
    return bytes(wide) + bytes(narrow)


def unpack(rows: Sequence[bytes]) -> tuple[NDArray[np.float64], NDArray[np.float32], NDArray[np.float32]]:
    """Values, u and u_noise of rows of one length, each of shape (rows, quantities)."""
    count = len(rows[0]) // WIDTH
    raw = np.frombuffer(b"".join(rows), np.uint8).reshape(len(rows), WIDTH * count)
    values = np.ascontiguousarray(raw[:, : 8 * count]).view("<f8")
    u = np.ascontiguousarray(raw[:, 8 * count : 12 * count]).view("<f4")
    noise = np.ascontiguousarray(raw[:, 12 * count :]).view("<f4")
    return values, u, noise


def checksums(
    seq: NDArray[np.int64], acquired: NDArray[np.float64], status: NDArray[np.int64], rows: Sequence[bytes]
) -> NDArray[np.int64]:
    """CRC-32 of each row's packed scalars, mixed with its number, time and status; shape (rows,).

    What the trend is made of is under it, so that a flipped bit does not pass for a drift.
    """
    plain = np.fromiter(map(zlib.crc32, rows), np.uint64, len(rows))
    words = (seq.astype(np.uint64), np.ascontiguousarray(acquired).view(np.uint64), status.astype(np.uint64))
    mixed = np.zeros(len(rows), np.uint64)
    for word, factor in zip(words, _ODD, strict=True):
        mixed = (mixed ^ word) * factor  # odd factors modulo 2^64: no bit of any word is lost
        mixed ^= mixed >> np.uint64(32)
    return ((mixed ^ plain) & np.uint64(0xFFFFFFFF)).astype(np.int64)


def plain_json(record: Mapping[str, Any]) -> str:
    """One line of JSON; what is not finite becomes null."""
    try:
        return json.dumps(record, allow_nan=False)
    except ValueError:
        return json.dumps(_finite(record), allow_nan=False)


def rounded(record: Mapping[str, Any], digits: int = 12) -> dict[str, Any]:
    """The record with its numbers to 12 significant digits: all that means anything, in less room."""

    def short(x: Any) -> Any:
        if isinstance(x, float):
            return float(f"{x:.{digits}g}") if math.isfinite(x) else None
        if isinstance(x, Mapping):
            return {k: short(v) for k, v in x.items()}
        return [short(v) for v in x] if isinstance(x, list | tuple) else x

    return {k: short(v) for k, v in record.items()}


def compress(body: str, dictionary: bytes | None) -> bytes:
    """The JSON of a record, deflated (RFC 1950) against the log's dictionary: an earlier record."""
    plain = body.encode()
    if dictionary is None:
        return zlib.compress(plain, 6)
    packer = zlib.compressobj(6, zdict=dictionary[:_WINDOW])
    return packer.compress(plain) + packer.flush()


def expand(packed: bytes, dictionary: bytes | None) -> str:
    """The JSON of a record. Raises zlib.error where it is damaged."""
    if dictionary is None:
        return zlib.decompress(packed).decode()
    reader = zlib.decompressobj(zdict=dictionary[:_WINDOW])
    return (reader.decompress(packed) + reader.flush()).decode()


def pack_capture(capture: Capture) -> bytes:
    """A raw capture: a line of JSON with its facts, then each channel's values, deflated.

    The bytes of the float64 values are transposed first (all first bytes, all second bytes, …): those of
    samples quantised by an instrument then compress to little more than the instrument's own codes.
    """
    head = {
        "path": capture.path,
        "interval": capture.interval,
        "start": capture.start,
        "warnings": [[r.code, r.says] for r in capture.warnings],
        "notes": dict(capture.notes),
        "channels": [
            {
                "name": c.name,
                "unit": c.unit,
                "resolution": c.resolution,
                "overloaded": c.overloaded is not None,
            }
            for c in capture.channels
        ],
        "samples": capture.samples,
    }
    out = io.BytesIO()
    out.write(json.dumps(head).encode() + b"\n")
    for channel in capture.channels:
        columns = np.ascontiguousarray(channel.values, "<f8").view(np.uint8).reshape(-1, 8)
        out.write(np.ascontiguousarray(columns.T).tobytes())
        if channel.overloaded is not None:
            out.write(np.packbits(channel.overloaded).tobytes())
    return zlib.compress(out.getvalue(), 6)


def unpack_capture(packed: bytes) -> Capture:
    """The capture as it was. Raises zlib.error where the bytes are damaged."""
    plain = zlib.decompress(packed)
    line, _, rest = plain.partition(b"\n")
    head = json.loads(line)
    samples, at, channels = head["samples"], 0, []
    for facts in head["channels"]:
        columns = np.frombuffer(rest, np.uint8, 8 * samples, at).reshape(8, samples)
        values = np.ascontiguousarray(columns.T).view("<f8").reshape(-1).astype(np.float64)
        at += 8 * samples
        overloaded = None
        if facts["overloaded"]:
            bits = np.frombuffer(rest, np.uint8, (samples + 7) // 8, at)
            overloaded = np.unpackbits(bits, count=samples).astype(np.bool_)
            at += (samples + 7) // 8
        channels.append(Channel(facts["name"], facts["unit"], values, facts["resolution"], overloaded))
    return Capture(
        head["path"], head["interval"], head["start"], tuple(channels),
        tuple(Remark(code, says) for code, says in head["warnings"]), head["notes"],
    )  # fmt: skip


def _number(x: Any) -> float:
    return float(x) if isinstance(x, int | float) else math.nan


def _finite(x: Any) -> Any:
    if isinstance(x, Mapping):
        return {str(k): _finite(v) for k, v in x.items()}
    if isinstance(x, list | tuple):
        return [_finite(v) for v in x]
    return None if isinstance(x, float) and not math.isfinite(x) else x
