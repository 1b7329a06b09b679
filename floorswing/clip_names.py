"""What may be named as a clip: a file, a folder of files, or a URL that a worker opens."""

from __future__ import annotations

import os
from collections.abc import Iterable
from pathlib import Path

from floorswing.errors import FileError, why

SUFFIXES = (".3gp", ".avi", ".m4v", ".mkv", ".mov", ".mp4", ".mts", ".ts", ".webm")
"""Files of a folder that are taken for clips; a file named by itself may have any name."""

Place = Path | str
"""A file by its path, or a URL as text."""


def is_url(place: str | os.PathLike[str]) -> bool:
    """Return whether `place` is a URL rather than a path."""
    return isinstance(place, str) and "://" in place


def place_of(text: str | os.PathLike[str]) -> Place:
    """Return a URL as it is, anything else as a path."""
    return text if isinstance(text, str) and is_url(text) else Path(text)


def stem_of(place: Place) -> str:
    """Return the name of a clip without its folder and its suffix."""
    if isinstance(place, Path):
        return place.stem
    name = place.partition("://")[2].partition("?")[0].partition("#")[0].rstrip("/").rpartition("/")[2]
    return Path(name).stem


def find_clips(places: Iterable[str | os.PathLike[str]], *, here: bool = True) -> list[Place]:
    """Return the clips that `places` name: each folder stands for the clips in it, by name, subfolders included.

    Parameters
    ----------
    places : iterable of path-like
    here : bool
        Whether this machine opens the clips; if not, only folders are looked at.

    Raises
    ------
    FileError
        If nothing is named, a file is missing, or a folder holds no clip.
    """
    found: list[Place] = []
    for place in map(place_of, places):
        if isinstance(place, Path) and place.is_dir():
            found.extend(_clips_in(place))
            continue
        if here and isinstance(place, Path) and not place.exists():
            raise FileError(f"{place}: no such file; expected a clip")
        found.append(place)
    if not found:
        raise FileError("no clip given")
    return list({str(place): place for place in found}.values())


def _clips_in(folder: Path) -> list[Place]:
    def refuse(error: OSError) -> None:
        raise FileError(f"{error.filename}: cannot be read ({why(error)})") from error

    found: list[Place] = []
    for base, folders, files in os.walk(folder, onerror=refuse):
        folders[:] = sorted(name for name in folders if not name.startswith("."))
        found.extend(
            Path(base, name) for name in sorted(files) if not name.startswith(".") and name.lower().endswith(SUFFIXES)
        )
    if not found:
        raise FileError(f"{folder}: holds no clip; accepted: {', '.join(suffix[1:] for suffix in SUFFIXES)} files")
    return found
