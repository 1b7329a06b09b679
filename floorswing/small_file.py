"""Reading a small text file that somebody wrote: a regular file, and not a large one.

A device or a pipe would be read for ever, a disk image named by mistake until the memory is gone.
"""

from __future__ import annotations

import os
import stat
from pathlib import Path

MOST_BYTES = 20_000_000
"""A hundred thousand commands with ten columns each fit in."""


def read_small_text(path: Path) -> str:
    """Return the text of a file; a byte order mark, as some editors leave it, is not held against it.

    Raises
    ------
    OSError
        If it cannot be read, is not a regular file, or is larger than `MOST_BYTES`.
    UnicodeDecodeError
        If it is not UTF-8.
    """
    # Opening a pipe without a writer waits for one unless told not to.
    handle = os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_CLOEXEC", 0))
    with open(handle, "rb") as file:
        facts = os.fstat(handle)
        if not stat.S_ISREG(facts.st_mode):
            raise OSError("not a regular file")
        if facts.st_size > MOST_BYTES:
            raise OSError(f"{facts.st_size} bytes, more than {MOST_BYTES // 1_000_000} million")
        content = file.read(MOST_BYTES + 1)
    return content.decode("utf-8-sig").replace("\r\n", "\n").replace("\r", "\n")
