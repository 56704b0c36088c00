"""A file as UTF-8 text within limits, whatever its encoding, line ends and compression."""

from __future__ import annotations

import codecs
import re
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import IO

from benchfit.capture.stream import Stream
from benchfit.errors import CaptureError

HEAD = 1 << 17
BLOCK = 1 << 20
# Longest line that can still be a row of a table.
LONGEST_LINE = 1 << 20

_BINARIES = (
    (b"\x89PNG", "a PNG picture"), (b"\xff\xd8\xff", "a JPEG picture"), (b"GIF8", "a GIF picture"),
    (b"%PDF", "a PDF document"), (b"PK\x03\x04", "a zip archive or a spreadsheet workbook"),
    (b"PK\x05\x06", "an empty zip archive"), (b"\xd0\xcf\x11\xe0", "an old spreadsheet workbook"),
    (b"\x89HDF", "an HDF5 file"), (b"SQLite format 3", "an SQLite database"), (b"RIFF", "a RIFF recording"),
    (b"MATLAB 5.0", "a MAT-file"), (b"\x7fELF", "a program"), (b"II*\x00", "a TIFF picture"),
    (b"MM\x00*", "a TIFF picture"), (b"7z\xbc\xaf", "a 7z archive"), (b"Rar!", "a RAR archive"),
    (b"PAR1", "a Parquet file"),
)  # fmt: skip
# The four-byte marks first: that of UTF-16 begins that of UTF-32.
_BOMS = (
    (codecs.BOM_UTF32_LE, "utf-32-le"), (codecs.BOM_UTF32_BE, "utf-32-be"), (codecs.BOM_UTF8, "utf-8"),
    (codecs.BOM_UTF16_LE, "utf-16-le"), (codecs.BOM_UTF16_BE, "utf-16-be"),
)  # fmt: skip
_LINE_END = re.compile(rb"\r\n|\n|\r")
_TUPLE_END = re.compile(rb"(?<=[\d.])[)\]],[ \t]*[(\[](?=[\d.+-])")
_ALLOWED_CONTROLS = b"\t\n\r\f\x1a"
_CONTROLS = bytes(code for code in range(32) if code not in _ALLOWED_CONTROLS)


@dataclass(frozen=True)
class Head:
    """The first whole lines of a file, decoded and without their ends.

    ``offsets`` (one more than lines) say at which byte of the UTF-8 text each line begins; ``whole`` is
    true where nothing follows, ``ended`` where the file's last line had an end.
    """

    lines: tuple[str, ...]
    offsets: tuple[int, ...]
    whole: bool


