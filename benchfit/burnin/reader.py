"""Reading a log, also while it is being written: one consistent view, nothing in it ever altered."""

from __future__ import annotations

import json
import shutil
import sqlite3
import tempfile
import time
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchfit.burnin import packing, schema
from benchfit.burnin.clock import iso
from benchfit.burnin.contents import Alarm, Event, Gap, Run, Series, Session
from benchfit.capture.model import Capture
from benchfit.errors import LogError

_CHUNK = 16384


class LogReader:
    """A consistent view of a log. Made by :meth:`open`; a context manager."""

    def __init__(self, path: Path, db: sqlite3.Connection, copy: str | None) -> None:
        self.path = path
        self._db = db
        self._copy = copy

    @classmethod
    def open(cls, path: str | Path, patience: float = 0.5) -> LogReader:
        """Open a log for reading.

        Parameters
        ----------
        path : str or Path
        patience : float
            How long (s) the file's inside is looked over for damage; a short log is looked over whole.

        Raises
        ------
        LogError
            Where it is no log of this version, or damaged.
        """
        path = Path(path)
        schema.inspect(path)
        db, copy = _open(path)
        reader = cls(path, db, copy)
        try:
            with reader._reading():
                db.execute("BEGIN")
                reader._look_over(patience)
        except BaseException:
            reader.close()
            raise
        return reader

    def __enter__(self) -> LogReader:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Let the log go."""
        self._db.close()
        if self._copy is not None:
            shutil.rmtree(self._copy, ignore_errors=True)

    def run(self) -> Run:
        """What the run is about."""
        with self._reading() as db:
            row = db.execute("SELECT title, circuit, sheet, program, created FROM run").fetchone()
            # none: made, and killed before its first session began
            title, circuit, sheet, program, created = row or ("", None, "", "", 0.0)
            seq, started, ended = self._extent()
            notes = tuple(text for (text,) in db.execute("SELECT text FROM note ORDER BY id"))
            last = db.execute("SELECT how FROM session ORDER BY id DESC LIMIT 1").fetchone()
        is_closed = last is not None and last[0] is not None
        return Run(title, circuit, sheet, program, created, started, ended, seq, notes, is_closed)

    def sessions(self) -> list[Session]:
        """Every process that wrote, in order."""
        with self._reading() as db:
            rows = db.execute(
                "SELECT id, started, steady, ended, how, holder, program, every, first_seq FROM session ORDER BY id"
            )
            return [Session(*row) for row in rows]

    def units(self) -> list[str]:
        """The names of the units, "" for the only one of a run without names."""
        with self._reading() as db:
            return [name for (name,) in db.execute("SELECT name FROM unit ORDER BY id")]

    def gaps(self) -> list[Gap]:
        """Times without records, in order."""
        with self._reading() as db:
            rows = db.execute(
                "SELECT coalesce(unit.name, ''), after_seq, began, ended, why FROM gap LEFT JOIN unit "
                "ON unit.id = gap.unit ORDER BY gap.id"
            )
            return [Gap(*row) for row in rows]

    def alarms(self) -> list[Alarm]:
        """Alarms in the order in which they were raised."""
        with self._reading() as db:
            rows = db.execute(
                "SELECT alarm.seq, record.acquired, unit.name, quantity, value, low, high, text, cleared_seq "
                "FROM alarm JOIN record ON record.seq = alarm.seq JOIN unit ON unit.id = alarm.unit "
                "ORDER BY alarm.id"
            )
            return [Alarm(*row) for row in rows]

    def events(self) -> list[Event]:
        """What else happened, in order."""
        with self._reading() as db:
            rows = db.execute("SELECT at, after_seq, code, size, says FROM event ORDER BY id")
            return [Event(*row) for row in rows]

    def limits(self) -> dict[str, str]:
        """The limits last in force, quantity → as they were written."""
        with self._reading() as db:
            row = db.execute("SELECT max(session) FROM bound").fetchone()
            rows = db.execute("SELECT quantity, text FROM bound WHERE session = ?", row)
            return dict(rows.fetchall())

    def records(self, first: int = 1, last: int | None = None) -> Iterator[dict[str, Any]]:
        """The records as they were printed, from ``first`` to ``last`` (both included)."""
        with self._reading() as db:
            dictionaries = dict(db.execute("SELECT id, data FROM dictionary").fetchall())
            rows = db.execute(
                "SELECT record.seq, acquired, unit.name, dictionary, json FROM record JOIN body USING (seq) "
                "JOIN unit ON unit.id = record.unit WHERE record.seq BETWEEN ? AND ? ORDER BY record.seq",
                (first, 2**62 if last is None else last),
            )
            for seq, acquired, unit, dictionary, body in rows:
                try:
                    record = json.loads(packing.expand(body, dictionaries.get(dictionary)))
                except (zlib.error, ValueError) as fault:
                    raise schema.damaged(self.path, f"record {seq}: {fault}") from None
                yield line(seq, acquired, unit, record)

    def capture(self, seq: int) -> Capture:
        """The raw capture of a record.

        Raises
        ------
        LogError
            Where none was kept for it.
        """
        with self._reading() as db:
            row = db.execute("SELECT capture FROM raw WHERE seq = ?", (seq,)).fetchone()
            kept = [s for (s,) in db.execute("SELECT seq FROM raw ORDER BY seq LIMIT 6")] if row is None else []
        if row is None:
            which = (
                f"there are those of {', '.join(map(str, kept[:5]))}{' …' if len(kept) > 5 else ''}"
                if kept
                else "none is"
            )
            raise LogError(f"{self.path}: no raw capture was kept of record {seq}; {which}.", path=str(self.path))
        try:
            return packing.unpack_capture(row[0])
        except (zlib.error, ValueError, KeyError) as fault:
            raise schema.damaged(self.path, f"the raw capture of record {seq}: {fault}") from None

    def series(self, unit: str) -> Series:
        """All records of a unit as arrays. About 8 bytes a record and quantity are held."""
        with self._reading() as db:
            listed = db.execute("SELECT name, unit, kind FROM quantity ORDER BY id").fetchall()
            key = db.execute("SELECT id FROM unit WHERE name = ?", (unit,)).fetchone()[0]
            only = db.execute("SELECT count(*) FROM unit").fetchone()[0] == 1
            size = self._extent()[0] if only else self._count(key)
            stamps = np.empty((3, size), np.int64)
            times = np.empty((2, size))
            values = np.full((len(listed), size), np.nan)
            sums = np.zeros((4, len(listed)))
            rows = db.execute(
                "SELECT seq, session, status, acquired, steady, scalars, crc FROM record WHERE unit = ? ORDER BY seq",
                (key,),
            )
            at = 0
            while chunk := rows.fetchmany(_CHUNK):
                self._fill(chunk, at, stamps, times, values, sums)
                at += len(chunk)
        with np.errstate(invalid="ignore", divide="ignore"):
            u, noise = sums[0] / sums[1], sums[2] / sums[3]
        names, units, kinds = zip(*listed, strict=True) if listed else ((), (), ())
        return Series(unit, names, units, kinds, stamps[0], stamps[1], times[0], times[1], stamps[2], values, u, noise)

    def quantities(self) -> list[str]:
        """The names of all quantities that any record has."""
        with self._reading() as db:
            return [name for (name,) in db.execute("SELECT name FROM quantity ORDER BY id")]

    def rows(self, unit: str | None = None) -> Iterator[dict[str, Any]]:
        """The records as rows of a table: seq, acquired (Unix time), unit, status, error, values, u."""
        with self._reading() as db:
            count = db.execute("SELECT count(*) FROM quantity").fetchone()[0]
            rows = db.execute(
                "SELECT seq, acquired, unit.name, status, scalars FROM record "
                "JOIN unit ON unit.id = record.unit WHERE ? IS NULL OR unit.name = ? ORDER BY seq",
                (unit, unit),
            )
            for seq, acquired, name, status, packed in rows:
                values, u = np.full(count, np.nan), np.full(count, np.nan)
                if packed:
                    found = packing.unpack([packed])
                    values[: found[0].shape[1]], u[: found[1].shape[1]] = found[0][0], found[1][0]
                error = ""
                if status:
                    failed = next(self.records(seq, seq))
                    error = str(failed["error"].get("says", ""))
                yield {
                    "seq": seq, "acquired": acquired, "unit": name, "status": status, "error": error,
                    "values": values.tolist(), "u": u.tolist(),
                }  # fmt: skip

    # --- inside ---------------------------------------------------------------------------------------------

    def _extent(self) -> tuple[int, float | None, float | None]:
        db = self._db
        seq = int(db.execute("SELECT coalesce(max(seq), 0) FROM record").fetchone()[0])
        ends = [db.execute("SELECT acquired FROM record WHERE seq = ?", (s,)).fetchone() for s in (1, seq)]
        if seq and None in ends:
            raise schema.damaged(self.path, "record 1 is missing")
        return seq, *(row[0] if row else None for row in ends)  # type: ignore[return-value]

    def _count(self, unit: int) -> int:
        return int(self._db.execute("SELECT count(*) FROM record WHERE unit = ?", (unit,)).fetchone()[0])

    def _fill(
        self,
        chunk: list[tuple[Any, ...]],
        at: int,
        stamps: NDArray[np.int64],
        times: NDArray[np.float64],
        values: NDArray[np.float64],
        sums: NDArray[np.float64],
    ) -> None:
        if at + len(chunk) > stamps.shape[1]:
            raise schema.damaged(self.path, "it holds more records than their numbers allow")
        seq, session, status, acquired, steady, rows, crc = zip(*chunk, strict=True)
        span = slice(at, at + len(chunk))
        stamps[:, span] = seq, session, status
        times[0, span], times[1, span] = acquired, np.array(steady, float)
        wrong = packing.checksums(stamps[0, span], times[0, span], stamps[2, span], rows) != np.array(crc)
        if wrong.any():
            raise schema.damaged(self.path, f"record {seq[int(np.argmax(wrong))]} does not have its checksum")
        if stamps.shape[1] == 0:
            return
        lengths = np.fromiter(map(len, rows), np.int64, len(rows))
        for length in np.unique(lengths):
            which = np.flatnonzero(lengths == length)
            count = length // packing.WIDTH
            found, u, noise = packing.unpack([rows[i] for i in which])
            whole = which.size == len(rows)
            values[:count, span if whole else at + which] = found.T
            for k, one in ((0, u), (2, noise)):
                known = np.isfinite(one)
                sums[k, :count] += np.where(known, one, 0).sum(axis=0, dtype=float)
                sums[k + 1, :count] += known.sum(axis=0)

    def _look_over(self, patience: float) -> None:
        """SQLite's own check of the file's structure, given up after ``patience`` seconds."""
        end = time.monotonic() + patience
        self._db.set_progress_handler(lambda: time.monotonic() > end, 20000)
        try:
            found = self._db.execute("PRAGMA quick_check(1)").fetchone()
        except sqlite3.OperationalError as fault:
            if getattr(fault, "sqlite_errorname", "") != "SQLITE_INTERRUPT" and "interrupt" not in str(fault):
                raise
            self._db.execute("SELECT 1 FROM run").fetchone()
            found = ("ok",)
        finally:
            self._db.set_progress_handler(None, 0)
        if found[0] != "ok":
            raise schema.damaged(self.path, " ".join(str(found[0]).split()))
        self._extent()

    @contextmanager
    def _reading(self) -> Iterator[sqlite3.Connection]:
        try:
            yield self._db
        except sqlite3.OperationalError as fault:
            raise LogError(f"{self.path}: the log cannot be read ({fault}).", path=str(self.path)) from None
        except sqlite3.DatabaseError as fault:
            raise schema.damaged(self.path, fault) from None


def line(seq: int, acquired: float, unit: str, record: dict[str, Any]) -> dict[str, Any]:
    """A record as it is printed: number, time of acquisition, the unit's name if any, the result record."""
    return {"seq": seq, "acquired": iso(acquired), **({"unit": unit} if unit else {}), **record}


