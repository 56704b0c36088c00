"""How an instrument is spoken to, as data: the built-in SCPI-1999 language and dialect files (TOML)."""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final, Literal, NoReturn

from benchfit.errors import QuantityError, SheetError
from benchfit.instrument.block import ENCODINGS
from benchfit.quantity import parse

FIELDS: Final = (
    "points", "x_increment", "x_origin", "x_reference", "y_increment", "y_origin", "y_reference",
)  # fmt: skip
PARITIES: Final = ("none", "odd", "even", "mark", "space")


@dataclass(frozen=True)
class Dialect:
    """The words for one make of instrument.

    Attributes
    ----------
    once, each : tuple of str
        Commands on connecting (and on every reconnection), and before each acquisition.
    wait : str
        Query that is asked until it answers 1; "" where the first read waits by itself.
    identify, errors : str
        Queries for the instrument's name and for its error queue; "" where it has none.
    before : tuple of str
        Commands before a channel is read; here and below {channel} stands for its name.
    preamble, fields : str, tuple of str
        Query for a comma-separated header and the names of its fields ("": not used).
    queries : dict
        Field name to query, one value each.
    data : str
        Query for the samples.
    encoding : str
        "ascii", "int8", "uint8", "int16", "uint16", "float32" or "float64"; ``byte_order`` "little" or "big".
    y_origin_unit : str
        "V": volts = (raw − y_reference)·y_increment + y_origin;
        "step": volts = (raw − y_reference − y_origin)·y_increment.
    timeout : float
        Longest wait for an answer (s).
    serial : dict
        baud_rate, data_bits, parity, stop_bits of a serial line.
    """

    name: str
    data: str
    write_termination: str = "\n"
    read_termination: str = "\n"
    timeout: float = 5.0
    once: tuple[str, ...] = ()
    each: tuple[str, ...] = ()
    wait: str = ""
    identify: str = "*IDN?"
    errors: str = "SYST:ERR?"
    before: tuple[str, ...] = ()
    preamble: str = ""
    fields: tuple[str, ...] = ()
    queries: Mapping[str, str] = field(default_factory=dict)
    encoding: str = "float32"
    byte_order: Literal["little", "big"] = "little"
    y_origin_unit: Literal["V", "step"] = "V"
    serial: Mapping[str, object] = field(default_factory=dict)
    path: str = ""

    @classmethod
    def load(cls, path: str | Path) -> Dialect:
        """The dialect in a file. Raises SheetError (facts ``path``, ``key``): it cannot be read or used."""
        try:
            text = Path(path).read_text(encoding="utf-8-sig")
        except (OSError, UnicodeDecodeError) as error:
            reason = error.strerror if isinstance(error, OSError) else "it is not UTF-8 text"
            says = f"{path}: the dialect file cannot be read ({reason})."
            raise SheetError(says, path=str(path), key="") from None
        return cls.parse(text, path=str(path))

    @classmethod
    def parse(cls, text: str, path: str = "dialect") -> Dialect:
        """The dialect in a TOML text. Raises SheetError (facts ``path``, ``key``)."""
        try:
            document = tomllib.loads(text)
        except tomllib.TOMLDecodeError as error:
            raise SheetError(f"{path}: the dialect file is not TOML ({error}).", path=path, key="") from None
        return _Reader(path).dialect(document)


# SCPI-1999 volume 2, SENSe:SWEep and TRACe subsystems; blocks per IEEE Std 488.2-1992. SWAP is least
# significant byte first.
SCPI_1999: Final = Dialect(
    name="SCPI-1999",
    once=("FORM REAL,32", "FORM:BORD SWAP"),
    each=("INIT",),
    wait="*OPC?",
    queries={"x_increment": "SENS:SWE:TINT?", "x_origin": "SENS:SWE:OFFS:TIME?"},
    data="TRAC? {channel}",
    encoding="float32",
    byte_order="little",
)

_TOP: Final = ("name", "write_termination", "read_termination", "timeout", "setup", "read", "serial")
_SETUP: Final = ("once", "each", "wait", "identify", "errors")
_READ: Final = ("before", "preamble", "fields", "queries", "data", "encoding", "byte_order", "y_origin_unit")
_SERIAL: Final = ("baud_rate", "data_bits", "parity", "stop_bits")


