"""How a file was understood, in a few lines."""

from __future__ import annotations

from benchfit.capture.model import Capture


def describe(capture: Capture) -> list[str]:
    """Lines for a reader who wants to know how ``capture`` was read: encoding, columns, interval, resolution."""
    width = max((len(key) for key in capture.notes), default=0)
    return [capture.path, *(f"  {key:<{width}}  {text}" for key, text in capture.notes.items())]