def _open(path: Path) -> tuple[sqlite3.Connection, str | None]:
    """A connection that alters nothing; where it had to be made on a copy, the copy's folder."""
    # A log that nobody has open is opened with write access that is then switched off, since only such
    # a connection takes its own auxiliary files away again; else read-only, so that it leaves the
    # write-ahead log alone.
    mode = "ro" if path.with_name(path.name + "-wal").exists() else "rw"
    for how in (f"mode={mode}", "mode=ro"):
        try:
            db = sqlite3.connect(f"{path.absolute().as_uri()}?{how}", uri=True, isolation_level=None, timeout=10)
            db.execute("PRAGMA query_only = 1")
            db.execute("SELECT count(*) FROM sqlite_master").fetchone()
            return db, None
        except sqlite3.OperationalError:
            continue
        except sqlite3.DatabaseError as fault:
            raise schema.damaged(path, fault) from None
    folder = tempfile.mkdtemp(prefix="benchfit-")
    try:
        for name in (path.name, path.name + "-wal"):
            source = path.with_name(name)
            if source.exists():
                shutil.copyfile(source, Path(folder) / name)
        db = sqlite3.connect(Path(folder) / path.name, isolation_level=None)
        db.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except (OSError, sqlite3.Error) as fault:
        shutil.rmtree(folder, ignore_errors=True)
        raise LogError(f"{path}: the log cannot be read ({fault}).", path=str(path)) from None
    return db, folder
