"""A loopback instrument for the tests: real sockets on 127.0.0.1, in threads of this process."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from benchfit.instrument import Dialect
from tools.loopback import LoopbackScope, Misbehaviour, PatternSource

DIALECT_FILE = Path(__file__).parents[2] / "tools" / "loopback_dialect.toml"


@pytest.fixture
def named_fields() -> Dialect:
    """The dialect that the loopback instrument speaks beside SCPI-1999."""
    return Dialect.load(DIALECT_FILE)


@pytest.fixture
def serve() -> Iterator[Callable[..., LoopbackScope]]:
    """Starts loopback instruments; they are stopped at the end of the test."""
    running: list[LoopbackScope] = []

    def start(source: object = None, **options: object) -> LoopbackScope:
        rates = options.pop("rates", None)
        if rates is not None:
            options["misbehaviour"] = Misbehaviour(rates, **options.pop("misbehave", {}))  # type: ignore[arg-type]
        scope = LoopbackScope(source or PatternSource(), **options).start()  # type: ignore[arg-type]
        running.append(scope)
        return scope

    yield start
    for scope in running:
        scope.stop()
