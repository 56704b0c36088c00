"""Tasks on processes and executors: results in order, no more drawn than need be, a death costs only time."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from concurrent.futures import BrokenExecutor, Executor, Future, ThreadPoolExecutor
from pathlib import Path

import pytest

from benchfit import workers
from benchfit.errors import UsageError


def double(x: int) -> int:
    return 2 * x


def deadly(task: tuple[int, str]) -> int:
    """Dies on a task whose file is there: once (it is taken away first), or always where it is a folder."""
    number, mark = task
    path = Path(mark)
    if path.is_dir():
        os._exit(1)
    if path.exists():
        path.unlink()
        os._exit(1)
    return number


def one_thread(_: int) -> str | None:
    return os.environ.get("OPENBLAS_NUM_THREADS")


def nothing() -> None:
    """What a process needs to do first here."""


def die() -> None:
    os._exit(1)


def lost(task: object, error: BaseException) -> int:
    return -1


def test_one_job_is_this_process():
    """Nothing is started, and each task is drawn when its result is asked for."""
    drawn: list[int] = []

    def tasks() -> Iterator[int]:
        for x in range(5):
            drawn.append(x)
            yield x

    results = workers.in_processes(double, tasks(), 1, die, lost)
    assert next(results) == 0
    assert drawn == [0]
    assert list(results) == [2, 4, 6, 8]


def test_results_come_in_the_tasks_order_and_few_tasks_wait():
    """The first task is the slowest; meanwhile no more are drawn than may be under way."""
    gate, drawn = threading.Event(), []

    def slow_first(x: int) -> int:
        if x == 0:
            gate.wait(10)
        return x

    def tasks() -> Iterator[int]:
        for x in range(100):
            drawn.append(x)
            if len(drawn) == 7:
                gate.set()
            yield x

    with ThreadPoolExecutor(2) as executor:
        for number, result in enumerate(workers.through(slow_first, tasks(), executor, lost, ahead=7)):
            assert result == number
            assert len(drawn) <= number + 8
    assert len(drawn) == 100


def test_a_task_that_raises_is_lost_alone():
    """Also where the executor itself fails."""

    class Sour(Executor):
        def submit(self, work, x):  # type: ignore[no-untyped-def,override]
            future: Future[int] = Future()
            if x == 1:
                future.set_exception(OSError("no"))
            elif x == 2:
                raise BrokenExecutor
            else:
                future.set_result(work(x))
            return future

    assert list(workers.through(double, range(5), Sour(), lost)) == [0, -1, -1, 6, 8]


def test_a_death_costs_only_time(tmp_path):
    """The process that dies in the middle is replaced, and every task is done."""
    mark = tmp_path / "mark"
    mark.touch()
    tasks = [(x, str(mark) if x == 5 else str(tmp_path / "none")) for x in range(20)]
    assert list(workers.in_processes(deadly, tasks, 2, nothing, lost)) == list(range(20))
    assert not mark.exists()


@pytest.mark.long
def test_a_task_that_kills_whoever_does_it_is_lost_alone(tmp_path):
    """The others that were under way with it are done again, and the rest too."""
    tasks = [(x, str(tmp_path) if x in (3, 4, 18) else str(tmp_path / "none")) for x in range(30)]
    expected = [-1 if x in (3, 4, 18) else x for x in range(30)]
    assert list(workers.in_processes(deadly, tasks, 2, nothing, lost)) == expected


def test_processes_that_cannot_start_are_said_so():
    """One sentence, where every process dies at once."""
    with pytest.raises(UsageError, match=r"no process to work with can be started .*__main__"):
        list(workers.in_processes(double, [1], 2, die, lost))


@pytest.mark.long
def test_processes_leave_the_processors_to_each_other(monkeypatch):
    """One thread each for linear algebra; what is set here stays as it was."""
    monkeypatch.setenv("OPENBLAS_NUM_THREADS", "7")
    assert set(workers.in_processes(one_thread, range(4), 2, nothing, lost)) == {"1"}
    assert os.environ["OPENBLAS_NUM_THREADS"] == "7"


def test_stopping_early_lets_go(tmp_path):
    """Whoever has seen enough need not wait for the rest."""
    results = workers.in_processes(double, iter(range(10**9)), 2, nothing, lost)
    assert [next(results) for _ in range(3)] == [0, 2, 4]
    results.close()


@pytest.mark.skipif(os.name == "nt", reason="no signals to a group of processes here")
def test_an_interruption_ends_everybody_quietly(tmp_path):
    """Ctrl-C on a terminal reaches every process: one line, no traceback, nobody left behind."""
    script = tmp_path / "interrupted.py"
    script.write_text(
        "import os, time\nfrom benchfit import workers\n"
        "def work(x):\n    time.sleep(0.05)\n    return os.getpid()\n"
        "def nothing():\n    pass\n"
        "if __name__ == '__main__':\n"
        "    try:\n"
        "        for pid in workers.in_processes(work, range(10**6), 2, nothing, lambda t, e: -1):\n"
        "            print(pid, flush=True)\n"
        "    except KeyboardInterrupt:\n"
        "        print('interrupted', flush=True)\n"
    )
    with subprocess.Popen(
        [sys.executable, str(script)], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        start_new_session=True, env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[1])},
    ) as process:  # fmt: skip
        assert process.stdout is not None
        pids = {int(process.stdout.readline()) for _ in range(20)}
        os.killpg(process.pid, signal.SIGINT)
        out, err = process.communicate(timeout=60)
    assert out.splitlines()[-1] == "interrupted"
    assert err == ""
    deadline = time.monotonic() + 10
    while any(is_running(pid) for pid in pids):
        assert time.monotonic() < deadline
        time.sleep(0.05)


def is_running(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    # One that has ended stands in the list of processes until whoever adopted it looks.
    return subprocess.run(["ps", "-o", "stat=", "-p", str(pid)], capture_output=True, text=True,
                          check=False).stdout.strip()[:1] not in ("", "Z")  # fmt: skip
