"""Where output goes: the standard streams as a terminal or a pipe wants them; files replaced in one step."""

from __future__ import annotations

import os
import shutil
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TextIO

from benchfit.errors import UsageError

UNWRAPPED = 10_000


def prepare() -> None:
    """Make the standard streams take any text: UTF-8 where that can be had, undecodable bytes written out."""
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is None:
            continue
        encoding = "utf-8" if os.name == "nt" or not stream.isatty() else stream.encoding
        reconfigure(encoding=encoding, errors="backslashreplace")
    if os.name == "nt" and sys.stdout.isatty():
        os.system("")  # wakes the console's understanding of SGR sequences


def width() -> int:
    """Columns of the terminal that standard output is; in a pipe nothing is wrapped."""
    return shutil.get_terminal_size().columns if sys.stdout.isatty() else UNWRAPPED


def colour(stream: TextIO | None = None) -> bool:
    """Only on a terminal that can, and never with NO_COLOR (no-color.org: present and not empty)."""
    stream = sys.stdout if stream is None else stream
    return stream.isatty() and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb"


def emit(text: str) -> bool:
    """Results on standard output, at once; False where nobody reads there any more."""
    try:
        print(text, flush=True)
    except BrokenPipeError:
        # What is still buffered must not raise again, now or at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return False
    return True


def say(text: str) -> None:
    """One line of talk, on standard error."""
    print(f"benchfit: {text}", file=sys.stderr, flush=True)


def check_writable(path: str) -> None:
    """Refuse, before any work is done, a file that could not be written after it.

    Raises
    ------
    UsageError
        Where the path is a folder, or lies in none.
    """
    target = Path(path)
    if target.is_dir():
        raise UsageError(f"{path}: this is a folder; give the name of a file to write")
    if not target.absolute().parent.is_dir():
        raise UsageError(f"{path}: there is no folder {target.parent} to write into; make it first")


@contextmanager
def replacing(path: str) -> Iterator[Path]:
    """A file beside ``path`` to write into; it takes the place of ``path`` at the end, or leaves no trace.

    Raises
    ------
    UsageError
        Where it cannot be written.
    """
    target = Path(os.path.realpath(path))
    if target.exists() and not target.is_file():
        yield target  # a device or a pipe is written to, it must not be replaced
        return
    scratch = target.with_name(f".{target.stem}.{os.getpid()}{target.suffix}")
    try:
        yield scratch
        os.replace(scratch, target)
    except OSError as error:
        if error.filename is not None and Path(os.fsdecode(error.filename)) not in (scratch, target):
            raise
        raise UsageError(f"{path}: cannot be written: {error.strerror or error}") from None
    finally:
        scratch.unlink(missing_ok=True)


def writing(path: Path) -> TextIO:
    """A file opened for text: UTF-8 with plain line ends, whatever the text."""
    return path.open("w", encoding="utf-8", newline="\n", errors="backslashreplace")


def write(path: str, text: str) -> None:
    """Write a text file in one step."""
    with replacing(path) as scratch, writing(scratch) as file:
        file.write(text)
