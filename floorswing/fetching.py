"""A clip as a file of this machine: as it is, or copied from a URL for as long as it is needed."""

from __future__ import annotations

import contextlib
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import IO, Any

from floorswing.clip_names import Place, stem_of
from floorswing.errors import FileError, one_line

MOST_BYTES = 16 * 2**30
"""A larger file is not fetched: an hour of 4K at a phone's highest rate is smaller."""

CHUNK_BYTES = 2**20


@contextlib.contextmanager
def local_file(place: Place, *, most_bytes: int = MOST_BYTES) -> Iterator[Path]:
    """Give the path of a clip; one named by a URL is copied to a temporary file and removed afterwards.

    Raises
    ------
    FileError
        If it cannot be fetched, or is larger than `most_bytes`.
    """
    if isinstance(place, Path):
        yield place
        return
    with tempfile.TemporaryDirectory(prefix="floorswing-") as folder:
        target = Path(folder) / f"{stem_of(place)[:60] or 'clip'}.clip"
        _fetch(place, target, most_bytes)
        yield target


def _fetch(url: str, target: Path, most_bytes: int) -> None:
    try:
        import fsspec
    except ImportError:
        raise FileError(f"{url}: to open URLs, install the extra: pip install 'floorswing[cluster]'") from None
    try:
        with fsspec.open(url, "rb") as source, target.open("wb") as copy:
            _copy(source, copy, url, most_bytes)
    except FileError:
        raise
    except Exception as error:  # each file system of fsspec has errors of its own
        reason = one_line(str(error) or type(error).__name__)
        raise FileError(f"{url}: cannot be fetched ({type(error).__name__}: {reason})") from error


def _copy(source: Any, copy: IO[bytes], url: str, most_bytes: int) -> None:
    known = getattr(source, "size", None)
    if isinstance(known, int) and known > most_bytes:
        raise _too_large(url, most_bytes)
    n_bytes = 0
    while chunk := source.read(CHUNK_BYTES):
        n_bytes += len(chunk)
        if n_bytes > most_bytes:
            raise _too_large(url, most_bytes)
        copy.write(chunk)


def _too_large(url: str, most_bytes: int) -> FileError:
    return FileError(f"{url}: is larger than {most_bytes / 2**30:.3g} GiB; copy it to a disk and name the file")
