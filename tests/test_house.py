"""The rooms' dependency rule, their size, and that nothing outside ``circuits`` knows a circuit by name."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

from benchfit import circuits

REPO = Path(__file__).resolve().parents[1]
PACKAGE = REPO / "benchfit"

# Room → what it may import of the others: a room as a whole, or one module of it. Top to bottom is the way
# the data flow; ``show`` knows results as data, the pipeline's files join the rooms, the commands open doors.
MAY_KNOW = {
    "errors": set(),
    "quantity": {"errors"},
    "capture": {"errors"},
    "instrument": {"errors", "quantity", "capture"},
    "cycle": {"errors", "capture"},
    "circuits": {"errors", "quantity"},
    "sheet": {"errors", "quantity", "circuits"},
    "explain": {"errors", "quantity", "cycle.constants", "circuits", "sheet"},
    "show": {
        "errors", "quantity", "explain.result", "burnin.result", "circuits.model", "cycle.constants",
        "capture.model",
    },
    "assignment": {"errors", "quantity", "capture", "cycle", "circuits", "sheet"},
    "pipeline": {"errors", "capture", "cycle", "circuits", "sheet", "explain", "show", "assignment"},
    "workers": {"errors"},
    "lot": {"errors", "capture", "sheet", "explain.result", "show", "pipeline", "workers"},
    "burnin": {"errors", "quantity", "capture", "instrument", "pipeline"},
    "commands": {
        "errors", "quantity", "capture", "instrument", "cycle", "circuits", "sheet", "explain.result",
        "show", "pipeline", "workers", "lot", "burnin",
    },
    "__init__": {"errors", "capture", "circuits", "sheet", "pipeline", "lot", "show.lot"},
    "__main__": {"commands"},
}  # fmt: skip
FILES = sorted(PACKAGE.rglob("*.py"))


def room_of(path: Path) -> str:
    parts = path.relative_to(PACKAGE).parts
    return parts[0] if len(parts) > 1 else path.stem


def imports(path: Path) -> Iterator[tuple[int, str]]:
    """Line and dotted name (without "benchfit.") of everything of the package that a file imports."""
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        found: list[str] = []
        if isinstance(node, ast.Import):
            found = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative imports hide which room they reach into"
            found = [f"{node.module}.{alias.name}" for alias in node.names]
        for name in found:
            if name.startswith("benchfit."):
                yield node.lineno, name.removeprefix("benchfit.")


def test_a_room_knows_only_what_its_work_needs():
    """Imports go one way through the house."""
    wrong = []
    for path in FILES:
        room = room_of(path)
        assert room in MAY_KNOW, f"{room} is a new room: say in this test what it may know"
        for line, name in imports(path):
            if name.split(".")[0] == room or (room == "commands" and name == "__version__"):
                continue
            if not any(name == known or name.startswith(f"{known}.") for known in MAY_KNOW[room]):
                wrong.append(f"{path.relative_to(REPO)}:{line} imports {name}, which {room} must not know")
    assert not wrong, "\n".join(wrong)


def test_the_rule_is_one_way():
    """No two rooms may know each other."""
    for room, known in MAY_KNOW.items():
        for other in {name.split(".")[0] for name in known}:
            back = {name.split(".")[0] for name in MAY_KNOW[other]}
            assert room not in back, f"{room} and {other} know each other"


def documents(tree: ast.AST) -> set[int]:
    """The docstrings in a tree, by identity."""
    holders = ast.Module | ast.ClassDef | ast.FunctionDef
    bodies = [node.body[0] for node in ast.walk(tree) if isinstance(node, holders) and node.body]
    return {id(first.value) for first in bodies if isinstance(first, ast.Expr)}


def test_no_circuit_is_known_by_name():
    """A new circuit is one new file: no text outside ``circuits`` (docstrings apart) names one."""
    names = re.compile(rf"(?<![\w-])({'|'.join(map(re.escape, circuits.names()))})(?![\w-])")
    wrong = []
    for path in FILES:
        if room_of(path) == "circuits":
            continue
        tree = ast.parse(path.read_text(encoding="utf-8"))
        told = documents(tree)
        for node in ast.walk(tree):
            is_text = isinstance(node, ast.Constant) and isinstance(node.value, str) and id(node) not in told
            if is_text and names.search(node.value):
                wrong.append(f"{path.relative_to(REPO)}:{node.lineno} names {node.value!r}")
    assert not wrong, "\n".join(wrong)


def test_modules_and_functions_are_readable():
    """About 400 lines a module at most; a function fits a screen."""
    wrong = []
    for path in FILES:
        text = path.read_text(encoding="utf-8")
        if len(text.splitlines()) > 420:
            wrong.append(f"{path.relative_to(REPO)} has {len(text.splitlines())} lines")
        for node in ast.walk(ast.parse(text)):
            if isinstance(node, ast.FunctionDef) and (node.end_lineno or 0) - node.lineno >= 75:
                wrong.append(f"{path.relative_to(REPO)}:{node.lineno} {node.name} is longer than a screen")
    assert not wrong, "\n".join(wrong)


def test_the_package_states_its_types():
    """Type checkers of users look for this file."""
    assert (PACKAGE / "py.typed").exists()
