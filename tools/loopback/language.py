"""What the instrument understands: SCPI-1999, and a dialect with a header of named fields (``REC:…``).

Source of the commands: SCPI-1999 volume 2 (FORMat, INITiate, SENSe:SWEep, SYSTem, TRACe) and IEEE Std
488.2-1992 (common commands, blocks).
"""

from __future__ import annotations

import re
import threading
import time
from collections import deque
from collections.abc import Callable

import numpy as np

from tools.loopback.misbehave import Misbehaviour
from tools.loopback.source import Digitised, Source

NAME = "Benchfit,Loopback Scope,127001,1.0"
Handler = Callable[["Instrument", str], "Reply | None"]


class Reply(bytes):
    """A reply without its line end; ``is_block`` where it is a block (it may hold any byte)."""

    is_block = False
    header_size = 0


class RefusalError(Exception):
    """The instrument wants the connection closed and new ones refused for a while."""


class Instrument:
    """The instrument behind the socket: its settings, its error queue and its last record."""

    def __init__(self, source: Source, misbehaviour: Misbehaviour, *, duration: float = 0.0) -> None:
        self.source = source
        self.misbehaviour = misbehaviour
        self.duration = duration
        self.lock = threading.RLock()
        self.number = 0
        self.record: dict[str, Digitised] = {}
        self.done_at = 0.0
        self.errors: deque[str] = deque(maxlen=20)
        self.format, self.big_endian = "REAL,32", True
        self.rec_format, self.rec_big_endian, self.rec_indefinite = "U8", False, False
        self.selected = source.channels[0]

    def execute(self, message: str) -> list[Reply]:
        """Carry out one program message (commands separated by semicolons); its replies."""
        replies = []
        for command in filter(None, (part.strip() for part in message.split(";"))):
            header, _, argument = command.partition(" ")
            for pattern, handler in COMMANDS:
                if pattern.fullmatch(header):
                    with self.lock:
                        reply = handler(self, argument.strip())
                    if reply is not None:
                        replies.append(reply)
                    break
            else:
                self.errors.append(f'-113,"Undefined header;{header[:40]}"')
        return replies

    def initiate(self, _: str = "") -> None:
        """Take a new record; it is complete after ``duration`` s."""
        self.number += 1
        kind = self.misbehaviour.plan(self.number)
        if kind == "refusing":
            raise RefusalError
        if kind == "error":
            self.errors.append('-222,"Data out of range;invented on request"')
        self.record = self.source.digitise(self.number)
        self.done_at = time.monotonic() + self.duration

    def operation_complete(self, _: str) -> Reply:
        time.sleep(max(0.0, self.done_at - time.monotonic()))
        return Reply(b"1")

    def next_error(self, _: str) -> Reply:
        return Reply((self.errors.popleft() if self.errors else '0,"No error"').encode())

    def clear(self, _: str) -> None:
        self.errors.clear()

    def set_format(self, argument: str) -> None:
        text = argument.upper().replace(" ", "")
        text = {"REAL": "REAL,32", "ASC": "ASC", "ASCII": "ASC", "INT": "INT,8"}.get(text, text)
        if text not in ("REAL,32", "REAL,64", "ASC", "INT,8", "INT,16"):
            self.errors.append('-224,"Illegal parameter value"')
            return
        self.format = text

    def set_order(self, argument: str) -> None:
        # NORMal is most significant byte first.
        self.big_endian = not argument.upper().startswith("SWAP")

    def trace(self, argument: str) -> Reply | None:
        channel = self._channel(argument)
        if channel is None:
            return None
        if self.format == "ASC":
            return Reply(",".join(f"{v:.9G}" for v in channel.volts).encode())
        order = ">" if self.big_endian else "<"
        if self.format.startswith("REAL"):
            return block(
                channel.volts.astype(order + ("f4" if self.format.endswith("32") else "f8")).tobytes()
            )
        signed = channel.codes.astype(np.int16) - 128
        return block(signed.astype(np.int8 if self.format.endswith(",8") else order + "i2").tobytes())

    def interval(self, _: str) -> Reply | None:
        channel = self._channel("")
        return None if channel is None else Reply(f"{float(channel.interval)!r}".encode())

    def first_sample(self, _: str) -> Reply | None:
        channel = self._channel("")
        return None if channel is None else Reply(f"{float(channel.start)!r}".encode())

    def points(self, _: str) -> Reply | None:
        channel = self._channel("")
        return None if channel is None else Reply(str(channel.codes.size).encode())

    # -- the dialect ----------------------------------------------------------------------------------------

    def set_rec_format(self, argument: str) -> None:
        if argument.upper() not in ("U8", "I8", "U16", "I16", "F32", "F64", "ASC"):
            self.errors.append('-224,"Illegal parameter value"')
            return
        self.rec_format = argument.upper()

    def set_rec_order(self, argument: str) -> None:
        self.rec_big_endian = argument.upper().startswith("BIG")

    def set_rec_block(self, argument: str) -> None:
        self.rec_indefinite = argument.upper().startswith("IND")

    def select(self, argument: str) -> None:
        if self._channel(argument) is not None:
            self.selected = argument.upper()

    def rec_header(self, _: str) -> Reply | None:
        channel = self._channel(self.selected)
        if channel is None:
            return None
        codes, increment, reference = self._raw(channel)
        origin = channel.origin if codes.dtype.kind in "iu" else 0.0
        cells = (channel.interval, channel.start, increment, origin, reference)
        numbers = ",".join(repr(float(cell)) for cell in cells)
        return Reply(f'{codes.size},{numbers},"{self.selected}"'.encode())

    def rec_data(self, _: str) -> Reply | None:
        channel = self._channel(self.selected)
        if channel is None:
            return None
        raw, _, _ = self._raw(channel)
        if self.rec_format == "ASC":
            return Reply(",".join(f"{v!r}" for v in raw.tolist()).encode())
        order = ">" if self.rec_big_endian else "<"
        return block(raw.astype(raw.dtype.newbyteorder(order)).tobytes(), indefinite=self.rec_indefinite)

    def _raw(self, channel: Digitised) -> tuple[np.ndarray, float, float]:
        """The samples in the dialect's format, with y_increment and y_reference."""
        codes = channel.codes
        if self.rec_format == "U8":
            return codes, channel.step, 0.0
        if self.rec_format == "I8":
            return (codes.astype(np.int16) - 128).astype(np.int8), channel.step, -128.0
        if self.rec_format == "U16":
            return codes.astype(np.uint16) * 256, channel.step / 256, 0.0
        if self.rec_format == "I16":
            return (codes.astype(np.int32) * 256 - 32768).astype(np.int16), channel.step / 256, -32768.0
        return channel.volts.astype(np.float32 if self.rec_format == "F32" else np.float64), 1.0, 0.0

    def _channel(self, name: str) -> Digitised | None:
        if not self.record:
            self.errors.append('-230,"Data corrupt or stale;no acquisition yet"')
            return None
        found = self.record.get((name or self.source.channels[0]).upper())
        if found is None:
            self.errors.append(f'-224,"Illegal parameter value;{name[:20]}"')
        return found

    def turn(self, argument: str) -> None:
        """``BENC:TURN 0.4``: put the trimmer at a position from 0 to 1."""
        trimmer = getattr(self.source, "trimmer", None)
        try:
            position = float(argument)
        except ValueError:
            position = -1.0
        if trimmer is None or not 0 <= position <= 1:
            self.errors.append('-224,"Illegal parameter value;no trimmer, or not from 0 to 1"')
            return
        trimmer.at, trimmer.turn = position, 0.0