class _Reader:
    """Checks a dialect file key by key; every refusal names the file, the key and what would be accepted."""

    def __init__(self, path: str) -> None:
        self.path = path

    def dialect(self, document: Mapping[str, object]) -> Dialect:
        self._known(document, _TOP, "")
        setup = self._table(document, "setup", _SETUP)
        read = self._table(document, "read", _READ)
        return Dialect(
            name=self._text(document, "name", "", self.path),
            write_termination=self._line_end(document, "write_termination"),
            read_termination=self._line_end(document, "read_termination"),
            timeout=self._timeout(document),
            once=self._texts(setup, "once", "setup."),
            each=self._texts(setup, "each", "setup."),
            wait=self._text(setup, "wait", "setup.", ""),
            identify=self._text(setup, "identify", "setup.", "*IDN?"),
            errors=self._text(setup, "errors", "setup.", "SYST:ERR?"),
            before=self._texts(read, "before", "read."),
            data=self._data(read),
            encoding=self._choice(read, "encoding", ENCODINGS, required=True),
            byte_order="big" if self._choice(read, "byte_order", ("little", "big")) == "big" else "little",
            y_origin_unit="step" if self._choice(read, "y_origin_unit", ("V", "step")) == "step" else "V",
            serial=self._serial(document),
            path=self.path,
            **self._preamble(read),  # type: ignore[arg-type]
        )

    def _preamble(self, read: Mapping[str, object]) -> dict[str, object]:
        preamble = self._text(read, "preamble", "read.", "")
        fields = self._texts(read, "fields", "read.")
        for name in fields:
            self._field_name(name, "read.fields")
        queries = self._table(read, "queries", FIELDS, "read.")
        asked = {name: self._text(queries, name, "read.queries.", "") for name in queries}
        named = [name for name in fields if name]
        if bool(preamble) != bool(fields):
            given, missing = ("preamble", "fields") if preamble else ("fields", "preamble")
            self._refuse(f"read.{given}", f"is given without read.{missing}; it takes both")
        twice = sorted({name for name in named if named.count(name) > 1 or name in asked})
        if twice:
            self._refuse("read.fields", f"names {twice[0]} twice; each value may come from one place only")
        return {"preamble": preamble, "fields": fields, "queries": asked}

    def _data(self, read: Mapping[str, object]) -> str:
        data = self._text(read, "data", "read.", "")
        if not data:
            self._refuse("read.data", 'is missing; give a query for the samples, such as "TRAC? {channel}"')
        return data

    def _field_name(self, name: str, key: str) -> None:
        if name and name not in FIELDS:
            near = self._nearest(name, FIELDS)
            self._refuse(key, f'has {name!r}; accepted are {", ".join(FIELDS)} and ""{near}')

    def _serial(self, document: Mapping[str, object]) -> dict[str, object]:
        table = self._table(document, "serial", _SERIAL)
        accepted: dict[str, Sequence[object]] = {
            "data_bits": (5, 6, 7, 8), "parity": PARITIES, "stop_bits": (1, 1.5, 2),
        }  # fmt: skip
        for name, value in table.items():
            if name == "baud_rate":
                if isinstance(value, bool) or not isinstance(value, int) or value <= 0:
                    self._refuse("serial.baud_rate", f"is {value!r}; give a whole number above 0")
            elif value not in accepted[name] or isinstance(value, bool):
                listed = ", ".join(map(str, accepted[name]))
                self._refuse(f"serial.{name}", f"is {value!r}; accepted are {listed}")
        return dict(table)

    def _timeout(self, document: Mapping[str, object]) -> float:
        value = document.get("timeout", "5 s")
        try:
            seconds = parse(value, "s").nominal
        except QuantityError:
            seconds = 0.0
        if not 0 < seconds < float("inf"):
            self._refuse("timeout", f'is {value!r}; give a time above 0 such as "5 s" or "500 ms"')
        return seconds

    def _line_end(self, document: Mapping[str, object], key: str) -> str:
        value = self._text(document, key, "", "\n")
        if not value.isascii() or len(value) > 2:
            self._refuse(key, f'is {value!r}; give "\\n", "\\r\\n", "\\r" or ""')
        return value

    def _choice(self, table: Mapping[str, object], key: str, accepted: Sequence[str], *, required: bool = False) -> str:
        """One of the accepted words; left out, it is the first, or refused where it is required."""
        value = table.get(key, None if required else accepted[0])
        if value is None:
            self._refuse(f"read.{key}", f"is missing; give one of {', '.join(accepted)}")
        if value not in accepted:
            near = self._nearest(str(value), accepted)
            self._refuse(f"read.{key}", f"is {value!r}; accepted are {', '.join(accepted)}{near}")
        return str(value)

    def _table(
        self, document: Mapping[str, object], key: str, known: Sequence[str], prefix: str = ""
    ) -> Mapping[str, object]:
        value = document.get(key, {})
        if not isinstance(value, dict):
            self._refuse(prefix + key, f"is {value!r}; it must be a section [{prefix}{key}]")
        self._known(value, known, f"{prefix}{key}.")
        return value

    def _known(self, table: Mapping[str, object], known: Sequence[str], prefix: str) -> None:
        for key in table:
            if key not in known:
                near = self._nearest(key, known) or f"; known are {', '.join(known)}"
                self._refuse(prefix + key, f"is not a known key{near}")

    @staticmethod
    def _nearest(text: str, known: Sequence[str]) -> str:
        near = difflib.get_close_matches(text, known, n=1, cutoff=0.5)
        return f"; did you mean {near[0]}?" if near else ""

    def _text(self, table: Mapping[str, object], key: str, prefix: str, default: str) -> str:
        value = table.get(key, default)
        if not isinstance(value, str):
            self._refuse(prefix + key, f"is {value!r}; it must be a text in quotes")
        if not value.isascii() and key != "name":
            self._refuse(prefix + key, f"is {value!r}; commands are ASCII")
        return value

    def _texts(self, table: Mapping[str, object], key: str, prefix: str) -> tuple[str, ...]:
        value = table.get(key, [])
        if not isinstance(value, list) or not all(isinstance(item, str) and item.isascii() for item in value):
            self._refuse(prefix + key, f'is {value!r}; it must be a list of ASCII texts such as ["*CLS"]')
        return tuple(value)

    def _refuse(self, key: str, says: str) -> NoReturn:
        stop = "" if says.endswith("?") else "."
        raise SheetError(f"{self.path}: {key} {says}{stop}", path=self.path, key=key)
