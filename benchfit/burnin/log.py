"""The log's writer: one at a time, and what it has returned from is on the disk.

Every record is one transaction in SQLite's write-ahead log with full synchronous: committed means that it
has been handed to the disk, and a process killed at any instant leaves the log as it was after the last
commit.
"""

from __future__ import annotations

import os
import sqlite3
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from benchfit.burnin import packing, schema
from benchfit.burnin.alarms import Cleared, Raised
from benchfit.burnin.clock import now
from benchfit.burnin.contents import Entry, Identity, Resumed, Wanted
from benchfit.burnin.lock import WriterLock, me
from benchfit.errors import LogError, SheetError


class LogWriter:
    """The one writer of a log. Made by :meth:`open`; every method raises LogError where the log fails it."""

    def __init__(self, path: Path, db: sqlite3.Connection, lock: WriterLock) -> None:
        self.path = path
        self._db = db
        self._lock = lock
        self._file = os.stat(path)
        self._quantities = [row[0] for row in db.execute("SELECT name FROM quantity ORDER BY id")]
        self._units = {name: key for key, name in db.execute("SELECT id, name FROM unit")}
        self._dictionary = db.execute("SELECT id, data FROM dictionary ORDER BY id DESC LIMIT 1").fetchone()
        self._seq = int(db.execute("SELECT coalesce(max(seq), 0) FROM record").fetchone()[0])
        self._session = 0
        self.resumed = Resumed()

    @classmethod
    def open(
        cls, path: str | Path, identity: Identity, units: Mapping[str, str], wanted: Wanted | None = None
    ) -> LogWriter:
        """Open the log at ``path`` for writing, or make it; ``units`` maps each unit's name to its source.

        Raises
        ------
        LogError
            Where another writer holds it, the folder cannot be written, or the file is no log of this
            version, or damaged (it is then left as it is).
        SheetError
            Where the log was begun with another build sheet.
        """
        path = Path(path)
        if path.is_dir():
            raise LogError(f"{path}: this is a folder; name a file in it with --log.", path=str(path))
        if not path.parent.is_dir():
            raise LogError(f"{path}: the folder {path.parent} does not exist; make it first.", path=str(path))
        lock = WriterLock(path)
        lock.take()
        db = None
        try:
            if not path.exists() or path.stat().st_size == 0:
                schema.create(path, identity.program)
            schema.inspect(path)
            _examine(path)
            db = _connect(path)
            with _failing(path):
                writer = cls(path, db, lock)
                writer._begin(identity, units, wanted or Wanted())
            return writer
        except BaseException:
            if db is not None:
                db.close()
            lock.release()
            raise

    @property
    def seq(self) -> int:
        """Number of the last record, 0 before the first."""
        return self._seq

    @property
    def units(self) -> tuple[str, ...]:
        """The names of the units."""
        return tuple(self._units)

    def append(self, entries: Sequence[Entry]) -> list[int]:
        """Write records in one transaction and return their numbers once they are on the disk."""
        db, before = self._db, (list(self._quantities), self._dictionary)
        with _failing(self.path):
            db.execute("BEGIN IMMEDIATE")
            try:
                numbers = [self._insert(self._seq + i, entry) for i, entry in enumerate(entries, 1)]
                db.execute("COMMIT")
            except BaseException:
                self._quantities, self._dictionary = before
                if db.in_transaction:
                    db.execute("ROLLBACK")
                raise
        self._still_there()
        self._seq += len(numbers)
        return numbers

    def note(self, text: str) -> None:
        """Keep a note of the user's, unless it is the last one again."""
        with self._change() as db:
            last = db.execute("SELECT text FROM note ORDER BY id DESC LIMIT 1").fetchone()
            if last is None or last[0] != text:
                db.execute("INSERT INTO note (at, text) VALUES (?, ?)", (time.time(), text))

    def event(self, code: str, says: str, size: float | None = None) -> None:
        """Keep something that happened to the run: "clock-step", "sheet-changed", …"""
        with self._change() as db:
            row = (time.time(), self._seq, code, size, says)
            db.execute("INSERT INTO event (at, after_seq, code, size, says) VALUES (?, ?, ?, ?, ?)", row)

    def bounds(self, limits: Mapping[str, str]) -> None:
        """Keep the limits of this session, quantity → as they were written."""
        with self._change() as db:
            rows = [(self._session, name, text) for name, text in limits.items()]
            db.executemany("INSERT INTO bound VALUES (?, ?, ?)", rows)

    def was_taken(self, unit: str, name: str) -> tuple[int, int] | None:
        """Size and time of change (ns) of the file of that name when a record was last made from it."""
        with _failing(self.path):
            row = self._db.execute(
                "SELECT size, changed FROM taken WHERE unit = ? AND name = ?", (self._units[unit], name)
            ).fetchone()
        return (row[0], row[1]) if row else None

    def first_value(self, unit: str, quantity: str) -> float | None:
        """The first known value of a quantity of a unit."""
        return next((v for v in self._values(unit, quantity, "ASC", 100)), None)

    def last_values(self, unit: str, quantity: str, count: int) -> list[float]:
        """The last known values of a quantity among that many records of the unit, oldest first."""
        return list(self._values(unit, quantity, "DESC", count))[::-1]

    def standing(self, unit: str, quantity: str) -> bool:
        """Whether an alarm of that quantity was raised and has not been cleared."""
        with _failing(self.path):
            row = self._db.execute(
                "SELECT 1 FROM alarm WHERE unit = ? AND quantity = ? AND cleared_seq IS NULL",
                (self._units[unit], quantity),
            ).fetchone()
        return row is not None

    def close(self, how: str = "stopped") -> None:
        """End the session ("completed", "stopped", "failed", "alarm") and let the log go. Never fails."""
        try:
            with self._change() as db:
                row = (time.time(), how, self._session)
                db.execute("UPDATE session SET ended = ?, how = ? WHERE id = ?", row)
        except LogError:
            pass  # a full disk: what was committed stays, and the session counts as interrupted
        try:
            self._db.close()
        except sqlite3.Error:
            pass
        finally:
            self._lock.release()

    # --- inside ---------------------------------------------------------------------------------------------

    def _begin(self, identity: Identity, units: Mapping[str, str], wanted: Wanted) -> None:
        db = self._db
        self._same_sheet(identity)
        self.resumed = self._last_session(wanted)
        clock = now()
        db.execute("BEGIN IMMEDIATE")
        if db.execute("SELECT 1 FROM run").fetchone() is None:
            row = (
                identity.title,
                identity.circuit,
                identity.sheet,
                identity.sheet_hash,
                clock.wall,
                identity.program,
            )
            db.execute("INSERT INTO run VALUES (1, ?, ?, ?, ?, ?, ?)", row)
        for name, source in units.items():
            db.execute(
                "INSERT INTO unit (name, source) VALUES (?, ?) "
                "ON CONFLICT (name) DO UPDATE SET source = excluded.source",
                (name, source),
            )
        self._units = {name: key for key, name in db.execute("SELECT id, name FROM unit")}
        begun = (
            clock.wall, clock.steady, me(), identity.program, wanted.every, wanted.count, wanted.time,
            self.resumed.count, self.resumed.time, self._seq + 1,
        )  # fmt: skip
        self._session = int(
            db.execute(
                "INSERT INTO session (started, steady, holder, program, every, wanted_count, wanted_time, "
                "done_count, done_time, first_seq) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                begun,
            ).lastrowid
            or 0
        )
        db.execute("COMMIT")

    def _same_sheet(self, identity: Identity) -> None:
        row = self._db.execute("SELECT sheet, sheet_hash FROM run").fetchone()
        if row is None or row[1] == identity.sheet_hash:
            return
        if not row[0] or not identity.sheet:
            how = "without a build sheet" if not row[0] else "with a build sheet (give the same one with --build)"
            raise SheetError(f"{self.path}: this log was begun {how}; go on likewise, or start a new log.")
        raise SheetError(
            f"{self.path}: the build sheet is not the one that this log was begun with: "
            f"{_differences(row[0], identity.sheet)}. Go on with the old sheet, or start a new log."
        )

    def _last_session(self, wanted: Wanted) -> Resumed:
        db = self._db
        last = db.execute("SELECT max(acquired) FROM record WHERE seq = ?", (self._seq,)).fetchone()[0]
        row = db.execute(
            "SELECT started, wanted_count, wanted_time, done_count, done_time, first_seq, how FROM session "
            "ORDER BY id DESC LIMIT 1"
        ).fetchone()
        if row is None:
            return Resumed()
        started, count, span, done, spent, first, how = row
        carried = how != "completed" and (count, span) == (wanted.count, wanted.time)
        if not carried:
            return Resumed(self._seq, last, how is not None)
        if self._seq >= first:
            done, spent = done + self._seq - first + 1, spent + max(last - started, 0.0)
        return Resumed(self._seq, last, how is not None, done, spent)

    def _insert(self, seq: int, entry: Entry) -> int:
        db, unit = self._db, self._units[entry.unit]
        found = {one.name: one for one in packing.scalars(entry.record)}
        for name, one in found.items():
            if name in self._quantities:
                continue
            row = (len(self._quantities), name, one.unit, one.kind)
            db.execute("INSERT INTO quantity VALUES (?, ?, ?, ?)", row)
            self._quantities.append(name)
        status = int((entry.record.get("error") or {}).get("status", 0))
        packed = packing.pack(found, self._quantities)
        plain = [found[name].value if name in found else None for name in ("frequency", "duty")]
        (crc,) = packing.checksums(np.array([seq]), np.array([entry.acquired]), np.array([status]), [packed])
        db.execute(
            "INSERT INTO record VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
            (seq, unit, self._session, entry.acquired, entry.steady, status, *plain, packed, int(crc)),
        )
        self._insert_body(seq, packing.plain_json(entry.record), is_model=status == 0)
        if entry.capture is not None:
            db.execute("INSERT INTO raw VALUES (?, ?)", (seq, packing.pack_capture(entry.capture)))
        if entry.taken is not None:
            file = (unit, entry.taken.name, entry.taken.size, entry.taken.changed)
            db.execute("INSERT OR REPLACE INTO taken VALUES (?, ?, ?, ?)", file)
        if entry.gap is not None:
            began, why = entry.gap
            db.execute(
                "INSERT INTO gap (unit, after_seq, began, ended, why) VALUES (?, ?, ?, ?, ?)",
                (unit, seq - 1, began, entry.acquired, why),
            )
        for alarm in entry.alarms:
            self._insert_alarm(seq, unit, alarm)
        return seq

    def _insert_body(self, seq: int, body: str, *, is_model: bool) -> None:
        if self._dictionary is None and is_model:
            model = body.encode()
            made = self._db.execute("INSERT INTO dictionary (data) VALUES (?)", (model,)).lastrowid
            self._dictionary = (made, model)
        key, data = self._dictionary or (None, None)
        self._db.execute("INSERT INTO body VALUES (?, ?, ?)", (seq, key, packing.compress(body, data)))

    def _insert_alarm(self, seq: int, unit: int, alarm: Raised | Cleared) -> None:
        if isinstance(alarm, Raised):
            self._db.execute(
                "INSERT INTO alarm (seq, unit, quantity, value, low, high, text) VALUES (?, ?, ?, ?, ?, ?, ?)",
                (seq, unit, alarm.quantity, alarm.value, alarm.low, alarm.high, alarm.text),
            )
        else:
            self._db.execute(
                "UPDATE alarm SET cleared_seq = ? WHERE unit = ? AND quantity = ? AND cleared_seq IS NULL",
                (seq, unit, alarm.quantity),
            )

    def _values(self, unit: str, quantity: str, order: str, count: int) -> Iterator[float]:
        if quantity not in self._quantities:
            return
        index = self._quantities.index(quantity)
        with _failing(self.path):
            rows = self._db.execute(
                f"SELECT scalars FROM record WHERE unit = ? AND status = 0 ORDER BY seq {order} LIMIT ?",
                (self._units[unit], count),
            ).fetchall()
        for (packed,) in rows:
            values = packing.unpack([packed])[0][0]
            if index < values.size and values[index] == values[index]:
                yield float(values[index])

    @contextmanager
    def _change(self) -> Iterator[sqlite3.Connection]:
        with _failing(self.path):
            self._db.execute("BEGIN IMMEDIATE")
            try:
                yield self._db
                self._db.execute("COMMIT")
            except BaseException:
                if self._db.in_transaction:
                    self._db.execute("ROLLBACK")
                raise

    def _still_there(self) -> None:
        """A log that was deleted or whose disk was taken away must not seem to go on."""
        try:
            same = os.path.samestat(self._file, os.stat(self.path))
        except OSError:
            same = False
        if not same:
            raise LogError(
                f"{self.path}: the log vanished while it was being written (deleted, moved, or its disk is "
                "gone). Put it back, or start a new log.",
                path=str(self.path),
            )


