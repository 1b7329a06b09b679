"""Stored trials where a command takes folders: ``log:surface=cork`` stands for the trials that it selects."""

from __future__ import annotations

import contextlib
import tempfile
from collections.abc import Iterator, Sequence
from pathlib import Path

from floorswing.logbook.selection import parsed, some_trials
from floorswing.logbook.store import default_path, opened, write_trials
from floorswing.writing import distinct_names

PREFIX = "log:"


@contextlib.contextmanager
def as_folders(places: Sequence[Path], path: Path | None = None) -> Iterator[list[Path]]:
    """Give `places` with every selection replaced by a folder of its trials, there as long as the context lasts.

    Parameters
    ----------
    places : sequence of Path
        Folders, and selections such as ``log:robot=shuttle 2,since=2026-11-01``.
    path : Path, optional
        The logbook; where it usually is by default.

    Raises
    ------
    LogbookError
        If the logbook cannot be used, or a selection matches nothing.
    """
    selections = [str(place).removeprefix(PREFIX) for place in places if str(place).startswith(PREFIX)]
    if not selections:
        yield list(places)
        return
    with tempfile.TemporaryDirectory(prefix="floorswing-") as folder, opened(path or default_path()) as connection:
        names = iter(distinct_names(selections))
        found = []
        for place in places:
            if not str(place).startswith(PREFIX):
                found.append(place)
                continue
            chosen = some_trials(connection, parsed([str(place).removeprefix(PREFIX)]))
            out = Path(folder) / next(names)
            write_trials(connection, [one.id for one in chosen], out)
            found.append(out)
        yield found
