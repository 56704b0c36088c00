"""Captures, and how they are read from any scope's CSV."""

from benchfit.capture.model import Capture, Channel

__all__ = ["Capture", "Channel"]
