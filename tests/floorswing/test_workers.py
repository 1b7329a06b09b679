"""Worker processes: watched, bounded, gone with the process that started them."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from floorswing.workers import WorkerDied, run_in_workers

Tell = Callable[[float], None]


def double(job: int, tell: Tell) -> tuple[int, int]:
    tell(0.5)
    return 2 * job, os.getpid()


def die_on_two(job: int, tell: Tell) -> int:
    if job == 2:
        os.kill(os.getpid(), signal.SIGKILL)
    if job == 3:
        sys.stdout.write("what a library prints is no answer\n")
        sys.stdout.flush()
    return job


def end_on_one(job: int, tell: Tell) -> int:
    if job == 1:
        os._exit(7)
    return job


def refuse(job: int, tell: Tell) -> int:
    raise ZeroDivisionError(f"job {job}")


class Twisted(Exception):
    def __init__(self, message: str, *, number: int) -> None:
        super().__init__(message)
        self.number = number


def refuse_twisted(job: int, tell: Tell) -> int:
    raise Twisted("cannot be read back", number=job)


def sleep_and_write(job: str, tell: Tell) -> None:
    tell(0.0)
    time.sleep(30.0)
    Path(job).write_text("late")


def test_every_job_is_done_once_and_progress_is_told():
    told: list[tuple[int, float]] = []
    outcomes = dict(run_in_workers(double, range(6), 2, lambda number, share: told.append((number, share))))
    assert {number: value for number, (value, _) in outcomes.items()} == {n: 2 * n for n in range(6)}
    assert len({process for _, process in outcomes.values()} | {os.getpid()}) <= 3
    assert {number for number, _ in told} == set(range(6))


@pytest.mark.skipif(os.name == "nt", reason="there is no such signal")
def test_a_killed_worker_fails_its_job_alone():
    outcomes = dict(run_in_workers(die_on_two, range(5), 1))
    assert isinstance(outcomes[2], WorkerDied)
    assert "SIGKILL" in str(outcomes[2])
    assert {n: outcomes[n] for n in (0, 1, 3, 4)} == {0: 0, 1: 1, 3: 3, 4: 4}


def test_a_worker_that_ends_itself_fails_its_job_alone():
    outcomes = dict(run_in_workers(end_on_one, range(3), 1))
    assert "code 7" in str(outcomes[1])
    assert (outcomes[0], outcomes[2]) == (0, 2)


def test_an_exception_is_an_outcome_even_one_that_cannot_be_read_back():
    ((_, outcome),) = run_in_workers(refuse, [4], 1)
    assert isinstance(outcome, ZeroDivisionError)
    ((_, outcome),) = run_in_workers(refuse_twisted, [4], 1)
    assert isinstance(outcome, RuntimeError)
    assert "cannot be read back" in str(outcome)


def interrupt(number: int, share: float) -> None:
    raise KeyboardInterrupt


def test_leaving_early_ends_the_workers_at_once(tmp_path: Path):
    started_s = time.monotonic()
    with pytest.raises(KeyboardInterrupt):
        list(run_in_workers(sleep_and_write, [str(tmp_path / "late")], 1, interrupt))
    assert time.monotonic() - started_s < 20.0
    assert not (tmp_path / "late").exists()


def alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    return "zombie" not in Path(f"/proc/{process}/status").read_text(errors="replace")


def say_and_sleep(job: str, tell: Tell) -> None:
    Path(job).write_text(str(os.getpid()))
    time.sleep(60.0)


@pytest.mark.skipif(sys.platform != "linux", reason="looks into /proc")
def test_workers_end_when_the_process_that_started_them_is_killed(tmp_path: Path):
    said = tmp_path / "said"
    code = (
        "import sys\n"
        "from floorswing.workers import run_in_workers\n"
        "from tests.floorswing.test_workers import say_and_sleep\n"
        "list(run_in_workers(say_and_sleep, [sys.argv[1]], 1))\n"
    )
    root = Path(__file__).resolve().parent.parent.parent
    parent = subprocess.Popen([sys.executable, "-c", code, str(said)], cwd=root)
    try:
        worker = int(wait_for(lambda: said.exists() and said.read_text()))
    finally:
        parent.kill()
        parent.wait()
    wait_for(lambda: not alive(worker))


def wait_for(condition: Callable[[], object], seconds: float = 20.0) -> str:
    until_s = time.monotonic() + seconds
    while time.monotonic() < until_s:
        if found := condition():
            return str(found)
        time.sleep(0.05)
    pytest.fail("it did not happen")
