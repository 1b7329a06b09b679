"""Clips to measurements, as one call."""

from __future__ import annotations

import os
from collections.abc import Iterable
from dataclasses import replace

from floorswing.batch import Batch, Kept, Progress
from floorswing.clip_job import Failure
from floorswing.errors import FloorswingError
from floorswing.files import read_heading
from floorswing.matching import NO_REMEDIES, Remedies
from floorswing.records import Measurement
from floorswing.trial import Trial

__all__ = ["Failure", "SomeClipsFailed", "measure"]


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
    again: bool = False,
    sparse: bool = False,
    workers: int = 1,
    scheduler: str | None = None,
    remedies: Remedies = NO_REMEDIES,
    progress: Progress | None = None,
) -> list[Measurement]:
    """Measure the turns in one clip or several.

    Parameters
    ----------
    clips : path-like or iterable of path-like
        Clips of one trial, filmed from above; a folder stands for the clips in it. With the extra
        ``floorswing[cluster]`` a clip can also be named by a URL.
    trial : Trial or path-like
        The trial they belong to, or its file.
    out : path-like, optional
        Folder to write a folder for each clip into; without it nothing is written.
    continued : bool
        Whether the commands run on from one clip to the next. By default each clip shows the whole list.
    again : bool
        Whether to measure even what `out` holds already from the same clip, trial, settings and program.
    sparse : bool
        Whether still stretches need not be decoded in full (see `vision.sparse`).
    workers : int
        Processes that measure clips side by side; 1 for this process alone.
    scheduler : str, optional
        Address of a Dask scheduler whose workers measure the clips instead; they open the paths and URLs.
    remedies : Remedies
        What is known about which turns answer which commands, and the pictures do not show.
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
    places = [clips] if isinstance(clips, str | os.PathLike) else list(clips)
    batch = Batch(
        places,
        trial,
        out,
        continued=continued,
        again=again,
        sparse=sparse,
        workers=workers,
        scheduler=scheduler,
        remedies=remedies,
    )
    order = {name: number for number, name in enumerate(batch.names)}
    outcomes = sorted(batch.run(progress), key=lambda outcome: order[outcome.name])
    measurements = [_whole(outcome) for outcome in outcomes if not isinstance(outcome, Failure)]
    failures = [outcome for outcome in outcomes if isinstance(outcome, Failure)]
    if failures and len(outcomes) == 1:
        raise failures[0].error
    if failures:
        raise SomeClipsFailed(measurements, failures)
    return measurements


def _whole(outcome: Measurement | Kept) -> Measurement:
    """Return a measurement with its track, read back where it was kept."""
    if isinstance(outcome, Measurement):
        return outcome
    kept = outcome.measurement
    assert kept.folder is not None
    return replace(kept, track=read_heading(kept.folder))
