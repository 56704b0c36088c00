"""One acquisition's channels, as a dialect asks for them, made into a Capture."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from benchfit.capture.model import Capture, Channel
from benchfit.errors import InstrumentError, Remark
from benchfit.instrument import faults
from benchfit.instrument.block import (
    BlockError,
    decode_ascii,
    decode_binary,
    dtype_of,
    excerpt,
    mark_overloads,
)
from benchfit.instrument.dialect import Dialect


class Questions(Protocol):
    """What reading needs of a link."""

    resource: str

    def write(self, command: str) -> None: ...

    def query(self, command: str) -> str: ...

    def query_data(self, command: str, *, expected_bytes: int | None = None, text: bool = False) -> bytes: ...


@dataclass(frozen=True, eq=False)
class Trace:
    """One channel as it came: volts, shape (n,), on the axis start + i·interval (s)."""

    channel: Channel
    interval: float
    start: float


def read_channel(wire: Questions, dialect: Dialect, channel: str) -> Trace:
    """Ask for one channel and convert it to volts. Raises InstrumentError."""
    for command in dialect.before:
        wire.write(_named(command, channel))
    fields = read_fields(wire, dialect, channel)
    points = fields.get("points")
    expected = _expected_bytes(wire, dialect, channel, points)
    command = _named(dialect.data, channel)
    raw = wire.query_data(command, expected_bytes=expected, text=dialect.encoding == "ascii")
    try:
        if dialect.encoding == "ascii":
            numbers: NDArray[np.generic] = decode_ascii(raw)
        else:
            numbers = decode_binary(raw, dialect.encoding, dialect.byte_order)
    except BlockError as error:
        raise faults.fault(error.kind, wire.resource, command, error.says) from None
    if points is not None and numbers.size != int(points):
        says = f"sent {numbers.size:,} samples where the preamble announced {int(points):,}"
        raise faults.fault("wrong-length", wire.resource, command, says)
    if not numbers.size:
        raise faults.fault("wrong-length", wire.resource, command, "sent a block without samples")
    interval = fields.get("x_increment", 1.0)
    if not interval > 0:
        says = f"gave a sample interval of {interval:g} s where a time above 0 was expected"
        raise faults.fault("unreadable", wire.resource, command, says)
    start = fields.get("x_origin", 0.0) - fields.get("x_reference", 0.0) * interval
    return Trace(_channel(numbers, dialect, fields, channel), interval, start)


def read_fields(wire: Questions, dialect: Dialect, channel: str) -> dict[str, float]:
    """What places the samples in time and volts, by field. Raises InstrumentError: an answer is no number."""
    values: dict[str, float] = {}
    if dialect.preamble:
        command = _named(dialect.preamble, channel)
        cells = wire.query(command).split(",")
        if len(cells) < len(dialect.fields):
            says = f"answered {len(cells)} fields where the dialect names {len(dialect.fields)}"
            raise faults.fault("unreadable", wire.resource, command, says)
        for name, cell in zip(dialect.fields, cells, strict=False):
            if name:
                values[name] = _number(wire, command, name, cell)
    for name, query in dialect.queries.items():
        command = _named(query, channel)
        values[name] = _number(wire, command, name, wire.query(command))
    return values


def to_capture(
    resource: str, traces: Sequence[Trace], dialect: Dialect, notes: Mapping[str, str] | None = None
) -> Capture:
    """The channels as one Capture. Raises InstrumentError (kind "axes"): they do not share one time axis."""
    first = traces[0]
    for other in traces[1:]:
        difference = _axis_difference(first, other)
        if difference:
            says = f"{first.channel.name} and {other.channel.name} have different time axes ({difference})"
            raise faults.fault("axes", resource, "", says)
    warnings: list[Remark] = []
    if "x_increment" not in dialect.fields and "x_increment" not in dialect.queries:
        says = f"{dialect.name} does not say how far apart the samples are: 1 s is assumed"
        warnings.append(Remark("layout-guessed", says))
    return Capture(
        path=resource,
        interval=first.interval,
        start=first.start,
        channels=tuple(trace.channel for trace in traces),
        warnings=tuple(warnings),
        notes={"dialect": dialect.name, **(notes or {})},
    )


def _channel(numbers: NDArray[np.generic], dialect: Dialect, fields: Mapping[str, float], name: str) -> Channel:
    overloaded = None
    if numbers.dtype.kind in "iu":
        volts, step = _volts(numbers, dialect, fields), _smallest_code_step(numbers)
    else:
        raw, overloaded = mark_overloads(numbers.astype(np.float64))
        volts = _volts(raw, dialect, fields)
        finite = raw[np.isfinite(raw)]
        # Two floats that stand for one converter level differ by their own rounding alone.
        eps = np.finfo(np.float32 if numbers.dtype.itemsize == 4 else np.float64).eps
        rounding = 4.0 * float(eps) * float(np.max(np.abs(finite), initial=0.0))
        step = _smallest_level_step(np.unique(finite), rounding)
    return Channel(name, "V", volts, step * abs(fields.get("y_increment", 1.0)), overloaded)


def _volts(raw: NDArray[np.generic], dialect: Dialect, fields: Mapping[str, float]) -> NDArray[np.float64]:
    origin, reference = fields.get("y_origin", 0.0), fields.get("y_reference", 0.0)
    if dialect.y_origin_unit == "step":
        reference, origin = reference + origin, 0.0
    # Each pass over a long record counts: those that would change nothing are left out.
    shifted = np.subtract(raw, reference, dtype=np.float64) if reference else raw
    volts: NDArray[np.float64] = np.multiply(shifted, fields.get("y_increment", 1.0), dtype=np.float64)
    if origin:
        volts += origin
    return volts


def _smallest_code_step(codes: NDArray[np.generic]) -> float:
    """The smallest step between different integers; 0 where there is only one.

    Of a long record every so many samples are looked at, 8,192 at least: they hold every level that counts.
    """
    codes = codes[:: max(1, codes.size // 8192)]
    if codes.dtype.itemsize > 1:
        levels = np.unique(codes).astype(np.int64)
    else:
        from_zero = codes if codes.dtype.kind == "u" else codes.view(np.uint8) ^ np.uint8(128)
        levels = np.bincount(from_zero).nonzero()[0]
    return float((levels[1:] - levels[:-1]).min()) if levels.size > 1 else 0.0


def _smallest_level_step(levels: NDArray[np.float64], least: float) -> float:
    """The smallest step above ``least`` between sorted levels; those the same but for rounding averaged."""
    steps = np.diff(levels)
    steps = steps[steps > least]
    return float(np.median(steps[steps <= 1.001 * steps.min()])) if steps.size else 0.0


def _axis_difference(a: Trace, b: Trace) -> str:
    if a.channel.values.size != b.channel.values.size:
        return f"{a.channel.values.size:,} and {b.channel.values.size:,} samples"
    if not math.isclose(a.interval, b.interval, rel_tol=1e-6):
        return f"{a.interval:.9g} s and {b.interval:.9g} s between samples"
    if abs(a.start - b.start) > 1e-3 * a.interval:
        return f"first samples at {a.start:.9g} s and {b.start:.9g} s"
    return ""


def _expected_bytes(wire: Questions, dialect: Dialect, channel: str, points: float | None) -> int | None:
    if points is None:
        return None
    if points < 1 or points != int(points):
        command = _named(dialect.preamble or dialect.queries.get("points", ""), channel)
        raise faults.fault("unreadable", wire.resource, command, f"announced {points:g} samples")
    if dialect.encoding == "ascii":
        return None
    return int(points) * dtype_of(dialect.encoding, dialect.byte_order).itemsize


def _number(wire: Questions, command: str, name: str, cell: str) -> float:
    try:
        value = float(cell)
    except ValueError:
        value = math.nan
    # Not-a-number compares false, and SCPI's stand-ins for the infinities lie beyond.
    if not -9e37 < value < 9e37:
        raise _unreadable(wire, command, name, cell)
    return value


def _unreadable(wire: Questions, command: str, name: str, cell: str) -> InstrumentError:
    says = f"answered {excerpt(cell.encode('ascii', 'replace'))} where a number for {name} was expected"
    return faults.fault("unreadable", wire.resource, command, says)


def _named(command: str, channel: str) -> str:
    return command.replace("{channel}", channel)
