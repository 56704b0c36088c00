"""One writer at a time: an exclusive lock of the operating system on a file beside the log.

The lock belongs to an open file and is let go by the system when its holder ends, however it ends; so a lock
file that a killed process left behind never stands in the way.
"""

from __future__ import annotations

import getpass
import json
import os
import socket
import sys
import time
from dataclasses import asdict, dataclass
from pathlib import Path

from benchfit.errors import LogError

_LOCKED_BYTE = 1 << 30  # far behind the holder's name, which must stay readable on Windows


@dataclass(frozen=True)
class Holder:
    """Who writes a log: process, host, user, and since when (Unix time, s)."""

    process: int
    host: str
    user: str
    since: float

    def __str__(self) -> str:
        since = time.strftime("%Y-%m-%d %H:%M:%S UTC", time.gmtime(self.since))
        return f"process {self.process} of {self.user} on {self.host}, since {since}"


class WriterLock:
    """Held from :meth:`take` until :meth:`release`. Not to be shared between threads."""

    def __init__(self, log: Path) -> None:
        self.log = log
        self.path = log.with_name(log.name + ".lock")
        self._file: int | None = None

    def take(self) -> None:
        """Take the lock.

        Raises
        ------
        LogError
            Where another process holds it (the sentence says who), or the folder cannot be written.
        """
        while True:
            try:
                file = os.open(self.path, os.O_RDWR | os.O_CREAT, 0o666)
            except OSError as fault:
                raise LogError(
                    f"{self.log}: the log cannot be written here ({fault.strerror}: {self.path.parent}). "
                    "Choose a folder that you may write to with --log.",
                    path=str(self.log),
                ) from None
            locked = _lock(file)
            if locked is None:
                os.close(file)
                raise LogError(
                    f"{self.log}: the file system there cannot lock files, so two burn-ins could write the "
                    "same log unnoticed. Keep the log on a local disk.",
                    path=str(self.log),
                )
            if not locked:
                holder = _holder(file)
                os.close(file)
                raise LogError(
                    f"{self.log}: another burn-in is writing this log ({holder}). Wait for it, stop it, or "
                    "choose another file with --log; benchfit trend can read the log meanwhile.",
                    path=str(self.log),
                )
            if sys.platform == "win32" or _is_still(file, self.path):
                break
            os.close(file)  # its last holder took the file away between our opening and locking it
        os.ftruncate(file, 0)
        me = Holder(os.getpid(), socket.gethostname(), _user(), time.time())
        os.write(file, json.dumps(asdict(me)).encode())
        self._file = file

    def release(self) -> None:
        """Let go; the file beside the log goes too, where the system lets an open file go."""
        if self._file is None:
            return
        if sys.platform != "win32" and _is_still(self._file, self.path):
            self.path.unlink(missing_ok=True)
        os.close(self._file)
        self._file = None


def me() -> str:
    """This process, as it stands in the log's list of sessions."""
    return f"process {os.getpid()} of {_user()} on {socket.gethostname()}"


def _user() -> str:
    try:
        return getpass.getuser()
    except (KeyError, OSError, ImportError):  # no name service, or no such user: a container's usual state
        return "an unnamed user"


def _holder(file: int) -> str:
    try:
        os.lseek(file, 0, os.SEEK_SET)
        return str(Holder(**json.loads(os.read(file, 4096))))
    except (OSError, ValueError, TypeError):
        return "a process that has not given its name yet"


def _is_still(file: int, path: Path) -> bool:
    try:
        return os.path.samestat(os.fstat(file), os.stat(path))
    except OSError:
        return False


if sys.platform == "win32":
    import msvcrt

    def _lock(file: int) -> bool | None:
        """Whether the lock was to be had; None where the file system has no locks."""
        os.lseek(file, _LOCKED_BYTE, os.SEEK_SET)
        try:
            msvcrt.locking(file, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        os.lseek(file, 0, os.SEEK_SET)
        return True

else:
    import fcntl

    def _lock(file: int) -> bool | None:
        """Whether the lock was to be had; None where the file system has no locks."""
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            return False
        except OSError:
            return None
        return True
