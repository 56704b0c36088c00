"""What of a file could not be used: said in remarks, or refused where it is too much."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from benchfit.capture.model import Channel
from benchfit.capture.page import Page
from benchfit.capture.table import Table
from benchfit.errors import CaptureError, Remark

# Above this share of rows that do not fit, a file is not damaged but misunderstood.
_MOST_LEFT_OUT = 0.1
# Below this share of the samples that a file announces, rows are missing rather than counted differently.
_FEWEST_OF_ANNOUNCED = 0.98


def check_fit(table: Table, page: Page, refusal: Callable[[str], CaptureError]) -> None:
    """Refuse a file of which too much does not fit the table that was seen in it."""
    if not table.rows:
        raise refusal("has no complete row of numbers; save the capture again")
    lines = table.rows + table.left_out
    if table.left_out > max(3, _MOST_LEFT_OUT * lines):
        is_comma = page.dialect is not None and page.dialect.delimiter == ","
        why = " (decimal commas without quotes in a comma-separated file?)" if is_comma else ""
        says = f"{table.left_out} of {lines} rows do not have the cells that the others have{why}"
        raise refusal(f"{says}, first {table.example}; export it anew")
    if table.unread > max(3, _MOST_LEFT_OUT * table.rows):
        says = f"{table.unread} cells among {table.rows} rows are no numbers"
        raise refusal(f"{says}, first {table.example}; export it anew")


def damage(table: Table, fault: str, announced: int | None) -> tuple[Remark, ...]:
    """Remarks on what was left out of a table.

    ``fault`` is why a compressed file ended early, ``announced`` how many samples its settings promise.
    """
    said = []
    if table.left_out:
        said.append(f"{table.left_out} rows that are no rows of the table were left out, first {table.example}.")
    if table.unread:
        cells = f"{table.unread} cells that are no numbers"
        said.append(f"{cells} were left without a value, first {table.example}.")
    if table.cut:
        said.append("The last row is cut off in the middle and was left out.")
    if inner := [text for row, text in table.breaks if 0 < row < table.rows]:
        said.append(f'{len(inner)} lines of text between the rows were passed over, first "{inner[0][:40]}".')
    if fault:
        said.append(f"The compressed file is damaged ({fault}); it was read as far as it could be unpacked.")
    if announced is not None and table.rows < _FEWEST_OF_ANNOUNCED * announced and not said:
        says = f"The file announces {announced} samples and holds {table.rows} rows; it may be cut."
        return (Remark("cut-short", says),)
    return tuple(Remark("damaged", says) for says in said)


def missing(channels: Sequence[Channel]) -> tuple[Remark, ...]:
    """Remarks on samples out of range and samples without a value."""
    remarks = []
    for channel in channels:
        over = int(np.count_nonzero(channel.overloaded)) if channel.overloaded is not None else 0
        empty = int(np.count_nonzero(np.isnan(channel.values))) - over
        if over:
            says = f"{channel.name}: {over} samples are marked as out of range by the instrument."
            remarks.append(Remark("clipped", says))
        if empty > 0:
            remarks.append(Remark("empty-cells", f"{channel.name}: {empty} samples have no value."))
    return tuple(remarks)
