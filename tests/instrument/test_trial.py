"""A first try: each step says what it gave; a silent instrument is asked with the usual line ends."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import pytest

from benchfit.instrument import SCPI_1999, Dialect, trial
from tools.loopback import LoopbackScope

Serve = Callable[..., LoopbackScope]


def test_every_step(serve: Serve, named_fields: Dialect) -> None:
    scope = serve()
    for dialect in (SCPI_1999, named_fields):
        steps = list(trial(scope.resource, ["CH1", "CH2"], dialect=dialect))
        assert [step.doing for step in steps] == ["connect", "identify", "settings", "read one capture"]
        assert all(step.worked for step in steps)
        assert "Benchfit,Loopback Scope" in steps[1].says
        assert "1,000 samples" in steps[3].says
        assert "CH2 from" in steps[3].says
        assert steps[3].capture is not None


@pytest.mark.parametrize(
    ("end", "write", "read"),
    [(b"\r", '"\\r"', '"\\r"'), (b"\r\n", '"\\r\\n"', '"\\r\\n"')],
)
def test_the_line_end_that_answers_is_said(serve: Serve, end: bytes, write: str, read: str) -> None:
    scope = serve(line_end=end, reply_end=end)
    steps = list(trial(scope.resource, ["CH1"], dialect=replace(SCPI_1999, timeout=0.3)))
    assert not steps[0].worked
    assert steps[0].error is not None
    assert steps[0].error.facts["kind"] == "timeout"
    assert steps[-1].worked
    assert f"write_termination = {write}, read_termination = {read}" in steps[-1].says
    assert all("brought no answer" in step.says for step in steps[1:-1])
    # The advice must work.
    dialect = replace(SCPI_1999, write_termination=end.decode(), read_termination=end.decode(), timeout=2.0)
    assert all(step.worked for step in trial(scope.resource, ["CH1"], dialect=dialect))


def test_nobody_there(serve: Serve) -> None:
    scope = serve()
    scope.stop()
    steps = list(trial(scope.resource, ["CH1"]))
    assert len(steps) == 1
    assert not steps[0].worked
    assert steps[0].error is not None
    assert steps[0].error.facts["kind"] == "refused"


def test_a_step_that_fails_is_the_last(serve: Serve) -> None:
    scope = serve(rates={"error": 1.0})
    steps = list(trial(scope.resource, ["CH1"]))
    assert [step.worked for step in steps] == [True, True, True, False]
    assert "-222" in steps[-1].says
