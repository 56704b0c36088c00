"""Shell completion: bash itself is asked; zsh too where it is there."""

from __future__ import annotations

import os
import re
import select
import shutil
import subprocess
from pathlib import Path

import pytest

from benchfit import circuits
from benchfit.commands.main import COMMANDS, main

BASH = shutil.which("bash")
ZSH = shutil.which("zsh")
bash = pytest.mark.skipif(BASH is None or os.name == "nt", reason="no bash on this machine to ask")


@pytest.fixture
def script(capsys: pytest.CaptureFixture[str]) -> str:
    assert main(["--completion", "bash"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    return out


@pytest.fixture
def complete(script: str) -> object:
    """What bash offers for the last of some words, through the function that ``complete`` names."""

    def offered(*words: str) -> list[str]:
        asked = (
            f'{script}\nCOMP_WORDS=(benchfit "$@"); COMP_CWORD=$#\n'
            '[[ $(complete -p benchfit) == "complete -F _benchfit benchfit" ]] || exit 9\n'
            '_benchfit; for one in "${COMPREPLY[@]}"; do echo "$one"; done'
        )
        run = subprocess.run(
            [str(BASH), "--norc", "-c", asked, "bash", *words], capture_output=True, text=True, check=True
        )
        assert run.stderr == ""
        return run.stdout.splitlines()

    return offered


@bash
def test_options_and_commands(complete):
    """Of the main job and of each command its own."""
    assert complete("--bui") == ["--build"]
    assert complete("pre") == ["predict"]
    assert set(complete("")) >= set(COMMANDS)
    assert complete("-v", "bur") == ["burnin"]
    assert complete("a.csv", "pre") == []
    for name in COMMANDS:
        assert "--help" in complete(name, "--h"), name
    assert complete("burnin", "--on-") == ["--on-alarm"]
    assert "--joint" not in complete("burnin", "--")
    assert set(complete("--")) == set(re.findall(r"--[a-z-]+", help_text()))


def help_text() -> str:
    import contextlib
    import io

    out = io.StringIO()
    with contextlib.redirect_stdout(out):
        main(["--help"])
    # The options as they are listed, not those that the text merely mentions.
    return "\n".join(re.findall(r"^  (?:-\w, )?--[a-z-]+", out.getvalue(), re.MULTILINE))


@bash
def test_values(complete):
    """Choices, circuits, files; where nothing can be known, nothing is offered."""
    assert complete("burnin", "--keep", "a") == ["all", "alarms"]
    assert complete("--completion", "") == ["bash", "zsh"]
    assert set(complete("sheet", "")) == set(complete("circuits", "")) == set(circuits.names())
    Path("one.toml").touch()
    Path("two words.csv").touch()
    Path("folder").mkdir()
    assert sorted(complete("a.csv", "--build", "")) == ["folder", "one.toml"]
    assert sorted(complete("--json", "")) == ["folder", "one.toml", "two words.csv"]
    assert complete("two") == ["two words.csv"]
    assert complete("predict", "o") == ["one.toml"]
    assert complete("--jobs", "") == []
    assert complete("--set", "") == []


@bash
def test_a_line_is_completed_as_it_is_typed(script):
    """An interactive bash, with a tabulator pressed: it types the rest, a file's space quoted."""
    pty = pytest.importorskip("pty")
    Path("c.bash").write_text(script)
    Path("two words.csv").touch()
    terminal, other = pty.openpty()
    shell = subprocess.Popen(
        [str(BASH), "--norc", "--noprofile", "-i"], stdin=other, stdout=other, stderr=other,
        start_new_session=True, env={**os.environ, "TERM": "dumb"},
    )  # fmt: skip
    os.close(other)
    os.write(terminal, b"PS1=; source ./c.bash; benchfit() { printf '<%s>' \"$@\"; echo; }; echo re'ady'\n")
    said = until(terminal, b"ready")
    assert b"command not found" not in said
    os.write(terminal, b"benchfit two\t --bu\tx; exit\n")
    said = until(terminal, b"<x>")
    assert b"<two words.csv><--build><x>" in said
    shell.wait(30)
    os.close(terminal)


def until(terminal: int, wanted: bytes) -> bytes:
    """What comes from a terminal until it holds a text."""
    said = b""
    while wanted not in said:
        ready, _, _ = select.select([terminal], [], [], 30)
        assert ready, said
        said += os.read(terminal, 4096)
    return said


def test_the_scripts_name_everything(capsys):
    """Each command with each of its options stands in both; nothing is told twice to keep."""
    for shell in ("bash", "zsh"):
        assert main(["--completion", shell]) == 0
        text = capsys.readouterr().out
        for name in COMMANDS:
            assert re.search(rf"\b{name}\b", text), (shell, name)
        for option in ("--as-found", "--on-alarm", "--give-up", "--cluster", "--upgrade"):
            assert option in text, (shell, option)
    assert main(["--completion", "fish"]) == 2
    assert "invalid choice: 'fish'" in capsys.readouterr().err


def test_zsh_quotes_what_would_have_a_meaning(capsys):
    """Brackets and colons of a description are escaped, a quote is closed and opened again."""
    main(["--completion", "zsh"])
    text = capsys.readouterr().out
    specs = re.findall(r"^ +'(\*.*?)'(?: \\)?$", text, re.MULTILINE)
    assert len(specs) > 60
    for spec in specs:
        inner = re.sub(r"\\.", "", spec.replace("'\\''", ""))
        assert "'" not in inner
        assert re.fullmatch(r"\*-[\w-]+\[[^\[\]]*\](:[^:]+:.+)?|\*:[^:]+:.+", inner), spec


@pytest.mark.skipif(ZSH is None, reason="no zsh on this machine to ask")
def test_zsh_reads_it(capsys, tmp_path):
    """No syntax error."""
    main(["--completion", "zsh"])
    path = tmp_path / "_benchfit"
    path.write_text(capsys.readouterr().out)
    assert subprocess.run([str(ZSH), "-n", str(path)], capture_output=True, check=False).stderr == b""
