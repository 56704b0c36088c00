"""What the log file looks like inside, its version, and how a file that is no such log is told.

SQLite, write-ahead log, full synchronous. The scalars that ``trend`` works on lie packed in ``record`` (see
``packing``); the whole result record lies compressed in ``body``, apart, so that reading a million records'
scalars does not drag the bodies from the disk. Frequency and duty also stand as plain columns, for any
SQLite tool.
"""

from __future__ import annotations

import os
import sqlite3
import struct
import time
from pathlib import Path

from benchfit.errors import LogError

APPLICATION = 0x62667269
"""SQLite's application_id of a burn-in log ("bfri" in ASCII)."""

MIGRATIONS: tuple[str, ...] = (
    """
    CREATE TABLE migration (version INTEGER PRIMARY KEY, applied REAL NOT NULL, program TEXT NOT NULL);
    CREATE TABLE run (
        id INTEGER PRIMARY KEY CHECK (id = 1), title TEXT NOT NULL, circuit TEXT, sheet TEXT NOT NULL,
        sheet_hash TEXT NOT NULL, created REAL NOT NULL, program TEXT NOT NULL);
    CREATE TABLE session (
        id INTEGER PRIMARY KEY, started REAL NOT NULL, steady REAL NOT NULL, holder TEXT NOT NULL,
        program TEXT NOT NULL, every REAL, wanted_count INTEGER, wanted_time REAL, done_count INTEGER NOT
        NULL, done_time REAL NOT NULL, first_seq INTEGER NOT NULL, ended REAL, how TEXT);
    CREATE TABLE unit (id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE, source TEXT NOT NULL);
    CREATE TABLE quantity (id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE, unit TEXT NOT NULL, kind TEXT
    NOT NULL); CREATE TABLE dictionary (id INTEGER PRIMARY KEY, data BLOB NOT NULL);
    CREATE TABLE record (
        seq INTEGER PRIMARY KEY, unit INTEGER NOT NULL REFERENCES unit, session INTEGER NOT NULL REFERENCES
        session, acquired REAL NOT NULL, steady REAL, status INTEGER NOT NULL, frequency REAL, duty REAL,
        scalars BLOB NOT NULL, crc INTEGER NOT NULL);
    CREATE TABLE body (seq INTEGER PRIMARY KEY, dictionary INTEGER, json BLOB NOT NULL);
    CREATE TABLE raw (seq INTEGER PRIMARY KEY, capture BLOB NOT NULL);
    CREATE TABLE taken (
        unit INTEGER NOT NULL, name TEXT NOT NULL, size INTEGER NOT NULL, changed INTEGER NOT NULL,
        PRIMARY KEY (unit, name)) WITHOUT ROWID;
    CREATE TABLE gap (
        id INTEGER PRIMARY KEY, unit INTEGER, after_seq INTEGER NOT NULL, began REAL NOT NULL, ended REAL NOT
        NULL, why TEXT NOT NULL);
    CREATE TABLE alarm (
        id INTEGER PRIMARY KEY, seq INTEGER NOT NULL, unit INTEGER NOT NULL, quantity TEXT NOT NULL,
        value REAL NOT NULL, low REAL, high REAL, text TEXT NOT NULL, cleared_seq INTEGER);
    CREATE TABLE bound (session INTEGER NOT NULL, quantity TEXT NOT NULL, text TEXT NOT NULL);
    CREATE TABLE note (id INTEGER PRIMARY KEY, at REAL NOT NULL, text TEXT NOT NULL);
    CREATE TABLE event (id INTEGER PRIMARY KEY, at REAL NOT NULL, after_seq INTEGER NOT NULL, code TEXT NOT
    NULL,
        size REAL, says TEXT NOT NULL);
    """,
)
"""Script n (from 0) takes a log from version n to n + 1. A released script is never changed again."""

_HEADER = b"SQLite format 3\x00"


def version() -> int:
    """The version of the logs that this program writes and reads."""
    return len(MIGRATIONS)


def migrate(db: sqlite3.Connection, program: str) -> None:
    """Take an open log (or an empty database) to the present version, in one transaction."""
    db.execute("BEGIN IMMEDIATE")
    for number in range(db.execute("PRAGMA user_version").fetchone()[0] + 1, version() + 1):
        for statement in MIGRATIONS[number - 1].split(";"):
            if statement.strip():
                db.execute(statement)
        db.execute("INSERT INTO migration VALUES (?, ?, ?)", (number, time.time(), program))
        db.execute(f"PRAGMA user_version = {number}")
    db.execute(f"PRAGMA application_id = {APPLICATION}")
    db.execute("COMMIT")


