"""Settings that stand above or beside a table: the sample interval, the first stamp, names, units."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from benchfit.capture.cells import is_number, kind
from benchfit.capture.units import interval_of, quantity, rate_of, unit

# Between the words of a key stand blanks, underscores, dots or hyphens, or nothing.
_S = r"[ _.-]*"
# "Period", "Frequency" or "Step" alone are of the signal, not of the sampling.
_INTERVAL_KEYS = re.compile(
    rf"sampl\w*{_S}(interval|increment|resolution|step|period|spacing)|interval|incr?|increment"
    rf"|(horizontal|time|record|acquisition){_S}(interval|increment|resolution|step|spacing)"
    rf"|x{_S}(incr?\w*|interval|step|inc)|[dδ∆]{_S}[tx]|delta{_S}[tx]|abtastintervall|zeitintervall"
    rf"|time{_S}(delta|per{_S}(sample|point))|(seconds|s)[ _./-]*(per{_S})?(sample|point)"
    rf"|h(orizontal)?{_S}res(olution)?",
    re.IGNORECASE,
)
_RATE_KEYS = re.compile(
    rf"(sampl\w*|acquisition|acq\w*|daq|adc|data)?{_S}rate|(sampl\w*|acq\w*|daq|adc){_S}freq(uency)?|fs|f_s|sps"
    rf"|abtastrate|abtastfrequenz|samples?[ _./-]*(per{_S})?s(ec(ond)?)?",
    re.IGNORECASE,
)
_START_KEYS = re.compile(
    rf"x{_S}(zero|origin|start|offset)|(start|first){_S}(time|stamp)|t0|start"
    rf"|time{_S}(zero|origin|start|of first sample)",
    re.IGNORECASE,
)
_COUNT_KEYS = re.compile(
    rf"(record|memory){_S}length|(number|no|num){_S}(of)?{_S}(samples|points|rows)|samples|points|data{_S}points"
    r"|nr?_?pts?",
    re.IGNORECASE,
)
_PAIR = re.compile(r"\s*(?P<key>[^:=\t,;]*[^\W\d][^:=\t,;]*?)\s*[:=]\s*(?P<value>\S.*?)?\s*$")


@dataclass(frozen=True)
class Settings:
    """What was written above or beside a table.

    ``pairs`` are (key, its further cells) in the order met. Intervals are in s, None where not given.
    """

    pairs: tuple[tuple[str, tuple[str, ...]], ...]
    interval: float | None
    interval_key: str
    start: float | None
    count: int | None

    def cells(self, *keys: str) -> tuple[str, ...]:
        """Further cells of the first of ``keys`` that is there; empty where none is."""
        for key, cells in self.pairs:
            if _bare(key) in keys:
                return cells
        return ()

    def first(self, *keys: str) -> str:
        """First filled cell of the first of ``keys`` that is there; "" where none is."""
        return next((cell for cell in self.cells(*keys) if cell), "")


def from_lines(lines: Iterable[str], rows: Iterable[Sequence[str]]) -> Settings:
    """Settings from lines above a table: "Key,Value,…", "Key: value" and "Key = value", comments too."""
    pairs: list[tuple[str, tuple[str, ...]]] = []
    for line, row in zip(lines, rows, strict=True):
        row = _setting_cells(line, row)
        filled = [cell for cell in row if cell]
        found = _PAIR.match(line.strip().strip(",;"))
        if found and not _is_clock(line):
            pairs.append((found["key"], (found["value"] or "",)))
        elif len(filled) > 1 and row[0] and not is_number(row[0], "."):
            pairs.append((row[0], tuple(row[1:])))
    return _settled(pairs)


def _setting_cells(line: str, row: Sequence[str]) -> Sequence[str]:
    """Cells of a line of settings, which may have separators where the table has none."""
    if len(row) > 1 and row[0] and not any(mark in row[0] for mark in "\t;,"):
        rest = "".join(row[1:])
        if not any(mark in line for mark in "\t;,") or not any(mark in rest for mark in "\t;,"):
            return row
    for mark in "\t;,":
        if mark in line:
            return [cell.strip().strip('"').strip() for cell in line.split(mark)]
    return row


def from_cells(rows: Iterable[Sequence[str]], columns: Sequence[int], decimal: str) -> Settings:
    """Settings from the cells beside a table: a word, its value in the next of ``columns``."""
    pairs = []
    for row in rows:
        cells = [row[column] if column < len(row) else "" for column in columns]
        place = next((k for k, cell in enumerate(cells) if cell), None)
        if place is not None and kind(cells[place], decimal) != "n":
            pairs.append((cells[place], tuple(cells[place + 1 :])))
    return _settled(pairs)


NOTHING = Settings((), None, "", None, None)


def _settled(pairs: Sequence[tuple[str, tuple[str, ...]]]) -> Settings:
    interval, interval_key = _interval(pairs)
    start = count = None
    for key, cells in pairs:
        value = next((cell for cell in cells if cell), "")
        name = _key(key)
        if start is None and _START_KEYS.fullmatch(name):
            start = interval_of(value, _key_unit(key))
        if (
            count is None
            and _COUNT_KEYS.fullmatch(name)
            and (found := quantity(value))
            and 0 < found[0] < 1e12
        ):
            count = round(found[0])
    return Settings(tuple(pairs), interval, interval_key, start, count)


def _interval(pairs: Sequence[tuple[str, tuple[str, ...]]]) -> tuple[float | None, str]:
    for key, cells in pairs:
        value = next((cell for cell in cells if cell), "")
        if _INTERVAL_KEYS.fullmatch(_key(key)):
            interval = interval_of(value, _key_unit(key))
            if interval is not None and 0 < interval < 1e9:
                return interval, key.strip()
    for key, cells in pairs:
        value = next((cell for cell in cells if cell), "")
        if _RATE_KEYS.fullmatch(_key(key)):
            rate = rate_of(value + _key_unit(key))
            if rate is not None and 1e-9 < rate < 1e15:
                return 1 / rate, key.strip()
    return None, ""


def _bare(key: str) -> str:
    return _key(key).casefold().replace("_", " ").replace("-", " ").strip()


def _key(key: str) -> str:
    return re.sub(r"[\[(].*[\])]", "", key).strip(" :=#\"'")


def _key_unit(key: str) -> str:
    found = re.search(r"[\[(]([^\])]*)[\])]", key)
    return found[1] if found and (unit(found[1]) or rate_of("1" + found[1])) else ""


_CLOCK = re.compile(r"\d{1,2}:\d{2}(:\d{2})?")


def _is_clock(line: str) -> bool:
    """Whether the first colon of a line is one of a time of day rather than that after a key."""
    found = _CLOCK.search(line)
    return found is not None and found.start() <= line.find(":") and "=" not in line[: found.start()]