def block(data: bytes, *, indefinite: bool = False) -> Reply:
    """An IEEE 488.2 block."""
    digits = str(len(data))
    header = b"#0" if indefinite else f"#{len(digits)}{digits}".encode()
    reply = Reply(header + data)
    reply.is_block, reply.header_size = True, len(header)
    return reply


def _pattern(header: str) -> re.Pattern[str]:
    """Short or long form of each word, in either case, a leading colon or not; [words] may be left out."""
    text = header.rstrip("?")
    words = re.findall(r"(\[)?:?([A-Za-z*]+)\]?", text)
    parts = []
    for position, (optional, word) in enumerate(words):
        short = "".join(c for c in word if not c.islower())
        either = f"(?:{re.escape(word.upper())}|{re.escape(short)})"
        joined = either if position == 0 else f":{either}"
        parts.append(f"(?:{joined})?" if optional else joined)
    query = r"\?" if header.endswith("?") else ""
    return re.compile(f":?{''.join(parts)}{query}", re.IGNORECASE)


def _ignore(instrument: Instrument, argument: str) -> None:
    return None


COMMANDS: list[tuple[re.Pattern[str], Handler]] = [
    (_pattern(header), handler)
    for header, handler in (
        ("*IDN?", lambda i, a: Reply(NAME.encode())),
        ("*CLS", Instrument.clear),
        ("*RST", _ignore),
        ("*OPC?", Instrument.operation_complete),
        ("*OPC", _ignore),
        ("*ESR?", lambda i, a: Reply(b"0")),
        ("*STB?", lambda i, a: Reply(b"0")),
        ("SYSTem:ERRor[:NEXT]?", Instrument.next_error),
        ("SYSTem:VERSion?", lambda i, a: Reply(b"1999.0")),
        ("FORMat[:DATA]", Instrument.set_format),
        ("FORMat[:DATA]?", lambda i, a: Reply(i.format.encode())),
        ("FORMat:BORDer", Instrument.set_order),
        ("FORMat:BORDer?", lambda i, a: Reply(b"NORM" if i.big_endian else b"SWAP")),
        ("INITiate[:IMMediate]", Instrument.initiate),
        ("ABORt", _ignore),
        ("SENSe:SWEep:TINTerval?", Instrument.interval),
        ("SENSe:SWEep:OFFSet:TIME?", Instrument.first_sample),
        ("SENSe:SWEep:POINts?", Instrument.points),
        ("TRACe[:DATA]?", Instrument.trace),
        ("REC:FORM", Instrument.set_rec_format),
        ("REC:ORDer", Instrument.set_rec_order),
        ("REC:BLOCk", Instrument.set_rec_block),
        ("RUN:ONE", Instrument.initiate),
        ("REC:SEL", Instrument.select),
        ("REC:HEAD?", Instrument.rec_header),
        ("REC:DATA?", Instrument.rec_data),
        ("BENCh:TURN", Instrument.turn),
    )
]
