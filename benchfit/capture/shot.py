"""One shot that an instrument split over several files -> one Capture."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from benchfit.capture.model import Capture, Channel
from benchfit.errors import CaptureError

_DEFAULT_NAME = re.compile(r"CH\d+")


def merged(first: Capture, others: Sequence[Capture]) -> Capture:
    """The captures as one, with the channels of all.

    Raises CaptureError where their time axes differ, and says how.
    """
    channels = list(first.channels)
    for other in others:
        _check_axes(first, other)
        for channel in other.channels:
            channels.append(replace(channel, name=_free_name(channel, channels, other.path)))
    warnings = list(first.warnings)
    for other in others:
        warnings += [remark for remark in other.warnings if remark not in warnings]
    notes = dict(first.notes)
    for other in others:
        notes.update({f"{key} of {Path(other.path).name}": text for key, text in other.notes.items()})
    return replace(first, channels=tuple(channels), warnings=tuple(warnings), notes=notes)


def _check_axes(first: Capture, other: Capture) -> None:
    what = ""
    if first.samples != other.samples:
        what = f"{first.samples} samples there, {other.samples} here"
    elif abs(first.interval - other.interval) * first.samples > 0.5 * first.interval:
        what = f"{first.interval:.9g} s between samples there, {other.interval:.9g} s here"
    elif abs(first.start - other.start) > 0.5 * first.interval:
        what = f"the first sample at {first.start:.9g} s there, at {other.start:.9g} s here"
    if what:
        raise CaptureError(f"{other.path}: is not of the same shot as {first.path}: {what}.", path=other.path)


def _free_name(channel: Channel, taken: Sequence[Channel], path: str) -> str:
    names = {other.name for other in taken}
    if channel.name not in names:
        return channel.name
    if _DEFAULT_NAME.fullmatch(channel.name):
        return next(f"CH{k}" for k in range(1, len(names) + 2) if f"CH{k}" not in names)
    name, count = f"{channel.name} ({Path(path).stem})", 2
    while name in names:
        name, count = f"{channel.name} ({Path(path).stem} {count})", count + 1
    return name