def _connect(path: Path) -> sqlite3.Connection:
    db = sqlite3.connect(path, isolation_level=None, timeout=10)
    db.execute("PRAGMA journal_mode = WAL").fetchone()
    db.execute("PRAGMA synchronous = FULL")
    db.execute("PRAGMA wal_autocheckpoint = 250")  # pages: 4 MB
    db.execute("PRAGMA fullfsync = 1")  # macOS: a plain fsync does not reach the disk
    db.execute("PRAGMA checkpoint_fullfsync = 1")
    return db


def _examine(path: Path) -> None:
    """Refuse a damaged log before anything is written to it, by a reader that cannot write."""
    from benchfit.burnin.reader import LogReader

    with LogReader.open(path, patience=0.25):
        pass


@contextmanager
def _failing(path: Path) -> Iterator[None]:
    """What SQLite says of a disk, in a sentence."""
    try:
        yield
    except sqlite3.Error as fault:
        name = getattr(fault, "sqlite_errorname", "") or ""
        if name == "SQLITE_FULL":
            says = "the log cannot be written: the disk is full"
        elif name.startswith("SQLITE_IOERR"):
            says = "the log cannot be written: the disk is full or failing, or files may not grow any further"
        elif name.startswith(("SQLITE_READONLY", "SQLITE_CANTOPEN", "SQLITE_PERM")):
            says = "the log cannot be written: there is no permission to write it, or its folder is gone"
        elif name.startswith("SQLITE_BUSY"):
            says = "the log cannot be written: another program holds it"
        elif name.startswith(("SQLITE_CORRUPT", "SQLITE_NOTADB")):
            raise schema.damaged(path, fault) from None
        else:
            says = f"the log cannot be written: {fault}"
        raise LogError(
            f"{path}: {says}. Everything up to the last printed record is kept; the same command goes on from there.",
            path=str(path),
        ) from None


def _differences(old: str, new: str) -> str:
    """What differs between two sheets, key by key."""
    import tomllib

    def flat(table: Mapping[str, Any], head: str = "") -> dict[str, Any]:
        found: dict[str, Any] = {}
        for key, value in table.items():
            found |= flat(value, f"{head}{key}.") if isinstance(value, Mapping) else {f"{head}{key}": value}
        return found

    before, after = flat(tomllib.loads(old)), flat(tomllib.loads(new))
    words = [
        f"{key} was {before.get(key, 'absent')!r} and is {after.get(key, 'absent')!r}"
        for key in sorted(before.keys() | after.keys())
        if before.get(key) != after.get(key)
    ]
    return "; ".join(words[:3]) + ("; …" if len(words) > 3 else "") if words else "it reads differently"
