"""One number for everything that a measurement depends on: the same fingerprint, the same result."""

from __future__ import annotations

import functools
import hashlib
import json
import platform
from collections.abc import Mapping
from importlib import metadata
from pathlib import Path
from typing import Any

from floorswing import __version__
from floorswing.errors import FileError, why
from floorswing.trial import Trial

LIBRARIES = ("av", "numpy", "opencv-python-headless", "scipy")
SOURCES = ("vision/*.py", "calib/match.py", "floorswing/pipeline.py", "floorswing/matching.py")
"""The modules that decide what a measurement says."""


def fingerprint(clips_sha256: list[str], asked: str, versions_used: Mapping[str, str]) -> str:
    """Return the fingerprint of a measurement.

    Parameters
    ----------
    clips_sha256 : list of str
        The clip's SHA-256; those of all clips where they are matched to commands together.
    asked : str
        From `digest_of_request`.
    versions_used : mapping
        From `versions`, where the clip was measured.
    """
    return _digest([clips_sha256, asked, dict(versions_used), program()])


def digest_of_request(trial: Trial, settings: Mapping[str, Any]) -> str:
    """Return a digest of what was asked: the trial, wherever its file lies, and the settings."""
    said = trial.as_dict()
    said.pop("path")
    said["commands"].pop("file")
    return _digest([said, dict(settings)])


@functools.cache
def program() -> str:
    """Return a digest of the source that decides what a measurement says: changed, it measures anew."""
    root = Path(__file__).resolve().parent.parent
    digest = hashlib.sha256()
    for path in sorted(path for pattern in SOURCES for path in root.glob(pattern)):
        digest.update(path.relative_to(root).as_posix().encode())
        digest.update(path.read_bytes())
    return digest.hexdigest()


@functools.cache
def _versions() -> tuple[tuple[str, str], ...]:
    found = {"floorswing": __version__, "python": platform.python_version()}
    for name in LIBRARIES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = "unknown"
    return tuple(found.items())


def versions() -> dict[str, str]:
    """Return the versions of everything that a result depends on."""
    return dict(_versions())


def sha256_of(path: Path) -> str:
    """Return the SHA-256 of a file in hexadecimal.

    Raises
    ------
    FileError
        If it cannot be read.
    """
    try:
        with path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError as error:
        raise FileError(f"{path}: cannot be read ({why(error)})") from error


def _digest(value: object) -> str:
    text = json.dumps(value, sort_keys=True, ensure_ascii=True, default=str)
    return hashlib.sha256(text.encode()).hexdigest()
