"""docs/messages.md names every code that the program can say, and none that it cannot."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

from benchfit.instrument.faults import KINDS

REPO = Path(__file__).resolve().parents[1]
PACKAGE = REPO / "benchfit"
PAGE = (REPO / "docs" / "messages.md").read_text(encoding="utf-8")


def constants(node: ast.expr | None) -> Iterator[str]:
    """The texts that an expression may be: itself, or either side of a condition."""
    if isinstance(node, ast.Constant) and isinstance(node.value, str):
        yield node.value
    elif isinstance(node, ast.IfExp):
        yield from constants(node.body)
        yield from constants(node.orelse)


def said_in(tree: ast.AST) -> Iterator[str]:
    """Codes of Remark(code, …), of a name ``code`` that is passed on, and of a circuit's ``remarks``."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Call) and getattr(node.func, "id", getattr(node.func, "attr", "")) == "Remark":
            assert node.args or node.keywords
            yield from constants(node.args[0] if node.args else node.keywords[0].value)
        elif isinstance(node, ast.Assign) and [getattr(t, "id", "") for t in node.targets] == ["code"]:
            yield from constants(node.value)
        elif isinstance(node, ast.keyword) and node.arg == "remarks" and isinstance(node.value, ast.Tuple):
            for entry in node.value.elts:
                if isinstance(entry, ast.Tuple):
                    yield from constants(entry.elts[0])


def codes() -> set[str]:
    found: set[str] = set()
    for path in PACKAGE.rglob("*.py"):
        found.update(said_in(ast.parse(path.read_text(encoding="utf-8"))))
    return found


def rows(heading: str) -> list[list[str]]:
    """Cells of the table's rows beneath a heading."""
    section = PAGE[PAGE.index(heading) :].split("\n## ")[0]
    lines = [line for line in section.splitlines() if line.startswith("| ")]
    return [[cell.strip() for cell in line.strip("|").split(" | ")] for line in lines[2:]]


def test_every_warning_has_its_row():
    """What can be said is in one of the tables, once, with what it means and what to do."""
    listed = [row for heading in ("## Warnings: reading", "## Warnings: the waveform", "## Warnings: the build")
              for row in rows(heading)]  # fmt: skip
    names = [row[0] for row in listed]
    assert sorted(names) == sorted(codes())
    assert all(len(row) == 3 and all(row) for row in listed)


def test_the_tables_are_in_order():
    for heading in ("## Warnings: reading", "## Warnings: the waveform", "## Warnings: the build"):
        names = [row[0] for row in rows(heading)]
        assert names == sorted(names)


def test_the_codes_are_found():
    """The search sees what is plainly there: a plain call, a condition's side, a circuit's own."""
    assert {"hazard", "layout-guessed", "latch-up", "no-oscillation", "breakdown", "fast"} <= codes()


def test_every_kind_of_instrument_error_has_its_row():
    assert [row[0] for row in rows("## Errors of an instrument")] == list(KINDS)


def test_every_exit_status_has_its_row():
    statuses = {row[0] for row in rows("## Errors, by exit status")}
    assert statuses == {"2", "3", "4", "5"}
    assert all(re.fullmatch(r"[2-5]", row[0]) and len(row) == 4 for row in rows("## Errors, by exit status"))
