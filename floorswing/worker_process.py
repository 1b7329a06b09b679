"""A worker of `floorswing.workers`: pickled work on standard input, pickled answers on standard output."""

from __future__ import annotations

import os
import pickle
import queue
import signal
import sys
import threading
import time
import traceback
from typing import IO, Any

TELL_EVERY_S = 0.1


def main() -> None:
    """Do one piece of work after the other until standard input closes."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C reaches all processes; the first one decides
    answers = os.fdopen(os.dup(sys.stdout.fileno()), "wb")
    os.dup2(sys.stderr.fileno(), sys.stdout.fileno())  # whatever a library prints is no answer
    work: queue.SimpleQueue[tuple[Any, Any]] = queue.SimpleQueue()
    threading.Thread(target=_listen, args=(sys.stdin.buffer, work), daemon=True).start()
    while True:
        task, job = work.get()
        _answer(answers, "done", _outcome(task, job, answers))


def _listen(source: IO[bytes], work: queue.SimpleQueue[tuple[Any, Any]]) -> None:
    """Take work; when the other side has gone, end at once, whatever is being done."""
    try:
        while True:
            work.put(pickle.load(source))
    except EOFError:
        os._exit(0)
    except BaseException:
        traceback.print_exc()
        os._exit(1)


def _outcome(task: Any, job: Any, answers: IO[bytes]) -> Any:
    last_s = 0.0

    def tell(fraction: float) -> None:
        nonlocal last_s
        if time.monotonic() - last_s >= TELL_EVERY_S:
            last_s = time.monotonic()
            _answer(answers, "tell", fraction)

    try:
        return task(job, tell)
    except Exception as error:
        return error


def _answer(answers: IO[bytes], kind: str, content: Any) -> None:
    try:
        pickled = pickle.dumps((kind, content))
        pickle.loads(pickled)  # an exception may be written and yet not be read back
    except Exception as error:
        pickled = pickle.dumps((kind, RuntimeError(f"{content!r:.300} cannot be handed over: {error!r:.300}")))
    answers.write(pickled)
    answers.flush()


if __name__ == "__main__":
    main()
