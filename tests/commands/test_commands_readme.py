"""What the README tells people to type works as it says."""

from __future__ import annotations

import os
import re
import shlex
import shutil
import subprocess
import sys
from collections.abc import Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from contextlib import contextmanager
from pathlib import Path

import pytest

from benchfit.commands import explainer
from benchfit.commands.main import main

REPO = Path(__file__).resolve().parents[2]
README = (REPO / "README.md").read_text(encoding="utf-8")
INSTRUMENT = re.compile(r"TCPIP::[\d.]+::5025::SOCKET")
BLOCK = re.compile(r"```(\w+)\n(.*?)```", re.DOTALL)


def lines(*languages: str) -> list[str]:
    """Lines of the code blocks in these languages, in the order in which they stand."""
    found = BLOCK.findall(README)
    return [line for language, block in found if language in languages for line in block.splitlines()]


def offline(line: str) -> bool:
    """Whether a line needs no instrument, nor what one measured, and is not the tests themselves."""
    return not INSTRUMENT.search(line) and not re.search(r"tools/test\.py|night\.log", line)


@pytest.fixture(autouse=True)
def _samples_here(tmp_path: Path) -> None:
    shutil.copytree(REPO / "sample_captures", tmp_path / "sample_captures")


@contextmanager
def bench(command: str) -> Iterator[str]:
    """The loopback instrument of a line, on a free port; its resource string."""
    program, *words = shlex.split(command)
    assert program == "python"
    script = str(REPO / words.pop(0))
    with subprocess.Popen(
        [sys.executable, script, *words, "--port", "0"], stdout=subprocess.PIPE, stdin=subprocess.DEVNULL,
        text=True, encoding="utf-8",
    ) as process:  # fmt: skip
        try:
            assert process.stdout is not None
            found = re.match(r"TCPIP::[\d.:]+::SOCKET", process.stdout.readline())
            assert found is not None, command
            yield found[0]
        finally:
            process.kill()


def test_every_command_that_needs_no_instrument_runs(capsys):
    """In the order in which they stand, since some use what others wrote."""
    commands = [line.replace("python3 tools/run.py", "benchfit") for line in lines("sh") if offline(line)]
    assert len(commands) >= 10
    before = set(Path().iterdir())
    for line in commands:
        words, _, target = line.partition(" > ")
        program, *rest = shlex.split(words)
        assert program == "benchfit"
        assert main(rest) == 0, line
        out, err = capsys.readouterr()
        assert err == "", line
        assert out
        if target:
            Path(target.strip()).write_text(out, encoding="utf-8")
    written = {path.name for path in set(Path().iterdir()) - before}
    assert written == {"mine.toml", "found.json", "lot.html", "lot.csv"}


def test_every_command_that_needs_an_instrument_runs(capsys, monkeypatch):
    """On the bench instruments that the README itself starts, a few records each; then the log's trend."""
    monkeypatch.setattr(explainer.Explainer, "_start", in_a_thread)
    benches = [line for line in lines("bash") if "loopback" in line]
    live = [line for line in lines("sh") if INSTRUMENT.search(line)]
    assert len(benches) == 2
    assert {line.split()[1] for line in live} == {"poll", "burnin"}
    assert main(["sheet", "op-amp"]) == 0
    Path("mine.toml").write_text(capsys.readouterr().out, encoding="utf-8")
    for command in benches:
        with bench(command) as resource:
            for line in live:
                if ("burnin" in line) == ("--drift" in command):
                    line = INSTRUMENT.sub(resource, line).replace("--every 60s", "--every 100ms")
                    assert main([*shlex.split(line)[1:], "--count", "2"]) == 0, line
                    assert capsys.readouterr().out, line
    assert "benchfit trend night.log" in lines("sh")
    assert main(["trend", "night.log"]) == 0
    assert capsys.readouterr().out


def in_a_thread(self: explainer.Explainer) -> Executor:
    """A process of its own takes seconds to start."""
    return ThreadPoolExecutor(1)


def test_the_library_examples_run(capsys):
    """Each line of them."""
    examples = [block for language, block in BLOCK.findall(README) if language == "python"]
    assert len(examples) == 2
    for example in examples:
        exec(compile(example, "README.md", "exec"), {})
        assert capsys.readouterr().out
    assert Path("hive.png").stat().st_size > 1000


def test_the_options_named_are_the_options_there(capsys):
    """No option is described that the program does not have, and none of the main job's is left out."""
    assert main(["--help"]) == 0
    there = set(re.findall(r"^  (?:-\w, )?(--[a-z-]+)", capsys.readouterr().out, re.MULTILINE))
    table = README[README.index("| option | does |") : README.index("A capture named")]
    named = set(re.findall(r"`(--[a-z-]+)", table))
    assert named <= there
    assert there - named == {"--verbose", "--quiet", "--version", "--help"}


def test_every_page_that_is_linked_is_there():
    """Links within the project, of all its pages."""
    for page in (REPO / "README.md", REPO / "DEVELOPERS.md", *(REPO / "docs").glob("*.md")):
        for target in re.findall(r"\]\(([^)#]+)\)", page.read_text(encoding="utf-8")):
            assert "://" in target or (page.parent / target).exists(), f"{page.name}: {target}"


def test_nothing_of_this_machine_stands_in_the_pages():
    """A stranger has none of our folders."""
    for page in (REPO / "README.md", REPO / "DEVELOPERS.md", *(REPO / "docs").glob("*.md")):
        assert os.fspath(REPO) not in page.read_text(encoding="utf-8"), page.name
