"""Captures, and how they are read from any scope's CSV."""

from benchfit.capture.describe import describe
from benchfit.capture.model import Capture, Channel
from benchfit.capture.read import read

__all__ = ["Capture", "Channel", "describe", "read"]
