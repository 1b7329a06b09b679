"""The same pieces of work on the workers of a Dask cluster; needs the extra ``floorswing[cluster]``."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable, Iterator, Sequence
from typing import Any

from floorswing.errors import FileError, FloorswingError, one_line
from floorswing.workers import Task, WorkerDied

CONNECT_S = 15.0
"""How long to wait for the scheduler to answer."""

TOPIC = "floorswing-progress"
TELL_EVERY_S = 0.5


def run_on_cluster(
    task: Task, jobs: Sequence[Any], address: str, tell: Callable[[int, float], None] | None = None
) -> Iterator[tuple[int, Any]]:
    """Yield the number of each job and its outcome, in the order in which they are finished.

    The same as `floorswing.workers.run_in_workers`, by the workers of the scheduler at `address`. A worker that dies
    takes the jobs waiting on it along; so those that the cluster gives up are tried once more at the end, each alone.

    Raises
    ------
    FileError
        If the extra is not installed, or no scheduler answers at `address`.
    """
    try:
        from distributed import Client, as_completed
    except ImportError:
        raise FileError("--scheduler: install the extra: pip install 'floorswing[cluster]'") from None
    try:
        client = Client(address, timeout=CONNECT_S, set_as_default=False, name="floorswing")
    except (OSError, ValueError, ImportError) as error:
        reason = one_line(str(error) or type(error).__name__)
        raise FileError(
            f"--scheduler {address}: no scheduler answers there ({reason}); expected an address such as tcp://host:8786"
        ) from error
    with client:
        _listen(client, tell)
        numbers = {client.submit(_do, task, n, job, pure=False): n for n, job in enumerate(jobs)}
        given_up: list[int] = []
        try:
            for future in as_completed(list(numbers), loop=client.loop):
                outcome, number = _outcome(future), numbers.pop(future)
                future.release()
                if isinstance(outcome, WorkerDied) and len(jobs) > 1:
                    given_up.append(number)
                else:
                    yield number, outcome
            for number in given_up:
                future = client.submit(_do, task, number, jobs[number], pure=False)
                numbers[future] = number
                next(iter(as_completed([future], loop=client.loop)))
                yield number, _outcome(future)
                del numbers[future]
        finally:
            with contextlib.suppress(Exception):  # the scheduler may be gone
                client.cancel(list(numbers), force=True)


def _do(task: Task, number: int, job: Any) -> Any:
    """Run in a worker: the task, its progress told through the scheduler, its exceptions returned."""
    from distributed import get_worker

    worker = get_worker()
    last_s = 0.0

    def tell(fraction: float) -> None:
        nonlocal last_s
        if time.monotonic() - last_s >= TELL_EVERY_S:
            last_s = time.monotonic()
            worker.log_event(TOPIC, (number, fraction))

    try:
        return task(job, tell)
    except Exception as error:
        return error


def _listen(client: Any, tell: Callable[[int, float], None] | None) -> None:
    if tell is None:
        return

    def heard(event: tuple[float, tuple[int, float]]) -> None:
        tell(*event[1])

    client.subscribe_topic(TOPIC, heard)


def _outcome(future: Any) -> Any:
    if future.status == "finished":
        try:
            return future.result()
        except Exception as error:  # an answer that cannot be read
            return error
    failed = future.exception() if future.status == "error" else None
    if isinstance(failed, FloorswingError):
        return failed
    if failed is None:
        return WorkerDied(f"the cluster did not finish it (status {future.status})")
    return WorkerDied(f"the cluster's worker failed on it ({type(failed).__name__}: {one_line(failed)})")
