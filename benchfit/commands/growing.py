"""Result files that grow record by record, so that a run that is cut off keeps what it had."""

from __future__ import annotations

import csv
import io
import sys
from collections.abc import Mapping
from typing import IO, TYPE_CHECKING, Any

from benchfit.commands import streams
from benchfit.commands.table import row
from benchfit.errors import UsageError

if TYPE_CHECKING:
    from benchfit.sheet import Sheet


class _Growing:
    """A text file that is added to line by line; "-" is standard output."""

    def __init__(self, path: str) -> None:
        self.path = path
        self._file: IO[str] | None = None
        if path != "-":
            try:
                self._file = open(path, "w", encoding="utf-8", newline="\n")  # noqa: SIM115
            except OSError as error:
                raise UsageError(f"{path}: cannot be written: {error.strerror or error}") from None

    def add(self, text: str) -> bool:
        """One line more, at once; False where nobody reads standard output any more."""
        if self._file is None:
            return streams.emit(text)
        try:
            self._file.write(f"{text}\n")
            self._file.flush()
        except OSError as error:
            raise UsageError(f"{self.path}: cannot be written: {error.strerror or error}") from None
        return True

    def close(self) -> None:
        """Nothing more will come."""
        if self._file is not None:
            self._file.close()
        else:
            sys.stdout.flush()


class JsonLines(_Growing):
    """One record a line."""

    def take(self, record: Mapping[str, Any]) -> bool:
        """Write one record; False where nobody reads any more."""
        from benchfit.show.record import dumps

        return self.add(dumps(record))


class CsvRows(_Growing):
    """One record a row; the columns are fixed beforehand: all that a record of this build may have."""

    def __init__(self, path: str, sheet: Sheet | None) -> None:
        super().__init__(path)
        self._columns = _columns(sheet)
        self._is_begun = False

    def take(self, record: Mapping[str, Any]) -> bool:
        """Write one record; False where nobody reads any more."""
        is_read = True
        if not self._is_begun:
            self._is_begun = True
            is_read = self.add(",".join(self._columns))
        text = io.StringIO()
        writer = csv.DictWriter(text, self._columns, restval="", extrasaction="ignore", lineterminator="")
        writer.writerow(row(record))
        return self.add(text.getvalue()) and is_read


def _columns(sheet: Sheet | None) -> list[str]:
    from benchfit.show.record import MEASURED

    parts: dict[str, Any] = {}
    targets: dict[str, Any] = {}
    if sheet is not None:
        if sheet.circuit is not None:
            build = sheet.build()
            parts = {name: {} for name in (*build.parts, *build.parasitics)}
        given = {"frequency": sheet.target_frequency, "duty": sheet.target_duty}
        targets = {name: {} for name, target in given.items() if target is not None}
    widest = {
        "acquired": "", "explained": "", "circuit": "", "verdict": "",
        "measured": {"oscillates": True, **dict.fromkeys(MEASURED)},
        "parts": parts, "miss": targets,
        "suspects": [{"causes": (), "probability": 0.0}],
    }  # fmt: skip
    return [*row(widest), "says"]
