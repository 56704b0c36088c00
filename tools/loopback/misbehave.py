"""How the instrument misbehaves: at most one fault an acquisition, drawn by rate, seeded."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

KINDS: dict[str, str] = {
    "late": "a reply comes after the time-out",
    "silent": "a reply never comes",
    "cut": "a block stops half-way",
    "short": "a block is shorter than its header says",
    "long": "a block is longer than its header says",
    "garbage": "random bytes come in place of a reply",
    "closing": "the connection is closed in the middle of a reply",
    "refusing": "the connection is closed, and new ones are refused for a while",
    "slow": "a reply trickles in",
    "error": "the error queue holds an error",
    "left-over": "a reply is followed by one line end too many",
}
IN_A_BLOCK = ("cut", "short", "long")


@dataclass
class Misbehaviour:
    """Draws faults and keeps account of those that were committed.

    ``rates`` maps kinds to probabilities per acquisition (their sum at most 1); ``late_by``, ``refuse_for``
    in s; ``trickle`` in bytes/s. ``committed`` lists (acquisition number, kind).
    """

    rates: Mapping[str, float] = field(default_factory=dict)
    seed: int = 0
    late_by: float = 7.0
    refuse_for: float = 2.0
    trickle: float = 20.0
    committed: list[tuple[int, str]] = field(default_factory=list)

    def __post_init__(self) -> None:
        unknown = set(self.rates) - set(KINDS)
        if unknown:
            raise ValueError(f"no such fault: {', '.join(sorted(unknown))}; there are {', '.join(KINDS)}")
        if sum(self.rates.values()) > 1 + 1e-9:
            raise ValueError("the rates of the faults add up to more than 1")
        self._random = np.random.default_rng(self.seed)
        self._number = 0
        self._planned = ""
        self._wait = 0

    def plan(self, number: int) -> str:
        """Draw for acquisition ``number``; "error" and "refusing" need no reply and are returned at once."""
        draw = float(self._random.random())
        self._number, self._planned = number, ""
        self._wait = int(self._random.integers(0, 4))
        for kind, rate in self.rates.items():
            if draw < rate:
                self._planned = kind
                break
            draw -= rate
        if self._planned in ("error", "refusing"):
            return self._commit()
        return ""

    def forget(self) -> None:
        """Drop what is planned (a new connection was made)."""
        self._planned = ""

    def for_reply(self, is_block: bool) -> str:
        """The fault to commit on this reply, or ""."""
        if not self._planned or (self._planned in IN_A_BLOCK and not is_block):
            return ""
        if self._wait > 0 and not is_block:
            self._wait -= 1
            return ""
        return self._commit()

    def garbage(self) -> bytes:
        """Some random bytes and a line end."""
        size = int(self._random.integers(1, 200))
        return bytes(self._random.integers(0, 256, size, dtype=np.uint8)) + b"\n"

    def _commit(self) -> str:
        kind, self._planned = self._planned, ""
        self.committed.append((self._number, kind))
        return kind


def parse_rates(text: str) -> dict[str, float]:
    """Rates from "late=5%,cut=0.01", or from one number for all kinds together ("5%": all mixed at 5 %)."""
    if "=" not in text:
        return {kind: _share(text) / len(KINDS) for kind in KINDS}
    pairs = (item.split("=", 1) for item in text.split(","))
    return {kind.strip(): _share(rate) for kind, rate in pairs}


def _share(text: str) -> float:
    text = text.strip()
    return float(text[:-1]) / 100.0 if text.endswith("%") else float(text)
