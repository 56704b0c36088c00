"""What the README tells people to type works as it says."""

from __future__ import annotations

import re
import shlex
import shutil
from pathlib import Path

import pytest

from benchfit.commands.main import main

REPO = Path(__file__).resolve().parents[2]
README = (REPO / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", README, re.DOTALL)


def commands() -> list[str]:
    """Each line of a shell block that runs the program on files that are there; ``>`` is done by the test."""
    lines = [line for block in blocks("sh") for line in block.splitlines()]
    return [line.replace("python3 tools/run.py", "benchfit") for line in lines if "tools/test.py" not in line]


@pytest.fixture(autouse=True)
def _samples_here(tmp_path: Path) -> None:
    shutil.copytree(REPO / "sample_captures", tmp_path / "sample_captures")


def test_every_command_runs(capsys):
    """In the order in which they stand, since some use what others wrote."""
    offline = [line for line in commands() if line.split()[1] not in ("poll", "burnin", "trend")]
    assert len(offline) >= 6
    for line in offline:
        words, _, target = line.partition(" > ")
        program, *rest = shlex.split(words)
        assert program == "benchfit"
        assert main(rest) == 0, line
        out, err = capsys.readouterr()
        assert err == "", line
        assert out
        if target:
            Path(target.strip()).write_text(out, encoding="utf-8")


def test_the_library_example_runs(capsys):
    """Each line of it."""
    (example, *_) = [block for block in blocks("python") if "benchfit.explain" in block]
    exec(compile(example, "README.md", "exec"), {})
    assert capsys.readouterr().out
    assert Path("hive.png").stat().st_size > 1000


def test_the_options_named_are_the_options_there(capsys):
    """No option is described that the program does not have."""
    assert main(["--help"]) == 0
    out = capsys.readouterr().out
    table = README[README.index("| option | does |") : README.index("Several captures without")]
    for option in set(re.findall(r"`(--?[a-z]+)", table)):
        assert option in out, option
