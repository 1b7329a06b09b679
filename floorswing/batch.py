"""Many clips at once: in this process, in worker processes, or on a cluster; results written as they come.

What is there already from the same clip, trial, settings and program is kept. One clip that fails, or whose process
dies, does not stop the others. Whatever ends this process, what was finished is on the disk and whole.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from calib.errors import CalibError
from floorswing.clip_job import ClipJob, Failure, SeenClip, UnchangedClip, do_clip, program_error
from floorswing.clip_names import find_clips, is_url, stem_of
from floorswing.errors import CommandsMismatch, FileError, FloorswingError
from floorswing.files import HEADING_FILE, read_measurement, write_measurement
from floorswing.fingerprint import digest_of_request, fingerprint, program, sha256_of, versions
from floorswing.matching import DOUBTFUL_BELOW, NO_REMEDIES, Matched, Remedies, match_clip, match_clips
from floorswing.records import Measurement
from floorswing.trial import Trial, read_trial
from floorswing.workers import run_in_workers
from floorswing.writing import check_output_folder, clear_leftovers, distinct_names
from vision.records import ClipResult

Progress = Callable[[str, float], None]
"""Called with the name of a clip and the fraction of it that is done."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Kept:
    """A clip that was measured before, from the same clip, trial, settings and program; its results were kept."""

    name: str
    measurement: Measurement


Outcome = Measurement | Kept | Failure


