"""Unit words of headers and preambles: to which base unit, by what factor."""

from __future__ import annotations

import re
from dataclasses import dataclass

_PREFIXES = {
    "f": 1e-15, "p": 1e-12, "n": 1e-9, "u": 1e-6, "µ": 1e-6, "μ": 1e-6, "m": 1e-3, "": 1.0, "k": 1e3,
    "M": 1e6, "G": 1e9, "femto": 1e-15, "pico": 1e-12, "nano": 1e-9, "micro": 1e-6, "mikro": 1e-6, "milli": 1e-3,
    "kilo": 1e3, "mega": 1e6, "giga": 1e9,
}  # fmt: skip
_LONG = tuple(sorted((prefix for prefix in _PREFIXES if len(prefix) > 1), key=len, reverse=True))
_SYMBOLS = {
    "V": "V",
    "A": "A",
    "W": "W",
    "Hz": "Hz",
    "Ω": "Ω",
    "Ohm": "Ω",
    "ohm": "Ω",
    "VA": "VA",
}
_WORDS = {
    "V": "volt volts vdc vac vrms vpp volte volti voltios вольт в 伏",
    "A": "amp amps ampere amperes ampère ampères amper amperios ампер",
    "s": "s sec secs second seconds sekunde sekunden sekund sek seconde secondes secondo secondi segundo "
    "segundos sekunda sekundy szekundum с сек секунда секунды 秒",
    "W": "watt watts", "Hz": "hertz", "Ω": "ohm ohms", "°C": "celsius degc °c", "K": "kelvin",
    "°": "deg degree degrees °", "dB": "db", "dBV": "dbv dbvrms", "dBm": "dbm", "%": "percent %",
    "": "code codes count counts cnt lsb raw digit digits adu adc none n/a bit bits logic",
}  # fmt: skip
_BY_WORD = {word: base for base, words in _WORDS.items() for word in words.split()}
_MINUTES = frozenset(("min", "mins", "minute", "minutes", "minuten"))
_HOURS = frozenset(("h", "hr", "hrs", "hour", "hours", "stunde", "stunden"))
# Headers in capitals are common: "TIME (MS)" and "(mS)" mean milliseconds, nobody logs megasiemens.
_SHORT_TIME = re.compile(r"(?P<prefix>[mnpuµμ]?)s(?:ec)?s?", re.IGNORECASE)
_LOOSE_TIME = {"millis": 1e-3, "micros": 1e-6, "nanos": 1e-9, "milli": 1e-3, "micro": 1e-6}


@dataclass(frozen=True)
class Unit:
    """A unit met in a file: ``base`` symbol ("" for bare codes), ``scale`` to it, ``text`` as it stood."""

    base: str
    scale: float
    text: str

    @property
    def is_time(self) -> bool:
        """Whether it is a unit of time."""
        return self.base == "s"


def unit(text: str) -> Unit | None:
    """The unit that ``text`` names, with or without brackets; None where it names none that is known."""
    bare = unbracketed(text)
    bracketed = bare != text.strip()
    if not bare or len(bare) > 16:
        return None
    if found := _time(bare, bracketed):
        return found
    base = _BY_WORD.get(bare.casefold())
    if base is not None:
        return Unit(base, 1.0, bare)
    for prefix in _LONG:
        base = (
            _BY_WORD.get(bare.casefold().removeprefix(prefix)) if bare.casefold().startswith(prefix) else None
        )
        if base:
            return Unit(base, _PREFIXES[prefix], bare)
    for symbol, base in _SYMBOLS.items():
        # A lone lower-case letter in a header is somebody's name for a channel; in brackets it is a unit.
        if bare.endswith(symbol) or (bracketed and bare.endswith(symbol.lower())):
            scale = _PREFIXES.get(bare[: -len(symbol)])
            if scale is not None:
                return Unit(base, scale, bare)
    return None


def unbracketed(text: str) -> str:
    """``text`` without blanks, quotes and one pair of brackets around it."""
    bare = text.strip().strip("\"'").strip()
    if len(bare) > 1 and bare[0] + bare[-1] in ("()", "[]", "{}", "<>"):
        bare = bare[1:-1].strip()
    return bare


def _time(bare: str, bracketed: bool) -> Unit | None:
    word = bare.casefold().rstrip(".")
    if _BY_WORD.get(word) == "s":
        return Unit("s", 1.0, bare)
    if short := _SHORT_TIME.fullmatch(word):
        return Unit("s", _PREFIXES[short["prefix"]], bare)
    if word in _LOOSE_TIME:
        return Unit("s", _LOOSE_TIME[word], bare)
    for prefix in _LONG:
        if word.startswith(prefix) and _BY_WORD.get(word.removeprefix(prefix)) == "s":
            return Unit("s", _PREFIXES[prefix], bare)
    # Without brackets "min" is the minimum.
    if word in _MINUTES and (bracketed or len(word) > 4):
        return Unit("s", 60.0, bare)
    if word in _HOURS and bare != "H" and (bracketed or len(word) > 3):
        return Unit("s", 3600.0, bare)
    return None


_QUANTITY = re.compile(
    r"\s*(?P<value>[+-]?(?:\d+[.,]?\d*|[.,]\d+)(?:[eE][+-]?\d+)?)\s*(?P<unit>[^\d\s].*)?", re.DOTALL
)


def quantity(text: str) -> tuple[float, str] | None:
    """The number that begins ``text`` and what follows it: "500.0kSa/s" and "Analog:500.0kSa/s" too."""
    found = _QUANTITY.fullmatch(re.sub(r"^\s*[^\W\d]\w*:", "", text).strip().strip('"'))
    if not found:
        return None
    return float(found["value"].replace(",", ".")), (found["unit"] or "").strip()


_RATE = re.compile(
    r"(?P<prefix>[kKMG]?)(?:sa(?:mples?)?|s|hz|sps|pts|points?)(?:\s*/\s*s(?:ec(?:ond)?)?|ps)?", re.IGNORECASE
)


def interval_of(text: str, default: str = "") -> float | None:
    """Seconds from "2.0e-6", "1us", "0.5 ms"; None where ``text`` is no time.

    ``default`` is the unit of a bare number ("" for seconds).
    """
    found = quantity(text)
    if found is None:
        return None
    value, word = found
    measure = unit(word or default or "s")
    return value * measure.scale if measure is not None and measure.is_time else None


def rate_of(text: str) -> float | None:
    """Samples per second from "1e6", "500 kSa/s", "40000 Hz", "1MS/s"; None where ``text`` is no rate."""
    found = quantity(text)
    if found is None:
        return None
    value, word = found
    if not word:
        return value
    rate = _RATE.fullmatch(word)
    return value * _PREFIXES[rate["prefix"].replace("K", "k")] if rate else None
