"""Clips to measurements: the pipeline for each clip, its commands, its files."""

from __future__ import annotations

import hashlib
import os
import platform
from collections.abc import Callable, Iterable, Iterator
from dataclasses import asdict, dataclass
from importlib import metadata
from pathlib import Path

from calib.errors import CalibError
from floorswing import __version__
from floorswing.errors import CommandsMismatch, FileError, FloorswingError, why
from floorswing.files import write_measurement
from floorswing.matching import DOUBTFUL_BELOW, Matched, match_clip, match_clips
from floorswing.pipeline import measure_clip
from floorswing.records import ClipSource, Measurement
from floorswing.trial import Trial, read_trial
from floorswing.writing import check_output_folder, distinct_names
from vision.errors import ClipError, VisionError
from vision.records import ClipResult

Progress = Callable[[str, float], None]
"""Called with the name of a clip and the fraction of it that is done."""

LIBRARIES = ("av", "numpy", "opencv-python-headless", "scipy")


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Failure:
    """A clip that could not be measured, and why."""

    name: str
    clip: Path
    error: Exception

    @property
    def is_wrong_file(self) -> bool:
        """Whether the clip or the trial file is at fault, rather than what was filmed."""
        return isinstance(self.error, ClipError | CommandsMismatch | FileError)


class SomeClipsFailed(FloorswingError):
    """Some of several clips could not be measured; carries those that could.

    Parameters
    ----------
    measurements : list of Measurement
        The clips that were measured (and written, where files were asked for).
    failures : list of Failure
        The others.
    """

    def __init__(self, measurements: list[Measurement], failures: list[Failure]) -> None:
        reasons = "; ".join(f"{failure.clip}: {failure.error}" for failure in failures)
        super().__init__(
            f"{len(failures)} of {len(measurements) + len(failures)} clips not measured: {reasons}"
        )
        self.measurements = measurements
        self.failures = failures


def measure(
    clips: str | os.PathLike[str] | Iterable[str | os.PathLike[str]],
    trial: Trial | str | os.PathLike[str],
    out: str | os.PathLike[str] | None = None,
    *,
    continued: bool = False,
    progress: Progress | None = None,
) -> list[Measurement]:
    """Measure the turns in one clip or several.

    Parameters
    ----------
    clips : path-like or iterable of path-like
        Clips of one trial, filmed from above.
    trial : Trial or path-like
        The trial they belong to, or its file.
    out : path-like, optional
        Folder to write a folder for each clip into; without it nothing is written.
    continued : bool
        Whether the commands run on from one clip to the next. By default each clip shows the whole list.
    progress : callable, optional
        Called with the name of a clip and the fraction of it that is done.

    Returns
    -------
    list of Measurement
        One for each clip, in order.

    Raises
    ------
    VisionError, CalibError, FloorswingError
        If the only clip cannot be measured.
    SomeClipsFailed
        If one of several clips cannot be measured; the others are, and travel with the exception.
    """
    paths = [Path(clips)] if isinstance(clips, str | os.PathLike) else [Path(clip) for clip in clips]
    outcomes = list(measure_each(paths, trial, out, continued=continued, progress=progress))
    measurements = [outcome for outcome in outcomes if isinstance(outcome, Measurement)]
    failures = [outcome for outcome in outcomes if isinstance(outcome, Failure)]
    if failures and len(paths) == 1:
        raise failures[0].error
    if failures:
        raise SomeClipsFailed(measurements, failures)
    return measurements


def measure_each(
    clips: Iterable[Path],
    trial: Trial | str | os.PathLike[str],
    out: str | os.PathLike[str] | None = None,
    *,
    continued: bool = False,
    progress: Progress | None = None,
) -> Iterator[Measurement | Failure]:
    """Yield the measurement of each clip, or its failure, as soon as it is known.

    The arguments are those of `measure`. What is wrong with the call itself (no such clip, the trial file,
    the output folder) is raised before anything is measured.
    """
    paths = list(clips)
    _check_clips(paths)
    trial = trial if isinstance(trial, Trial) else read_trial(Path(trial))
    folder = Path(out) if out is not None else None
    if folder is not None:
        check_output_folder(folder)
    names = distinct_names(path.stem for path in paths)
    seen = (_seen(name, path, trial, progress) for name, path in zip(names, paths, strict=True))
    return _finished(_matched_through(list(seen), trial) if continued else _matched(seen, trial), folder)


