"""Text → sheet: every section, every key and every value checked."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from benchfit import circuits
from benchfit.circuits.model import Circuit, Part
from benchfit.errors import QuantityError, SheetError
from benchfit.quantity import Toleranced, parse
from benchfit.sheet.alternatives import check_complete
from benchfit.sheet.model import CaptureChanges, ChannelChoice, Probe, Scope, Sheet
from benchfit.sheet.toml import Source, nearest

SECTIONS = (
    "title", "circuit", "target", "parts", "readings", "channels", "probe", "scope", "record", "capture",
)  # fmt: skip
MEASURED = {"frequency": "Hz", "period": "s", "duty": "1"}

# What a reading without the meter's tolerance is taken to be good for (common practice: handheld meters).
METER = {"Ω": "1 %", "F": "3 %", "V": "1 %", "A": "2 %", "Hz": "0.1 %", "s": "0.1 %"}
# Common practice: ×10 probes and the inputs behind them.
PROBE_RESISTANCE, PROBE_CAPACITANCE = "2 %", "10 %"


def read_sheet(path: str | Path | None, overrides: Sequence[str]) -> Sheet:
    """See :meth:`Sheet.load`."""
    if path is None:
        return parse_sheet("", overrides, "")
    try:
        text = Path(path).read_bytes().decode("utf-8-sig")
    except OSError as error:
        says = f"{path}: the build sheet cannot be read: {error.strerror or error}"
        raise SheetError(says, path=str(path), key="") from None
    except UnicodeDecodeError as error:
        says = f"{path}: the build sheet is not UTF-8 text (byte {error.start}); save it as UTF-8"
        raise SheetError(says, path=str(path), key="") from None
    return parse_sheet(text, overrides, str(path))


def parse_sheet(text: str, overrides: Sequence[str], path: str) -> Sheet:
    """See :meth:`Sheet.parse`."""
    return _Parser(Source(text.lstrip("\ufeff"), overrides, path)).sheet()


class _Parser:
    """Goes through the source section by section."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.fail = source.fail
        self.circuit: Circuit | None = None

    def sheet(self) -> Sheet:
        self.check_keys("", self.source.table, SECTIONS)
        self.circuit = self.named_circuit()
        frequency, duty = self.target()
        parts, absent = self.parts("parts")
        sheet = Sheet(
            title=self.text("title"),
            circuit=self.circuit,
            target_frequency=frequency,
            target_duty=duty,
            parts=parts,
            absent=absent,
            readings=self.readings(absent),
            channels=self.channels("channels"),
            probes={node: probe for node, probe in self.probes("probe").items() if probe is not None},
            scope=self.scope(),
            record=self.record(),
            captures=self.captures(),
            path=self.source.path,
            source=self.source.table,
        )
        if self.circuit is not None:
            check_complete(self.circuit, parts, self.fail)
        return sheet

    # --- plumbing -----------------------------------------------------------------------------------------

    def at(self, key: str) -> Any:
        """What stands at a dotted key; None where nothing does."""
        found: Any = self.source.table
        for word in key.split("."):
            found = found.get(word) if isinstance(found, Mapping) else None
        return found

    def table(self, key: str, known: Iterable[str] | None = None) -> Mapping[str, Any]:
        """The section at a key, empty where it is not there; its keys must be known ones."""
        found = self.at(key)
        if found is None:
            return {}
        if not isinstance(found, Mapping):
            self.fail(key, f"found {_shown(found)} where a section [{key}] was expected")
        if known is not None:
            self.check_keys(key, found, known)
        return found

    def check_keys(self, key: str, table: Mapping[str, Any], known: Iterable[str]) -> None:
        known = tuple(known)
        for word in table:
            if word in known:
                continue
            dotted = f"{key}.{word}" if key else word
            kind = "section or key" if not key else "key"
            hint = f'the nearest known one is "{nearest(word, known)}"' if known else "none is known here"
            also = f" (known: {', '.join(known)})" if 1 < len(known) <= 24 else ""
            self.fail(dotted, f'unknown {kind} "{word}"; {hint}{also}')

    def text(self, key: str) -> str:
        """The text at a key, "" where there is none; a bare number is the text that it is written as."""
        found = self.at(key)
        if isinstance(found, int | float) and not isinstance(found, bool):
            return str(found)
        if found is not None and not isinstance(found, str):
            self.fail(key, f"found {_shown(found)} where a text was expected")
        return found or ""

    def value(self, key: str, unit: str, default: str | None = None) -> Toleranced | None:
        """The value at a key, None where there is none."""
        found = self.at(key)
        if found is None:
            return None
        if isinstance(found, Mapping | list):
            self.fail(key, f"found {_shown(found)} where a value was expected")
        try:
            return parse(found, unit, default_tolerance=default)
        except QuantityError as error:
            self.fail(key, error.says)

    # --- sections -----------------------------------------------------------------------------------------

    def named_circuit(self) -> Circuit | None:
        name = self.text("circuit")
        if not name:
            return None
        try:
            return circuits.get(name)
        except KeyError:
            known = circuits.names()
            hint = f'the nearest known one is "{nearest(name, known)}" (known: {", ".join(known)})'
            self.fail("circuit", f'unknown circuit "{name}"; {hint}')

    def target(self) -> tuple[Toleranced | None, Toleranced | None]:
        table = self.table("target", ("frequency", "period", "duty"))
        if "frequency" in table and "period" in table:
            self.fail("target.period", "give either the frequency or the period, not both")
        frequency = self.positive("target.frequency", self.value("target.frequency", "Hz"))
        period = self.positive("target.period", self.value("target.period", "s"))
        duty = self.value("target.duty", "1")
        if duty is not None and not 0 < duty.nominal < 1:
            says = 'is no duty cycle; write a fraction between 0 and 1, or "97 %"'
            self.fail("target.duty", f"{_shown(table['duty'])} {says}")
        return frequency if period is None else period.reciprocal("Hz"), duty

    def positive(self, key: str, value: Toleranced | None) -> Toleranced | None:
        if value is not None and value.low <= 0:
            self.fail(key, f'"{value.text}" must lie above 0, its lower limit included')
        return value

    def parts(self, section: str, names: Iterable[str] = ()) -> tuple[dict[str, Toleranced], frozenset[str]]:
        """The parts in a section, and those that are "none"; ``names``: of the section's keys only these."""
        table = self.table(section)
        if self.circuit is None:
            for word in names or table:
                self.fail(f"{section}.{word}", "parts are parts of a circuit; say which with circuit = "
                                               f"\"…\" (known: {', '.join(circuits.names())})")  # fmt: skip
            return {}, frozenset()
        if not names:
            self.check_keys(section, table, [p.name for p in self.circuit.parts])
        found: dict[str, Toleranced] = {}
        absent = set()
        for name in names or table:
            part = self.circuit.part(name)
            if _is_none(table[name]):
                self.check_removable(f"{section}.{name}", part)
                absent.add(name)
            else:
                found[name] = self.part(f"{section}.{name}", part, part.tolerance)
        return found, frozenset(absent)

    def check_removable(self, key: str, part: Part) -> None:
        assert self.circuit is not None
        is_choice = any(part.name in names for group in self.circuit.alternatives for names in group)
        if not (part.optional or part.nominal == "absent" or is_choice):
            self.fail(key, f'"none" is for optional parts, and {part.name} ({part.says}) is needed')

    def part(self, key: str, part: Part, default: str) -> Toleranced:
        value = self.value(key, part.unit, default)
        assert value is not None
        is_default = value.nominal > 0 and not value.stated
        where_from = f" (with the tolerance of {default}, taken where none is given)" if is_default else ""
        if part.coordinate in ("log", "inverse") and value.low <= 0:
            self.fail(key, f'"{value.text}" must lie above 0, its lower limit included{where_from}')
        if part.unit in ("Ω", "F", "s") and value.low < 0:
            self.fail(key, f'"{value.text}" must not be negative, its lower limit included{where_from}')
        return value

    def readings(self, absent: frozenset[str]) -> dict[str, Toleranced]:
        known = {**MEASURED, **({p.name: p.unit for p in self.circuit.parts} if self.circuit else {})}
        if self.circuit is None:
            for word in self.table("readings"):
                if word not in MEASURED:
                    self.fail(f"readings.{word}", "a reading of a part needs the circuit that it is part of; "
                                                  'say which with circuit = "…"')  # fmt: skip
        table = self.table("readings", known)
        if "frequency" in table and "period" in table:
            self.fail("readings.period", "give either the frequency or the period that was read, not both")
        found: dict[str, Toleranced] = {}
        for name in table:
            key, unit = f"readings.{name}", known[name]
            if name in absent:
                self.fail(key, f'{name} was read, yet parts.{name} = "none" says that it is not there')
            meter = METER.get(unit, "1 %")
            if name in MEASURED:
                value = self.value(key, unit, meter)
                self.positive(key, value)
            else:
                assert self.circuit is not None
                value = self.part(key, self.circuit.part(name), meter)
            assert value is not None
            found[name] = value
        return found

    def nodes(self, section: str) -> dict[str, Any]:
        """What a section says of each node, by the node's own name."""
        every = [self.circuit] if self.circuit else [circuits.get(name) for name in circuits.names()]
        known = dict.fromkeys(word for c in every for word in (*(n.name for n in c.nodes), *c.aliases))
        found: dict[str, Any] = {}
        for word, says in self.table(section, known).items():
            node = self.circuit.aliases.get(word, word) if self.circuit else word
            if node in found:
                self.fail(f"{section}.{word}", f"{word} is another name of {node}, which is there already")
            found[node] = (f"{section}.{word}", says)
        return found

    def channels(self, section: str) -> dict[str, ChannelChoice]:
        found: dict[str, ChannelChoice] = {}
        for node, (key, choice) in self.nodes(section).items():
            if isinstance(choice, Mapping):
                self.table(key, ("name", "coupling"))
                name, coupling = self.text(f"{key}.name"), self.text(f"{key}.coupling") or "dc"
            else:
                name, coupling = self.text(key), "dc"
            if not name:
                self.fail(key, 'name the channel, for instance "CH1"')
            if coupling not in ("dc", "ac"):
                self.fail(f"{key}.coupling", f'found "{coupling}" where "dc" or "ac" was expected')
            for other, taken in found.items():
                if taken.name == name:
                    self.fail(key, f"{name} is the channel of {other} already; a channel has one node")
            found[node] = ChannelChoice(name, "ac" if coupling == "ac" else "dc")
        return found

    def probes(self, section: str) -> dict[str, Probe | None]:
        found: dict[str, Probe | None] = {}
        for node, (key, probe) in self.nodes(section).items():
            if _is_none(probe):
                found[node] = None
                continue
            table = self.table(key, ("resistance", "capacitance", "scaled", "ratio"))
            scaled = table.get("scaled", True)
            if not isinstance(scaled, bool):
                self.fail(f"{key}.scaled", f"found {_shown(scaled)} where true or false was expected")
            ratio = self.positive(f"{key}.ratio", self.value(f"{key}.ratio", "1"))
            if not scaled and ratio is None:
                self.fail(key, "scaled = false needs the ratio by which to multiply, for instance ratio = 10")
            resistance = self.value(f"{key}.resistance", "Ω", PROBE_RESISTANCE)
            capacitance = self.value(f"{key}.capacitance", "F", PROBE_CAPACITANCE)
            if capacitance is not None and capacitance.low < 0:
                self.fail(f"{key}.capacitance", f'"{capacitance.text}" must not be negative')
            self.positive(f"{key}.resistance", resistance)
            found[node] = Probe(resistance, capacitance, scaled, ratio.nominal if ratio else 1.0)
        return found

    def scope(self) -> Scope:
        table = self.table("scope", ("gain", "offset", "timebase"))

        def limit(name: str, unit: str) -> float | None:
            value = self.value(f"scope.{name}", unit)
            if value is not None and (value.nominal < 0 or value.stated):
                self.fail(f"scope.{name}", f'"{value.text}" must be one limit that is not negative')
            return None if value is None else value.nominal

        gain, timebase, usual = limit("gain", "1"), limit("timebase", "1"), Scope()
        return Scope(
            gain=usual.gain if gain is None else gain,
            offset=limit("offset", "V"),
            timebase=usual.timebase if timebase is None else timebase,
            given=bool(table),
        )

    def record(self) -> dict[str, str]:
        found = {}
        for key, value in self.table("record").items():
            if isinstance(value, Mapping | list):
                self.fail(f"record.{key}", f"found {_shown(value)} where a text was expected")
            found[key] = str(value)
        return found

    def captures(self) -> dict[int, CaptureChanges]:
        found: dict[int, CaptureChanges] = {}
        for number in self.table("capture"):
            key = f"capture.{number}"
            if not (number.isascii() and number.isdigit() and int(number) >= 1):
                self.fail(key, f'"{number}" is no number of a capture; they count from 1, as in [capture.2]')
            names = [p.name for p in self.circuit.parts] if self.circuit else []
            fixed = ("added_C", "added_R", "probe", "channels")
            table = self.table(key, (*fixed, *names))
            changed = [name for name in table if name not in fixed]
            parts, absent = self.parts(key, changed) if changed else ({}, frozenset[str]())
            for name in absent:
                self.fail(f"{key}.{name}", "a part cannot come and go between captures; give a value")
            found[int(number)] = CaptureChanges(
                added_C=self.positive(f"{key}.added_C", self.value(f"{key}.added_C", "F", "5 %")),
                added_R=self.positive(f"{key}.added_R", self.value(f"{key}.added_R", "Ω", "5 %")),
                parts=parts,
                probes=self.probes(f"{key}.probe"),
                channels=self.channels(f"{key}.channels"),
            )
        return found


def _is_none(value: object) -> bool:
    return isinstance(value, str) and value.strip().lower() == "none"


def _shown(value: object) -> str:
    if isinstance(value, Mapping):
        return "a section"
    if isinstance(value, bool):
        return str(value).lower()
    return "a list" if isinstance(value, list) else f'"{value}"' if isinstance(value, str) else str(value)
