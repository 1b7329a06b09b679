"""One clip as a piece of work that any process can do: here, in a worker process, on another machine.

Everything that goes in and out can be pickled. Commands are matched and files written by the process that asked.
"""

from __future__ import annotations

import traceback
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from floorswing.clip_names import Place
from floorswing.errors import CommandsMismatch, FileError, FloorswingError, one_line
from floorswing.fetching import local_file
from floorswing.fingerprint import fingerprint, program, sha256_of, versions
from floorswing.pipeline import measure_clip
from floorswing.records import ClipSource
from vision.errors import ClipError, VisionError
from vision.records import ClipResult, MarkerSetup


class ProgramError(FloorswingError):
    """The program itself failed on one clip; the message says where."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Failure:
    """A clip that could not be measured, and why."""

    name: str
    clip: Place
    error: Exception

    @property
    def is_wrong_file(self) -> bool:
        """Whether the clip or the trial file is at fault, rather than what was filmed."""
        return isinstance(self.error, ClipError | CommandsMismatch | FileError)


@dataclass(frozen=True, kw_only=True, slots=True)
class ClipJob:
    """What to do with one clip.

    Parameters
    ----------
    name : str
        Name of its folder of results.
    clip : Path or str
        Its path, or a URL.
    setup : MarkerSetup
    sparse : bool
        Whether still stretches need not be decoded in full.
    threads : int or None
        Threads that decode it; None for a few more than there are cores.
    asked : str
        Digest of the trial and the settings.
    known : str
        Fingerprint of the results that are there already; empty for none.
    asked_by : str
        Digest of the program that asked: another program does not answer; empty for any.
    """

    name: str
    clip: Place
    setup: MarkerSetup
    sparse: bool
    threads: int | None
    asked: str
    known: str
    asked_by: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class SeenClip:
    """A clip that has been through the pipeline, its turns not yet matched to commands."""

    name: str
    source: ClipSource
    result: ClipResult
    fingerprint: str
    versions: dict[str, str]


@dataclass(frozen=True, kw_only=True, slots=True)
class UnchangedClip:
    """A clip whose results are there already, from the same clip, trial, settings and program."""

    name: str
    clip: Place


def do_clip(job: ClipJob, tell: Callable[[float], None]) -> SeenClip | UnchangedClip | Failure:
    """Measure one clip, unless its results are known; what goes wrong with it is returned, not raised."""
    try:
        if job.asked_by and job.asked_by != program():
            raise ProgramError("the worker has another version of floorswing; install the same one on all machines")
        with local_file(job.clip) as path:
            return _measured(job, path, tell)
    except (VisionError, FloorswingError) as error:
        return Failure(name=job.name, clip=job.clip, error=error)
    except Exception as error:
        return Failure(name=job.name, clip=job.clip, error=program_error(error))


def _measured(job: ClipJob, path: Path, tell: Callable[[float], None]) -> SeenClip | UnchangedClip:
    def told(time_s: float, duration_s: float | None) -> None:
        tell(time_s / duration_s if duration_s else 0.0)

    sha256, used = sha256_of(path), versions()
    made_from = fingerprint([sha256], job.asked, used)
    if job.known == made_from:
        return UnchangedClip(name=job.name, clip=job.clip)
    result = measure_clip(path, job.setup, progress=told, threads=job.threads, sparse=job.sparse)
    return SeenClip(
        name=job.name,
        source=ClipSource(path=job.clip, sha256=sha256, info=result.clip),
        result=result,
        fingerprint=made_from,
        versions=used,
    )


def program_error(error: BaseException) -> ProgramError:
    """Return an error that no user can have meant, as one line that says where it happened."""
    steps = traceback.extract_tb(error.__traceback__)
    place = f" in {Path(steps[-1].filename).name}, line {steps[-1].lineno}" if steps else ""
    what = one_line(f"{type(error).__name__}: {error}")
    said = ProgramError(f"the program failed on it{place} ({what}); please report this with the clip")
    said.__cause__ = error
    return said
