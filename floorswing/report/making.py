"""Folders of measured clips in, one page out (and the annotated clips, where asked for)."""

from __future__ import annotations

import datetime
import os
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

from calib.compare import MARGIN_DEG
from floorswing.errors import FileError
from floorswing.report.evidence import Evidence, collect, find_clip
from floorswing.report.gather import Subject, gather
from floorswing.report.overlay import annotate
from floorswing.report.page import page
from floorswing.writing import check_output_folder, distinct_names, write_whole

REPORT_FILE = "report.html"

Progress = Callable[[str, float], None]
"""Called with what is being done and the share of it that is done."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Written:
    """What was written.

    Parameters
    ----------
    path : Path
        The page.
    size : int
        Its bytes.
    subjects : tuple of Subject
    without_pictures : tuple of str
        Clips whose stills are not in it, with the reason.
    overlays : tuple of Path
    """

    path: Path
    size: int
    subjects: tuple[Subject, ...]
    without_pictures: tuple[str, ...]
    overlays: tuple[Path, ...] = ()


def write_report(
    folders: str | os.PathLike[str] | Iterable[str | os.PathLike[str]],
    out: str | os.PathLike[str] | None = None,
    *,
    clips: str | os.PathLike[str] | None = None,
    overlay: bool = False,
    margin_deg: float = MARGIN_DEG,
    today: datetime.date | None = None,
    progress: Progress | None = None,
) -> Written:
    """Write the report of measured clips as one self-contained page.

    Parameters
    ----------
    folders : path-like or iterable of path-like
        Folders that ``measure`` wrote for clips, or folders of such folders. Clips of one robot on one surface are
        fitted together; several robots or surfaces are compared.
    out : path-like, optional
        File to write; ``report.html`` in the first folder by default.
    clips : path-like, optional
        Folder in which the clips are now, if they were moved since they were measured.
    overlay : bool
        Whether each clip is also written with outlines, heading and running change drawn in, beside the page.
    margin_deg : float
        Difference of heading that does not matter where several are compared.
    today : date, optional
        Date that the page bears.
    progress : callable, optional

    Raises
    ------
    FileError
        If a folder does not hold measurements, or the page cannot be written.
    """
    listed = [Path(folders)] if isinstance(folders, str | os.PathLike) else [Path(folder) for folder in folders]
    told = progress if progress is not None else _quiet
    target = Path(out) if out is not None else listed[0] / REPORT_FILE
    if out is not None or target.parent.is_dir():  # a folder of measurements that is not there has its own message
        _check_target(target)
    subjects = gather(listed, lambda share: told("reading", share))
    place = Path(clips) if clips is not None else None
    evidence: dict[str, list[Evidence]] = {}
    missing: list[str] = []
    for subject in subjects:
        evidence[subject.letter] = []
        for one in subject.measurements:
            found = collect(one, find_clip(one, place), lambda share: told("stills", share))
            evidence[subject.letter].append(found)
            missing.extend([f"{one.name}: {found.missing}"] if found.missing else [])
    told("page", 0.0)
    text = page(subjects, evidence, today=today or datetime.date.today(), margin_deg=margin_deg)
    written = write_whole(target, text)
    overlays = _overlays(subjects, place, written.parent, told) if overlay else ()
    return Written(
        path=written, size=written.stat().st_size, subjects=subjects, without_pictures=tuple(missing), overlays=overlays
    )


def _check_target(target: Path) -> None:
    """Refuse a place that cannot be written before the work is done rather than after it."""
    if target.is_dir():
        raise FileError(f"{target}: is a folder; give the name of a file to write")
    if not target.parent.is_dir():
        raise FileError(f"{target}: its folder {target.parent} is not there; make it or choose another place")
    check_output_folder(target.parent)


def _overlays(subjects: Sequence[Subject], clips: Path | None, folder: Path, told: Progress) -> tuple[Path, ...]:
    """Write the annotated clips whose clip can be found."""
    measured = [one for subject in subjects for one in subject.measurements]
    names = distinct_names(f"{one.name}-annotated" for one in measured)
    written = []
    for name, one in zip(names, measured, strict=True):
        clip = find_clip(one, clips)
        if isinstance(clip, Path) and "redraw" in one.plane:
            out = folder / f"{name}.mp4"
            written.append(annotate(one, clip, out, lambda share, name=name: told(name, share)))  # type: ignore[misc]
    return tuple(written)


def _quiet(what: str, share: float) -> None:
    """Say nothing."""