class Batch:
    """Clips to measure; the arguments are those of `measure`.

    Attributes
    ----------
    names : list of str
        The name of each clip, and of its folder.
    n_workers : int
        How many clips are measured at a time; 0 where a scheduler decides.

    Raises
    ------
    FloorswingError
        If something is wrong with the call itself (no such clip, the trial file, the output folder), before
        anything is measured.
    """

    def __init__(
        self,
        clips: Iterable[str | os.PathLike[str]],
        trial: Trial | str | os.PathLike[str],
        out: str | os.PathLike[str] | None = None,
        *,
        continued: bool = False,
        again: bool = False,
        sparse: bool = False,
        workers: int | None = 1,
        scheduler: str | None = None,
        remedies: Remedies = NO_REMEDIES,
    ) -> None:
        self._places = find_clips(clips, here=scheduler is None)
        self._trial = trial if isinstance(trial, Trial) else read_trial(Path(trial))
        self._out = Path(out) if out is not None else None
        if self._out is not None:
            check_output_folder(self._out)
        self._continued = continued
        self._remedies = remedies
        remedies.commands_of(len(self._trial.commands.wheel_deg))  # said before an hour is spent
        self._again = again
        self._sparse = sparse
        self._scheduler = scheduler
        self.n_workers = 0 if scheduler is not None else _n_workers(workers, len(self._places))
        self.names = distinct_names(map(stem_of, self._places))

    def run(self, progress: Progress | None = None) -> Iterator[Outcome]:
        """Yield the outcome of each clip as soon as it is known, written where files are asked for."""
        if self._out is not None:
            clear_leftovers(self._out)
        if self._continued:
            return self._run_through(progress)
        return (self._finished(outcome) for outcome in self._matched(self._seen(self._jobs(), progress)))

    def _settings(self) -> dict[str, Any]:
        return {
            "markers": asdict(self._trial.marker_setup()),
            "commands_continue_across_clips": self._continued,
            "doubtful_match_below": DOUBTFUL_BELOW,
            "sparse": self._sparse,
            "remedies": asdict(self._remedies),
        }

    def _asked(self) -> str:
        return digest_of_request(self._trial, self._settings())

    def _jobs(self) -> Iterator[ClipJob]:
        """Yield the work, each piece made only when it is wanted."""
        asked = self._asked()
        for name, place in zip(self.names, self._places, strict=True):
            yield ClipJob(
                name=name,
                clip=place,
                setup=self._trial.marker_setup(),
                sparse=self._sparse,
                threads=self._threads(),
                asked=asked,
                known="" if self._continued else self._known(name),
                asked_by=program() if self._scheduler is not None else "",
            )

    def _threads(self) -> int | None:
        return None if self.n_workers == 1 else max(1, n_cores() // self.n_workers) if self.n_workers else 1

    def _known(self, name: str) -> str:
        """Return the fingerprint of the results that are there; empty for none, or none that can be read."""
        if self._out is None or self._again or not (self._out / name / HEADING_FILE).is_file():
            return ""
        try:
            return str(read_measurement(self._out / name).settings.get("fingerprint", ""))
        except FileError:
            return ""

    def _seen(self, jobs: Iterator[ClipJob], progress: Progress | None) -> Iterator[SeenClip | UnchangedClip | Failure]:
        def tell(number: int, fraction: float) -> None:
            if progress is not None:
                progress(self.names[number], fraction)

        if self._scheduler is not None:
            from floorswing.cluster import run_on_cluster

            outcomes = run_on_cluster(do_clip, list(jobs), self._scheduler, tell)
        elif self.n_workers > 1:
            outcomes = run_in_workers(do_clip, jobs, self.n_workers, tell)
        else:
            outcomes = _run_here(jobs, tell)
        for number, outcome in outcomes:
            yield self._failed(number, outcome) if isinstance(outcome, Exception) else outcome

    def _failed(self, number: int, error: Exception) -> Failure:
        said = error if isinstance(error, FloorswingError) else program_error(error)
        return Failure(name=self.names[number], clip=self._places[number], error=said)

    def _matched(self, seen: Iterable[SeenClip | UnchangedClip | Failure]) -> Iterator[Outcome]:
        """Match each clip to the whole list of commands."""
        for clip in seen:
            if isinstance(clip, Failure):
                yield clip
                continue
            try:
                if isinstance(clip, UnchangedClip):
                    yield self._kept(clip.name)
                    continue
                yield self._measurement(clip, self._match(clip.result), clip.fingerprint)
            except (CalibError, CommandsMismatch, FileError) as error:
                place = clip.clip if isinstance(clip, UnchangedClip) else clip.source.path
                yield Failure(name=clip.name, clip=place, error=error)

    def _match(self, result: ClipResult) -> Matched:
        return match_clip(result, self._trial.commands, self._remedies)

    def _kept(self, name: str) -> Kept:
        assert self._out is not None
        return Kept(name=name, measurement=read_measurement(self._out / name))

    def _finished(self, outcome: Outcome) -> Outcome:
        """Write what was measured, where files are asked for."""
        if self._out is None or not isinstance(outcome, Measurement):
            return outcome
        try:
            return write_measurement(outcome, self._out)
        except FileError as error:
            return Failure(name=outcome.name, clip=outcome.source.path, error=error)

    def _measurement(self, clip: SeenClip, matched: Matched, made_from: str) -> Measurement:
        return Measurement(
            name=clip.name,
            folder=None,
            source=clip.source,
            trial=self._trial,
            turns=matched.turns,
            events=matched.events,
            track=clip.result.track,
            plane=clip.result.plane,
            budget=clip.result.budget,
            settings={**self._settings(), "fingerprint": made_from},
            versions=clip.versions,
            warnings=(*clip.result.warnings, *matched.warnings),
        )

    # -- commands that run on from clip to clip ------------------------------------------------------------------

    def _run_through(self, progress: Progress | None) -> Iterator[Outcome]:
        """Match all clips together, so that either all results are kept or all clips are measured."""
        if self._all_known():
            yield from (self._kept(name) for name in self.names)
            return
        seen = {clip.name: clip for clip in self._seen(self._jobs(), progress)}
        yield from map(self._finished, self._matched_through([seen[name] for name in self.names]))

    def _all_known(self) -> bool:
        known = {self._known(name) for name in self.names}
        if len(known) != 1 or known == {""} or self._scheduler is not None or any(map(is_url, self._places)):
            return False
        sums = [sha256_of(Path(place)) for place in self._places]
        return known == {fingerprint(sums, self._asked(), versions())}

    def _matched_through(self, seen: list[SeenClip | UnchangedClip | Failure]) -> Iterator[Outcome]:
        clips = [clip for clip in seen if isinstance(clip, SeenClip)]
        failures = {clip.name: clip for clip in seen if isinstance(clip, Failure)}
        try:
            results = [clip.result for clip in clips]
            matches = match_clips(results, self._trial.commands, self._remedies) if clips else []
        except (CalibError, CommandsMismatch) as error:
            places = dict(zip(self.names, self._places, strict=True))
            for clip in seen:
                yield failures.get(clip.name) or Failure(name=clip.name, clip=places[clip.name], error=error)
            return
        sums = [clip.source.sha256 for clip in clips]
        pairs = {clip.name: (clip, match) for clip, match in zip(clips, matches, strict=True)}
        for clip in seen:
            if clip.name in failures:
                yield failures[clip.name]
                continue
            one, match = pairs[clip.name]
            made_from = fingerprint(sums, self._asked(), one.versions) if not failures else ""
            yield self._measurement(one, match, made_from)


def n_cores() -> int:
    """Return how many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _n_workers(asked: int | None, n_clips: int) -> int:
    if asked is not None and asked < 1:
        raise FileError(f"workers: {asked}; accepted: 1 or more")
    return max(1, min(asked if asked is not None else n_cores(), n_clips))


def _run_here(jobs: Iterable[ClipJob], tell: Callable[[int, float], None]) -> Iterator[tuple[int, Any]]:
    """Do the work in this process, one piece after the other."""
    for number, job in enumerate(jobs):
        yield number, do_clip(job, lambda fraction, number=number: tell(number, fraction))  # type: ignore[misc]
