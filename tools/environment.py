"""The project's virtual environment: made when need be, installed into when ``pyproject.toml`` has changed.

Standard library only: this runs before anything is installed.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

REPO = Path(__file__).resolve().parents[1]
VENV = REPO / ".venv"
STAMP = VENV / "benchfit-installed.json"


def python() -> Path:
    """The interpreter of the environment, whether it exists or not."""
    return VENV / "Scripts" / "python.exe" if os.name == "nt" else VENV / "bin" / "python"


def ensure(extra: str = "") -> Path:
    """The interpreter of an environment that has benchfit, with ``extra`` ("dev") if one is named.

    What is done is said on standard error, so that standard output stays the program's own. Ends the process
    with one sentence where a step fails.
    """
    if sys.version_info < (3, 11):  # noqa: UP036 (what starts this may be older than what the project needs)
        sys.exit(f"benchfit needs Python 3.11 or newer; this is {sys.version.split()[0]}")
    if not python().exists():
        _say(f"making {VENV.name}")
        uv = shutil.which("uv")
        with_uv = [str(uv), "venv", "-q", "--python", sys.executable, str(VENV)]
        _run(with_uv if uv else [sys.executable, "-m", "venv", str(VENV)])
    digest, extras = _state()
    if digest != _digest() or extra not in extras:
        # What was there before stays up to date as well.
        extras = sorted({"", extra, *extras})
        _install(",".join(name for name in extras if name))
        STAMP.write_text(json.dumps({"pyproject": _digest(), "extras": extras}))
    return python()


def start(words: Sequence[str]) -> int:
    """Run the environment's interpreter with these words; its exit status."""
    with subprocess.Popen([str(python()), *words], cwd=None) as process:
        while True:
            try:
                return process.wait()
            except KeyboardInterrupt:
                # The program itself ends in order on Ctrl-C; leaving first would cut it short.
                continue


def _install(extras: str) -> None:
    target = f"{REPO}[{extras}]" if extras else str(REPO)
    uv = shutil.which("uv")
    what = f"installing benchfit{f' [{extras}]' if extras else ''}"
    if uv:
        _say(f"{what} with uv")
        _run([uv, "pip", "install", "-q", "--python", str(python()), "-e", target])
        return
    _say(f"{what} with pip; the first time this takes a minute or so")
    pip = [str(python()), "-m", "pip"]
    if subprocess.run([*pip, "--version"], capture_output=True).returncode:
        _run([str(python()), "-m", "ensurepip"])
    _run([*pip, "install", "-q", "--disable-pip-version-check", "--root-user-action=ignore", "-e", target])


def _state() -> tuple[str, list[str]]:
    """What was installed last: the digest of pyproject.toml then, and the extras ("" the package itself)."""
    try:
        found = json.loads(STAMP.read_text())
        return str(found["pyproject"]), [str(extra) for extra in found["extras"]]
    except (OSError, ValueError, KeyError, TypeError):
        return "", []


def _digest() -> str:
    return hashlib.sha256((REPO / "pyproject.toml").read_bytes()).hexdigest()


def _run(words: Sequence[str]) -> None:
    # Output of the installers is talk: standard output belongs to the program that is about to run.
    status = subprocess.run(words, stdout=sys.stderr).returncode
    if status:
        sys.exit(f"setting up failed at: {' '.join(words)} (status {status}); its own words stand above")


def _say(text: str) -> None:
    print(f"benchfit: {text}", file=sys.stderr, flush=True)