def _check_clips(paths: list[Path]) -> None:
    """Raise an error for the first path that cannot be a clip, before an hour is spent on the others."""
    if not paths:
        raise FileError("no clip given")
    for path in paths:
        if not path.exists():
            raise FileError(f"{path}: no such file; expected a clip")
        if path.is_dir():
            raise FileError(f"{path}: is a folder; expected a clip, that is, one video file")


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class _Seen:
    """A clip that has been through the pipeline, its turns not yet matched to commands."""

    name: str
    source: ClipSource
    result: ClipResult


def _seen(name: str, path: Path, trial: Trial, progress: Progress | None) -> _Seen | Failure:
    def told(time_s: float, duration_s: float | None) -> None:
        if progress is not None:
            progress(name, time_s / duration_s if duration_s else 0.0)

    try:
        result = measure_clip(path, trial.marker_setup(), progress=told)
        return _Seen(
            name=name,
            source=ClipSource(path=path, sha256=sha256_of(path), info=result.clip),
            result=result,
        )
    except (VisionError, FloorswingError) as error:
        return Failure(name=name, clip=path, error=error)


def _matched(seen: Iterable[_Seen | Failure], trial: Trial) -> Iterator[Measurement | Failure]:
    """Match each clip to the whole list of commands."""
    for clip in seen:
        if isinstance(clip, Failure):
            yield clip
            continue
        try:
            yield _measurement(clip, match_clip(clip.result, trial.commands), trial, continued=False)
        except (CalibError, CommandsMismatch) as error:
            yield Failure(name=clip.name, clip=clip.source.path, error=error)


def _matched_through(seen: list[_Seen | Failure], trial: Trial) -> Iterator[Measurement | Failure]:
    """Match all clips together to a list of commands that runs on from one to the next."""
    clips = [clip for clip in seen if isinstance(clip, _Seen)]
    try:
        matches = iter(match_clips([clip.result for clip in clips], trial.commands) if clips else [])
    except (CalibError, CommandsMismatch) as error:
        for clip in seen:
            path = clip.source.path if isinstance(clip, _Seen) else clip.clip
            yield clip if isinstance(clip, Failure) else Failure(name=clip.name, clip=path, error=error)
        return
    for clip in seen:
        yield clip if isinstance(clip, Failure) else _measurement(clip, next(matches), trial, continued=True)


def _finished(outcomes: Iterable[Measurement | Failure], out: Path | None) -> Iterator[Measurement | Failure]:
    """Write what was measured, where files are asked for."""
    for outcome in outcomes:
        if out is None or isinstance(outcome, Failure):
            yield outcome
            continue
        try:
            yield write_measurement(outcome, out)
        except FileError as error:
            yield Failure(name=outcome.name, clip=outcome.source.path, error=error)


def _measurement(clip: _Seen, matched: Matched, trial: Trial, *, continued: bool) -> Measurement:
    return Measurement(
        name=clip.name,
        folder=None,
        source=clip.source,
        trial=trial,
        turns=matched.turns,
        events=matched.events,
        track=clip.result.track,
        plane=clip.result.plane,
        budget=clip.result.budget,
        settings={
            "markers": asdict(trial.marker_setup()),
            "commands_continue_across_clips": continued,
            "doubtful_match_below": DOUBTFUL_BELOW,
        },
        versions=versions(),
        warnings=(*clip.result.warnings, *matched.warnings),
    )


def versions() -> dict[str, str]:
    """Return the versions of everything that a result depends on."""
    found = {"floorswing": __version__, "python": platform.python_version()}
    for name in LIBRARIES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = "unknown"
    return found


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
