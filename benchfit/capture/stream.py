"""Bytes of a file, decompressed and counted against a limit."""

from __future__ import annotations

import bz2
import gzip
import io
import lzma
import zlib
from collections.abc import Callable
from typing import IO, Protocol

from benchfit.errors import CaptureError

# Text after decompression; 10 million rows of three columns take 0.4 to 0.8 GB.
DEFAULT_LIMIT = 1 << 31
# A capture that compresses better than this is not one: rows with a time in them differ from each other.
_BOMB_RATIO = 100
_BOMB_SIZE = 1 << 26

_RAISE = "read a shorter record or raise the limit with --limit-bytes"
_COMPRESSIONS = (
    (b"\x1f\x8b", "gzip"),
    (b"BZh", "bzip2"),
    (b"\xfd7zXZ\x00", "xz"),
    (b"\x28\xb5\x2f\xfd", "zstd"),
)

Refusal = Callable[[str], CaptureError]


class _Readable(Protocol):
    def read(self, size: int, /) -> bytes: ...


class Stream:
    """What a file holds after decompression, at most ``limit`` bytes of it.

    ``compression`` is "" for a plain file; ``fault`` says, once the end was reached, why it came early
    ("" where it did not). Raises CaptureError, made by ``refusal``, at the limit.
    """

    def __init__(self, file: IO[bytes], size: int | None, limit: int | None, refusal: Refusal) -> None:
        self.fault = ""
        self._refusal = refusal
        self._limit = DEFAULT_LIMIT if limit is None else limit
        # Whoever sets a limit has decided how much is too much.
        self._bomb = max(_BOMB_SIZE, _BOMB_RATIO * size) if size and limit is None else None
        self._taken = 0
        start = self._piece(file, 16)
        self.compression = next((name for magic, name in _COMPRESSIONS if start.startswith(magic)), "")
        self._stream = _decompressed(_Rejoined(start, file), self.compression, refusal)

    def read(self, size: int) -> bytes:
        """The next ``size`` bytes; fewer only at the end."""
        parts: list[bytes] = []
        wanted = size
        while wanted > 0 and (part := self._piece(self._stream, wanted)):
            parts.append(part)
            wanted -= len(part)
            self._taken += len(part)
        self._check()
        return b"".join(parts)

    def check_values(self, count: int) -> None:
        """Raise CaptureError where ``count`` values of eight bytes would take more memory than the limit."""
        if 8 * count > self._limit:
            limit = f"the limit of {self._limit / 2**20:.0f} MiB"
            raise self._refusal(f"holds {count} values or more, whose memory passes {limit}; {_RAISE}")

    def check_size(self, size: int) -> None:
        """Raise CaptureError where ``size`` bytes of text pass the limit."""
        if size > self._limit:
            raise self._refusal(
                f"holds more than {self._limit / 2**20:.0f} MiB of text, which is the limit; {_RAISE}"
            )

    def _piece(self, stream: _Readable, size: int) -> bytes:
        try:
            return stream.read(size) or b""
        except (EOFError, OSError, zlib.error, lzma.LZMAError, ValueError, RuntimeError) as fault:
            self.fault = str(fault).rstrip(".") or type(fault).__name__
        except Exception as fault:
            # The zstandard package has an error class of its own; it is not imported for that alone.
            if type(fault).__module__.partition(".")[0] not in ("zstd", "zstandard", "compression"):
                raise
            self.fault = str(fault)
        return b""

    def _check(self) -> None:
        self.check_size(self._taken)
        if self.compression and self._bomb is not None and self._taken > self._bomb:
            so_far = f"{_BOMB_RATIO} times its size ({self._taken / 2**20:.0f} MiB so far)"
            says = f"unpacks to more than {so_far}, which no capture does"
            raise self._refusal(f"{says}; raise the limit with --limit-bytes if it is one all the same")


class _Rejoined(io.RawIOBase):
    """What was read for a look at the first bytes, put back in front of the rest."""

    def __init__(self, start: bytes, rest: IO[bytes]) -> None:
        self._start, self._rest = start, rest

    def readable(self) -> bool:
        return True

    def read(self, size: int = -1, /) -> bytes:
        if self._start:
            piece, self._start = (self._start, b"") if size < 0 else (self._start[:size], self._start[size:])
            return piece
        return self._rest.read(size)

    def readinto(self, buffer: bytearray | memoryview, /) -> int:  # type: ignore[override]
        piece = self.read(len(buffer))
        buffer[: len(piece)] = piece
        return len(piece)


def _decompressed(raw: _Rejoined, compression: str, refusal: Refusal) -> _Readable:
    if compression == "gzip":
        return gzip.GzipFile(fileobj=raw, mode="rb")
    if compression == "bzip2":
        return bz2.BZ2File(raw, "rb")
    if compression == "xz":
        return lzma.LZMAFile(raw, "rb")  # type: ignore[arg-type]
    if compression == "zstd":
        return _zstd(raw, refusal)
    return raw


def _zstd(raw: _Rejoined, refusal: Refusal) -> _Readable:
    import importlib

    for name, opener in (
        ("compression.zstd", "ZstdFile"),
        ("zstandard", "open"),
    ):  # the first is Python 3.14's own
        try:
            module = importlib.import_module(name)
        except ImportError:
            continue
        opened: _Readable = getattr(module, opener)(raw, "rb")
        return opened
    raise refusal("is compressed with zstd, for which the package zstandard is missing here; unpack it first")
