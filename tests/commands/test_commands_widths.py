"""What the real commands print at 60, 80 and 120 columns: whole tables; plain in pipes and with NO_COLOR."""

from __future__ import annotations

import io
import os
import re
import subprocess
import sys
from functools import cache
from pathlib import Path

import pytest

import benchfit
from benchfit.commands.main import main
from benchfit.show.layout import cells
from benchfit.show.text import render

SAMPLES = Path(__file__).resolve().parents[2] / "sample_captures"
WIDTHS = (60, 80, 120)
# One that is passed, one that cannot be settled, one with cautions, one that does not oscillate.
FEW = ("tide_gate_pacer", "hive_scale_clock", "orchard_night_marker", "weir_level_alarm")
REST = sorted({path.stem for path in SAMPLES.glob("*.csv") if path.with_suffix(".toml").exists()} - set(FEW))
SGR = re.compile(r"\x1b\[[0-9;]*m")


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def printed(monkeypatch: pytest.MonkeyPatch, width: int, *words: str) -> str:
    """What a command line prints on a terminal of so many columns."""
    out = Terminal()
    monkeypatch.setenv("COLUMNS", str(width))
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setattr(sys, "stdout", out)
    assert main(words) == 0
    return out.getvalue()


def check(text: str, width: int) -> None:
    """No line is too wide, none ends in blanks, and no cell of a table reaches into its neighbour's column."""
    lines = SGR.sub("", text).splitlines()
    for line in lines:
        assert cells(line) <= width, line
        assert line == line.rstrip(), line
    for head, rows in tables(lines):
        # The rows' own names have no heading.
        columns = len(re.split(r" {2,}", head.strip())) + 1
        assert alleys([head, *rows]) >= columns - 1, "\n".join([head, *rows])


def tables(lines: list[str]) -> list[tuple[str, list[str]]]:
    """Each heading of columns (an indented line of short words far apart) with the rows below it."""
    found = []
    for number, line in enumerate(lines):
        words = re.split(r" {2,}", line.strip())
        if not line.startswith("   ") or len(words) < 2 or re.search(r"\d", line) or line.endswith("."):
            continue
        rows = []
        for row in lines[number + 1 :]:
            if not row.startswith("  ") or not re.search(r"\S {2,}\S", row.strip()) or row.startswith("     "):
                break
            rows.append(row)
        if rows:
            found.append((line, rows))
    return found


def alleys(lines: list[str]) -> int:
    """How many stretches, two blanks wide or more, run down between the words of all lines."""
    width = max(map(len, lines))
    blank = "".join(" " if all(line.ljust(width)[i] == " " for line in lines) else "x" for i in range(width))
    return len(re.findall(r"(?<=x) {2,}(?=x)", blank))


@cache
def explanation(name: str) -> benchfit.pipeline.Explanation:  # type: ignore[name-defined]
    sheet = benchfit.Sheet.load(SAMPLES / f"{name}.toml")
    return benchfit.explain(benchfit.read(SAMPLES / f"{name}.csv"), sheet).explanation


@pytest.mark.parametrize("name", [*FEW, *(pytest.param(name, marks=pytest.mark.long) for name in REST)])
def test_a_report_keeps_its_tables_at_any_width(name):
    """Every sample capture, by the renderer that the command uses."""
    seen = [tables(render(explanation(name), width=width).splitlines()) for width in WIDTHS]
    for width in WIDTHS:
        check(render(explanation(name), width=width), width)
    assert all(seen) or not explanation(name).oscillates


@pytest.mark.parametrize("width", WIDTHS)
def test_the_commands_on_a_terminal(monkeypatch, width):
    """One capture, a lot, a prediction, a circuit, the list of circuits."""
    hive, sheet = str(SAMPLES / "hive_scale_clock.csv"), str(SAMPLES / "hive_scale_clock.toml")
    lot, lot_sheet = str(SAMPLES / "frost_alarm_lot" / "unit_0[1-3].csv"), str(SAMPLES / "frost_alarm_lot.toml")
    one = printed(monkeypatch, width, hive, "--build", sheet)
    assert len(tables(SGR.sub("", one).splitlines())) >= 2
    for text in (
        one,
        printed(monkeypatch, width, lot, "--build", lot_sheet, "-q"),
        printed(monkeypatch, width, "predict", sheet),
        printed(monkeypatch, width, "circuits", "two-transistor"),
        printed(monkeypatch, width, "circuits"),
    ):
        check(text, width)


def test_no_colour_where_none_is_wanted(monkeypatch):
    """The same text with NO_COLOR set, without its colours."""
    words = (str(SAMPLES / "weir_level_alarm.csv"), "--build", str(SAMPLES / "weir_level_alarm.toml"))
    coloured = printed(monkeypatch, 80, *words)
    assert SGR.search(coloured)
    monkeypatch.setenv("NO_COLOR", "1")
    assert printed(monkeypatch, 80, *words) == SGR.sub("", coloured)


def test_a_pipe_gets_plain_text():
    """No colour and no wrapping, even where the terminal behind it could."""
    path = SAMPLES / "tide_gate_pacer.csv"
    run = subprocess.run(
        [sys.executable, "-m", "benchfit", str(path), "--build", str(path.with_suffix(".toml"))],
        capture_output=True, check=True, env={**os.environ, "TERM": "xterm-256color", "COLUMNS": "60"},
    )  # fmt: skip
    text = run.stdout.decode("utf-8")
    assert "\x1b" not in text
    assert text.endswith("\n")
    assert max(map(len, text.splitlines())) > 60
    assert run.stderr == b""


def test_the_check_would_see_a_broken_table():
    """A cell that runs into the next column."""
    whole = ["Parts", "     built  nominal", "  R  10 kΩ    10 kΩ"]
    check("\n".join(whole), 60)
    with pytest.raises(AssertionError):
        check("\n".join([*whole[:2], "  R  10.00 kΩ  10 kΩ"]), 60)
    with pytest.raises(AssertionError):
        check("x" * 61, 60)