def inspect(path: Path) -> None:
    """Refuse what is no log of this version, from its first bytes alone: SQLite is not asked to open it.

    Raises
    ------
    LogError
        Where the file cannot be read, is not such a log, is cut short, or of another version.
    """
    where = str(path)
    try:
        with path.open("rb") as file:
            head = file.read(100)
            size = os.fstat(file.fileno()).st_size
    except FileNotFoundError:
        raise LogError(f"{where}: there is no such log.", path=where) from None
    except IsADirectoryError:
        raise LogError(f"{where}: this is a folder, not a burn-in log.", path=where) from None
    except OSError as fault:
        raise LogError(f"{where}: the log cannot be read ({fault.strerror}).", path=where) from None
    if len(head) < 100 or not head.startswith(_HEADER):
        raise LogError(f"{where}: this is not a burn-in log; it is left as it is.", path=where)
    page, pages = struct.unpack(">H", head[16:18])[0], struct.unpack(">I", head[28:32])[0]
    found, application = struct.unpack(">I", head[60:64])[0], struct.unpack(">I", head[68:72])[0]
    if application != APPLICATION:
        raise LogError(
            f"{where}: this SQLite file was not made by a burn-in; it is left as it is. Choose another file.",
            path=where,
        )
    if found != version():
        cure = "benchfit trend --upgrade NEWFILE copies it" if found < version() else "use the program that wrote it"
        raise LogError(
            f"{where}: the log has version {found} and this program works on version {version()}; it is left "
            f"as it is ({cure}).",
            path=where,
        )
    waiting = path.with_name(path.name + "-wal")
    if not (waiting.exists() and waiting.stat().st_size) and pages * (65536 if page == 1 else page) > size:
        raise damaged(path, f"it should hold {pages * page} bytes and holds {size}")


def damaged(path: Path, how: object) -> LogError:
    """The error for a log whose inside is broken."""
    return LogError(
        f"{path}: the log is damaged ({how}); it is left as it is. Take a backup copy of it, or start a new log.",
        path=str(path),
    )


def create(path: Path, program: str) -> None:
    """An empty log under that name, whole from its first moment: made beside it and renamed into place.

    Raises
    ------
    LogError
        Where it cannot be written.
    """
    fresh = path.with_name(f"{path.name}.new-{os.getpid()}")
    try:
        fresh.unlink(missing_ok=True)
        db = sqlite3.connect(fresh, isolation_level=None)
        try:
            db.execute("PRAGMA synchronous = FULL")
            # A body is some 1.4 kB: pages of 4 KiB would hold two and leave a third of the room empty.
            db.execute("PRAGMA page_size = 16384")
            migrate(db, program)
            db.execute("PRAGMA journal_mode = WAL").fetchone()
        finally:
            db.close()
        os.replace(fresh, path)
        sync_folder(path.parent)
    except (OSError, sqlite3.Error) as fault:
        fresh.unlink(missing_ok=True)
        raise LogError(f"{path}: the log cannot be made ({_reason(fault)}).", path=str(path)) from None


def sync_folder(folder: Path) -> None:
    """Make a rename in the folder durable, where the system lets a folder be synchronised."""
    try:
        handle = os.open(folder, os.O_RDONLY)
    except OSError:
        return
    try:
        os.fsync(handle)
    except OSError:
        pass
    finally:
        os.close(handle)


def upgraded(old: Path, new: Path, program: str) -> None:
    """A copy of an older log, taken to the present version; the old file is only read.

    Raises
    ------
    LogError
        Where ``old`` is no older log, or ``new`` exists or cannot be written.
    """
    with old.open("rb") as file:
        head = file.read(100)
    if len(head) < 100 or struct.unpack(">I", head[68:72])[0] != APPLICATION:
        raise LogError(f"{old}: this is not a burn-in log.", path=str(old))
    if new.exists():
        raise LogError(f"{new}: this file exists already; choose another name for the copy.", path=str(new))
    try:
        source = sqlite3.connect(f"{old.absolute().as_uri()}?mode=ro", uri=True)
        target = sqlite3.connect(new, isolation_level=None)
        try:
            source.backup(target)
            migrate(target, program)
            target.execute("PRAGMA journal_mode = WAL").fetchone()
        finally:
            source.close()
            target.close()
    except sqlite3.Error as fault:
        raise LogError(f"{new}: the copy cannot be made ({_reason(fault)}).", path=str(new)) from None


def _reason(fault: Exception) -> str:
    return getattr(fault, "strerror", None) or str(fault)
