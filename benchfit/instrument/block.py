"""IEEE 488.2 arbitrary blocks and ASCII number lists: from the bytes of an answer to numbers.

```
#  6  240000  <240000 bytes>  LF      definite: digit count, byte count, data
#  0          <bytes ...>     LF      indefinite: ends with the message
#  (  1200000000  )  <bytes>  LF      some instruments, above 999,999,999 bytes
```

Source: IEEE Std 488.2-1992, 8.7.9 and 8.7.10; SCPI-1999 volume 1, 7.2.1.4 and 7.2.1.5 for infinity and
not-a-number.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

ENCODINGS: Final = ("ascii", "int8", "uint8", "int16", "uint16", "float32", "float64")

SCPI_INFINITY: Final = 9.9e37
SCPI_NOT_A_NUMBER: Final = 9.91e37


class BlockError(ValueError):
    """The bytes are not a block, or not the numbers that were announced; ``kind`` as in InstrumentError."""

    def __init__(self, kind: str, says: str) -> None:
        super().__init__(says)
        self.kind = kind
        self.says = says


@dataclass(frozen=True)
class Header:
    """A block's header: ``count`` bytes follow (None: until the message ends); ``size``: its own bytes."""

    count: int | None
    size: int


def missing_header_bytes(start: bytes) -> int:
    """How many more bytes the header needs at least before it can be parsed; 0 when it is whole.

    Raises BlockError where ``start`` cannot be the beginning of a block.
    """
    if not start:
        return 2
    if start[:1] != b"#":
        raise _not_a_block(start)
    if len(start) == 1:
        return 1
    second = start[1:2]
    if second == b"(":
        if b")" in start:
            return 0
        if len(start) > 24 or not (start[2:].isdigit() or len(start) == 2):
            raise _not_a_block(start)
        return 1
    if not second.isdigit():
        raise _not_a_block(start)
    return max(0, 2 + int(second) - len(start))


def parse_header(start: bytes) -> Header:
    """The header at the beginning of ``start``, which must hold all of it.

    Raises BlockError: it is not a block's header.
    """
    if missing_header_bytes(start):
        raise BlockError("short-block", f"a block's header broke off after {start[:16]!r}")
    if start[1:2] == b"(":
        end = start.index(b")")
        digits, size = start[2:end], end + 1
    else:
        width = int(start[1:2])
        if width == 0:
            return Header(None, 2)
        digits, size = start[2 : 2 + width], 2 + width
    if not digits.isdigit():
        raise _not_a_block(start)
    return Header(int(digits), size)


def _not_a_block(start: bytes) -> BlockError:
    return BlockError("unreadable", f"found {excerpt(start)} where a block (#…) was expected")


def excerpt(raw: bytes | bytearray, limit: int = 24) -> str:
    """The first bytes of an answer, printable, for an error's sentence."""
    shown = raw[:limit]
    text = "".join(chr(b) if 32 <= b < 127 else f"\\x{b:02x}" for b in shown)
    return f"'{text}'" + (" …" if len(raw) > limit else "")


@cache
def dtype_of(encoding: str, byte_order: str) -> np.dtype[np.generic]:
    """The numpy type of one sample in one of ENCODINGS but "ascii"; ``byte_order`` is little or big."""
    return np.dtype(encoding).newbyteorder("<" if byte_order == "little" else ">")


def decode_binary(raw: bytes | bytearray, encoding: str, byte_order: str) -> NDArray[np.generic]:
    """The samples in a block's bytes, shape (n,), in their own type and the machine's byte order.

    Raises BlockError where the length is not a whole number of samples.
    """
    dtype = dtype_of(encoding, byte_order)
    if len(raw) % dtype.itemsize:
        raise BlockError(
            "wrong-length",
            f"a block of {len(raw):,} bytes is no whole number of {dtype.itemsize}-byte samples ({encoding})",
        )
    numbers = np.frombuffer(raw, dtype)
    return numbers if dtype.isnative else numbers.astype(dtype.newbyteorder("="))


def decode_ascii(raw: bytes | bytearray) -> NDArray[np.float64]:
    """The samples in a comma-separated list of numbers, shape (n,).

    Raises BlockError where one of the cells is not a number.
    """
    try:
        text = bytes(raw).decode("ascii").strip().rstrip(",")
    except UnicodeDecodeError:
        raise BlockError("unreadable", f"found {excerpt(raw)} where numbers were expected") from None
    cells = text.replace(";", ",").split(",") if text else []
    try:
        return np.array(cells, dtype=np.float64)
    except ValueError:
        for position, cell in enumerate(cells, 1):
            try:
                float(cell)
            except ValueError:
                says = f"sample {position:,} reads {excerpt(cell.encode())} where a number was expected"
                raise BlockError("unreadable", says) from None
        raise


def mark_overloads(values: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.bool_] | None]:
    """Replace SCPI's stand-ins for ±infinity and not-a-number by NaN; the mask is True at the infinities."""
    if not np.any(np.abs(values) >= 9e37):
        return values, None
    overloaded = np.isclose(np.abs(values), SCPI_INFINITY, rtol=1e-4, atol=0.0) | np.isinf(values)
    unusable = overloaded | np.isclose(np.abs(values), SCPI_NOT_A_NUMBER, rtol=1e-4, atol=0.0)
    return np.where(unusable, np.nan, values), overloaded if bool(overloaded.any()) else None