class Source:
    """A file opened for reading: facts about its bytes, its head, and its text in blocks of whole lines.

    Attributes: ``path``, ``size`` (bytes, None where not known), ``compression``, ``encoding``,
    ``has_bom``, ``line_end`` ("LF", "CRLF", "CR" or "none"), ``head``.

    Raises CaptureError where there is nothing to read, where the bytes are no text, and at the limits.
    """

    def __init__(self, path: str | Path, limit: int | None = None, stdin: IO[bytes] | None = None) -> None:
        self.path = str(path)
        self._file, self.size = self._open(stdin)
        try:
            self._stream = Stream(self._file, self.size, limit, self.refusal)
            first = self._stream.read(HEAD)
            self._check_text(first)
            self.encoding, mark = _encoding(first)
            self.has_bom = mark > 0
            wide = self.encoding.startswith(("utf-16", "utf-32"))
            self._decoder = codecs.getincrementaldecoder(self.encoding)("replace") if wide else None
            text = self._as_utf8(first[mark:])
            self._check_control(text)
            self.line_end = _line_end(text)
            # A script that prints a list of tuples ends no line until the list ends.
            self._is_list = len(_TUPLE_END.findall(text[:4096])) > 3 * text[:4096].count(b"\n")
            self._start = self._up_to_a_line(self._with_lf(text))
            self.head = self._make_head()
        except BaseException:
            self.close()
            raise

    def __enter__(self) -> Source:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the file, unless it is standard input."""
        if self.path != "-":
            self._file.close()

    @property
    def compression(self) -> str:
        """Name of the compression, "" for none."""
        return self._stream.compression

    @property
    def fault(self) -> str:
        """Why the end came early, once the end was reached; "" where it did not."""
        return self._stream.fault

    @property
    def is_plain(self) -> bool:
        """Whether the bytes on disk are the text itself, so that another reader can be given the path."""
        plain = (
            not self.compression
            and not self._is_list
            and self.encoding in ("utf-8", "ascii")
            and self.line_end != "CR"
        )
        return self.path != "-" and self.size is not None and plain

    def refusal(self, says: str, **facts: object) -> CaptureError:
        """An error about this file."""
        name = "standard input" if self.path == "-" else self.path
        return CaptureError(f"{name}: {says}.", path=self.path, **facts)

    def blocks(self, offset: int) -> Iterator[bytes]:
        """Text from byte ``offset`` on, in blocks of whole lines ended by LF (the last one perhaps not)."""
        pending = self._start[offset:]
        while piece := self._next():
            cut = piece.rfind(b"\n") + 1
            if cut:
                yield pending + piece[:cut]
                pending = piece[cut:]
            else:
                pending += piece
                self._check_line(len(pending) - pending.rfind(b"\n"))
        if pending:
            yield pending

    def check_values(self, count: int) -> None:
        """Raise CaptureError where ``count`` values would take more memory than the limit."""
        self._stream.check_values(count)

    def check_lines(self) -> None:
        """Raise CaptureError where a plain file passes the limit or, in samples of it, has a line without end."""
        assert self.size is not None
        self._stream.check_size(self.size)
        with open(self.path, "rb") as file:
            for place in range(0, self.size, 16 * LONGEST_LINE):
                file.seek(place)
                if b"\n" not in file.read(1 << 12) and b"\n" not in (piece := file.read(LONGEST_LINE)):
                    self._check_line(len(piece) + 1)

    # ------------------------------------------------------------------------------------------------------

    def _open(self, stdin: IO[bytes] | None) -> tuple[IO[bytes], int | None]:
        if self.path == "-":
            return (stdin if stdin is not None else sys.stdin.buffer), None
        try:
            place = Path(self.path)
            if place.is_dir():
                raise self.refusal("is a folder, not a capture; name the files in it")
            if not place.exists():
                raise self.refusal("there is no such file")
            return place.open("rb"), place.stat().st_size if place.is_file() else None
        except OSError as fault:
            raise self.refusal(f"cannot be opened ({fault.strerror or fault})") from None
        except ValueError:
            raise self.refusal("is no file name") from None

    def _make_head(self) -> Head:
        more = self._next()
        text, self._start = self._start, self._start + more
        ends = [found.end() for found in _LINE_END.finditer(text)]
        if not more and (not ends or ends[-1] < len(text)):
            ends.append(len(text))
        offsets = (0, *ends)
        codec = "latin-1" if self.encoding == "latin-1" else "utf-8"
        lines = tuple(
            text[a:b].rstrip(b"\r\n").decode(codec, "replace") for a, b in zip(offsets, ends, strict=False)
        )
        return Head(lines, offsets, whole=not more)

    def _up_to_a_line(self, text: bytes) -> bytes:
        while not _LINE_END.search(text) and (piece := self._next()):
            text += piece
            self._check_line(len(text))
        return text

    def _next(self) -> bytes:
        while raw := self._stream.read(BLOCK):
            if text := self._as_utf8(raw):
                return self._with_lf(text)
        return b""

    def _with_lf(self, text: bytes) -> bytes:
        text = text.replace(b"\r", b"\n") if self.line_end == "CR" else text
        return _TUPLE_END.sub(b"\n", text).translate(None, b"[]()") if self._is_list else text

    def _as_utf8(self, raw: bytes) -> bytes:
        return raw if self._decoder is None else self._decoder.decode(raw).encode("utf-8", "replace")

    def _check_line(self, length: int) -> None:
        if length > LONGEST_LINE:
            raise self.refusal(
                f"has a line of more than {LONGEST_LINE >> 20} MiB without an end, so it is no table"
            )

    def _check_text(self, first: bytes) -> None:
        if not first and self.fault:
            raise self.refusal(f"nothing could be unpacked from it ({self.fault})")
        if not first:
            raise self.refusal(
                "the file is empty: it was made, but nothing was written to it; save the capture again"
            )
        for magic, what in _BINARIES:
            if first.startswith(magic):
                raise self.refusal(f"is {what}, not text; export the capture as CSV")

    def _check_control(self, text: bytes) -> None:
        if not text.strip(b"\0"):
            raise self.refusal(
                "holds zero bytes only: the space was reserved but never written; save the capture again"
            )
        begin = text[: len(text) // 8]
        # Garbage further down, or a tail of zero bytes, leaves a begin that can be read.
        is_odd = len(text) - len(text.translate(None, _CONTROLS)) > max(8, 0.02 * len(text))
        if is_odd and len(begin.translate(None, _CONTROLS)) < len(begin):
            raise self.refusal("is a binary file, not text; export the capture as CSV")


def _encoding(first: bytes) -> tuple[str, int]:
    """Encoding of a text and the length of its byte order mark; what is no UTF-8 is taken for Latin-1."""
    for mark, name in _BOMS:
        if first.startswith(mark):
            return name, len(mark)
    sample = first[: min(len(first), 4096) // 2 * 2]
    even, odd = sample[::2], sample[1::2]
    if len(sample) >= 8 and odd.count(0) > 0.9 * len(odd) and even.count(0) < 0.1 * len(even):
        return "utf-16-le", 0
    if len(sample) >= 8 and even.count(0) > 0.9 * len(even) and odd.count(0) < 0.1 * len(odd):
        return "utf-16-be", 0
    for name in ("ascii", "utf-8"):
        try:
            codecs.getincrementaldecoder(name)("strict").decode(first)
        except UnicodeDecodeError:
            continue
        return name, 0
    return "latin-1", 0


def _line_end(text: bytes) -> str:
    crlf = text.count(b"\r\n")
    counts = {"CRLF": crlf, "LF": text.count(b"\n") - crlf, "CR": text.count(b"\r") - crlf}
    best = max(counts, key=lambda name: counts[name])
    return best if counts[best] else "none"
