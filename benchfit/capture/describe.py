"""How a file was understood, in a few lines."""

from __future__ import annotations

from collections.abc import Sequence

from benchfit.capture.evidence import Claim, Family
from benchfit.capture.model import Capture, Channel
from benchfit.capture.page import Page
from benchfit.capture.plan import Plan
from benchfit.capture.source import Source


def describe(capture: Capture) -> list[str]:
    """Lines that say how ``capture`` was read: encoding, layout, columns, units, interval, resolution."""
    width = max((len(key) for key in capture.notes), default=0)
    return [capture.path, *(f"  {key:<{width}}  {text}" for key, text in capture.notes.items())]


def notes_of_file(source: Source, page: Page, family: Family, claim: Claim) -> dict[str, str]:
    """Notes on the bytes and the layout of a file."""
    assert page.dialect is not None
    mark = " with byte order mark" if source.has_bom else ""
    packed = f", compressed with {source.compression}" if source.compression else ""
    decimal = "decimal point" if page.decimal == "." else "decimal comma"
    delimiter = "one column" if len(page.numeric) == 1 else page.dialect.says
    return {
        "encoding": f"{source.encoding.upper()}{mark}, line ends {source.line_end}{packed}",
        "layout": f"{family.name}: {'; '.join(claim.reasons)}; table from line {page.first + 1} on",
        "delimiter": f"{delimiter}, {decimal}",
    }


def notes_of_table(
    plan: Plan, origin: str, interval: float, start: float, channels: Sequence[Channel]
) -> dict[str, str]:
    """Notes on columns, units, time and resolution; ``interval`` and ``start`` in s, ``origin`` in words."""
    columns = [f"{column.name} from column {column.index + 1}" for column in plan.channels]
    if plan.time is not None:
        unit = f" in {plan.time_unit}" if plan.time_unit else ""
        columns.insert(0, f"time from column {plan.time + 1} ({plan.time_name}{unit})")
    dropped = f"; not read: {', '.join(plan.dropped)}" if plan.dropped else ""
    return {
        "columns": ", ".join(columns) + dropped,
        "units": ", ".join(f"{channel.name} in {channel.unit or 'codes'}" for channel in channels),
        "samples": str(channels[0].values.size),
        "interval": f"{interval:.9g} s from {origin}",
        "start": f"{start:.9g} s",
        "resolution": ", ".join(f"{c.name} {c.resolution:.4g} {c.unit}".rstrip() for c in channels),
    }
