"""How the program starts: what ``--help`` and ``import benchfit`` load, what the library's face offers."""

from __future__ import annotations

import os
import subprocess
import sys

import pytest

import benchfit

HEAVY = {"numpy", "pandas", "scipy", "lmfit", "matplotlib", "pyvisa", "rich", "jinja2", "uncertainties"}


def loaded_by(code: str) -> set[str]:
    """The heavy packages that a fresh interpreter has loaded after running some code."""
    code += f"\nimport sys; print(sorted({HEAVY!r} & set(sys.modules)), file=sys.stderr)"
    run = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, encoding="utf-8", check=True
    )
    return set(eval(run.stderr.splitlines()[-1]))  # a list that we have just printed


@pytest.mark.parametrize("word", ["--help", "--version"])
def test_help_loads_nothing_heavy(word):
    """The overview costs no more than an argument parser."""
    assert loaded_by(f"from benchfit.commands.main import main\nassert main([{word!r}]) == 0") == set()


@pytest.mark.parametrize("command", ["predict", "circuits", "sheet"])
def test_help_of_a_command_loads_nothing_heavy(command):
    """Nor does a command's own."""
    assert loaded_by(f"from benchfit.commands.main import main\nmain([{command!r}, '--help'])") == set()


def test_a_wrong_command_line_loads_nothing_heavy():
    """A slip of the pen is answered at once."""
    code = "from benchfit.commands.main import main\nassert main(['x.csv', '--biuld', 'y']) == 2"
    assert loaded_by(code) == set()


def test_importing_the_library_loads_nothing_heavy():
    """Each name is imported when it is first asked for."""
    assert loaded_by("import benchfit; benchfit.SheetError; dir(benchfit)") == set()


def test_a_sheet_is_read_without_the_fitting_libraries():
    """Reading a sheet needs numpy at most (circuits hold arrays)."""
    assert loaded_by("import benchfit; benchfit.Sheet.parse('title = \"x\"')") <= {"numpy"}


def test_the_face():
    """Everything that is promised is there, and nothing else is listed."""
    for name in benchfit.__all__:
        assert getattr(benchfit, name) is not None
    assert dir(benchfit) == sorted(benchfit.__all__)
    with pytest.raises(AttributeError, match="no attribute 'expain'"):
        benchfit.expain  # noqa: B018


def test_explain_is_called_although_a_room_has_its_name():
    """Importing a module of the room must not take the function's place."""
    import benchfit.explain.result

    assert callable(benchfit.explain)
    assert benchfit.explain.result.Explanation is not None
    with pytest.raises(ValueError, match="needs a capture"):
        benchfit.explain()


def test_module_and_script_are_the_same_program():
    """``python -m benchfit`` speaks as ``benchfit`` does."""
    environment = {**os.environ, "PYTHONIOENCODING": "utf-8"}
    run = subprocess.run(
        [sys.executable, "-m", "benchfit", "--version"],
        capture_output=True,
        text=True,
        env=environment,
        check=True,
    )
    assert run.stdout == f"benchfit {benchfit.__version__}\n"
