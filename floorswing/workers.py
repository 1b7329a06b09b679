"""Work done by several processes, each watched: one that dies takes only its present piece of work with it.

A worker is ``python -m floorswing.worker_process``: pickled work goes to its standard input, pickled answers come
from its standard output. It holds one piece of work at a time, so memory is bounded by the number of workers, and it
ends by itself as soon as its input closes, which the operating system sees to however this process ends.
"""

from __future__ import annotations

import contextlib
import os
import pickle
import queue
import signal
import subprocess
import sys
import threading
from collections.abc import Callable, Iterable, Iterator
from typing import Any

from floorswing.errors import FloorswingError

Tell = Callable[[float], None]
Task = Callable[[Any, Tell], Any]
"""Does one piece of work, telling now and then which fraction of it is done; must be importable by name."""

ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")

LOOK_S = 1.0
"""How often a wait is broken off, so that an interruption is noticed on every system."""


class WorkerDied(FloorswingError):
    """A worker process ended in the middle of its work."""


def run_in_workers(
    task: Task, jobs: Iterable[Any], n_workers: int, tell: Callable[[int, float], None] | None = None
) -> Iterator[tuple[int, Any]]:
    """Yield the number of each job and its outcome, in the order in which they are finished.

    Parameters
    ----------
    task : callable
        Called as ``task(job, tell)`` in a worker.
    jobs : iterable
        What can be pickled.
    n_workers : int
        Processes at a time.
    tell : callable, optional
        Called, in this thread, with the number of a job and the fraction of it that is done.

    Yields
    ------
    int, object
        What the task returned; `WorkerDied` where its process ended; the exception where the task raised one.
    """
    crew = _Crew(task, jobs, n_workers)
    try:
        yield from crew.outcomes(tell)
    finally:
        crew.stop()


class _Crew:
    """The workers, a thread of this process for each, and what they have to say."""

    def __init__(self, task: Task, jobs: Iterable[Any], n_workers: int) -> None:
        self._task = task
        self._jobs = enumerate(jobs)
        self._lock = threading.Lock()
        self._said: queue.Queue[tuple[str, int, Any]] = queue.Queue(maxsize=2 * n_workers)
        self._stopped = threading.Event()
        self._workers: set[_Worker] = set()
        self._threads = [threading.Thread(target=self._tend, daemon=True) for _ in range(n_workers)]

    def outcomes(self, tell: Callable[[int, float], None] | None) -> Iterator[tuple[int, Any]]:
        for thread in self._threads:
            thread.start()
        n_at_work = len(self._threads)
        while n_at_work:
            try:
                kind, number, content = self._said.get(timeout=LOOK_S)
            except queue.Empty:
                continue
            if kind == "idle":
                n_at_work -= 1
            elif kind == "tell":
                if tell is not None:
                    tell(number, content)
            else:
                yield number, content

    def stop(self) -> None:
        """End every worker at once."""
        self._stopped.set()
        with self._lock:
            workers = list(self._workers)
        for worker in workers:
            worker.kill()
        for thread in self._threads:
            if thread.ident is not None:
                thread.join()

    def _tend(self) -> None:
        """Give one worker after another job; start it, and start it again after it died."""
        worker: _Worker | None = None
        try:
            while (numbered := self._next()) is not None:
                number, job = numbered
                worker = worker if worker is not None else self._hire()
                try:
                    for kind, content in worker.answers(self._task, job):
                        self._say(kind, number, content)
                except (EOFError, OSError, pickle.UnpicklingError):
                    self._say("done", number, WorkerDied(self._dismiss(worker)))
                    worker = None
                except Exception as error:  # the job or its answer cannot be pickled
                    self._say("done", number, error)
                    self._dismiss(worker)
                    worker = None
        finally:
            if worker is not None:
                self._dismiss(worker)
            self._say("idle", -1, None)

    def _next(self) -> tuple[int, Any] | None:
        with self._lock:
            return None if self._stopped.is_set() else next(self._jobs, None)

    def _say(self, kind: str, number: int, content: Any) -> None:
        while not self._stopped.is_set():
            with contextlib.suppress(queue.Full):
                self._said.put((kind, number, content), timeout=LOOK_S)
                return

    def _hire(self) -> _Worker:
        worker = _Worker()
        with self._lock:
            self._workers.add(worker)
        if self._stopped.is_set():
            worker.kill()
        return worker

    def _dismiss(self, worker: _Worker) -> str:
        with self._lock:
            self._workers.discard(worker)
        return worker.end()


class _Worker:
    """One process."""

    def __init__(self) -> None:
        searched = [path or os.getcwd() for path in sys.path]
        environment = {**dict.fromkeys(ONE_THREAD, "1"), **os.environ, "PYTHONPATH": os.pathsep.join(searched)}
        self._process = subprocess.Popen(
            [sys.executable, "-P", "-m", "floorswing.worker_process"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            env=environment,
        )

    def answers(self, task: Task, job: Any) -> Iterator[tuple[str, Any]]:
        """Have a job done; yield what is told on the way, and at last the outcome."""
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.write(pickle.dumps((task, job)))
        self._process.stdin.flush()
        kind = ""
        while kind != "done":
            kind, content = pickle.load(self._process.stdout)
            yield kind, content

    def kill(self) -> None:
        self._process.kill()

    def end(self) -> str:
        """Close the worker's input, which ends it; return how it ended."""
        with contextlib.suppress(OSError):
            if self._process.stdin is not None:
                self._process.stdin.close()
        code = self._process.wait()
        if self._process.stdout is not None:
            self._process.stdout.close()
        if code < 0:
            return f"the process that measured it was ended by {_signal_name(-code)}; is there enough memory?"
        return f"the process that measured it ended with code {code}"


def _signal_name(number: int) -> str:
    try:
        return signal.Signals(number).name
    except ValueError:
        return f"signal {number}"
