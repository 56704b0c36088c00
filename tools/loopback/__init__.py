"""A bench instrument on loopback: digitises simulated builds, speaks two languages, misbehaves on request."""

from tools.loopback.misbehave import KINDS, Misbehaviour
from tools.loopback.server import LoopbackScope
from tools.loopback.source import CircuitSource, Digitised, PatternSource, Replay, Trimmer

__all__ = [
    "KINDS",
    "CircuitSource",
    "Digitised",
    "LoopbackScope",
    "Misbehaviour",
    "PatternSource",
    "Replay",
    "Trimmer",
]
