"""What the application hands around: a measured turn, and everything measured in one clip.

`floorswing.measuring` makes these from a clip and `floorswing.files` reads them back from a folder, so a fit
does not care which of the two it is given.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from floorswing.clip_names import Place
from floorswing.trial import Trial
from vision.records import ClipInfo, Contribution, Event, PoseTrack


@dataclass(frozen=True, kw_only=True, slots=True)
class MeasuredTurn:
    """One row of ``turns.csv``: a turn, the command it answers, and the factors of that command.

    Parameters
    ----------
    turn : int
        Number in the clip, from 1.
    start_s, end_s : float
        Presentation times at which the robot left one rest and reached the next.
    commanded_wheel_deg : float
        Rotation of each drive wheel that was asked for; NaN where no command could be matched.
    heading_change_deg, u_heading_change_deg : float
        Heading at the rest after less heading at the rest before, counter-clockwise positive, and its
        standard uncertainty.
    start_heading_deg, end_heading_deg : float
        Headings of the two rests, unwrapped over the clip.
    peak_rate_deg_s, overshoot_deg, settle_s, centre_x_mm, centre_y_mm, wander_mm : float
        How the turn went; NaN where it could not be found.
    flags : tuple of str
        What is unusual about the turn; empty for nothing.
    factors : mapping of str to str
        Further columns of the commands file, as written there.
    """

    turn: int
    start_s: float
    end_s: float
    commanded_wheel_deg: float
    heading_change_deg: float
    u_heading_change_deg: float
    start_heading_deg: float
    end_heading_deg: float
    peak_rate_deg_s: float
    overshoot_deg: float
    settle_s: float
    centre_x_mm: float
    centre_y_mm: float
    wander_mm: float
    flags: tuple[str, ...] = ()
    factors: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, kw_only=True, slots=True)
class ClipSource:
    """Which clip was measured: enough to find it again and to know that it is the same one."""

    path: Place
    sha256: str
    info: ClipInfo


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Measurement:
    """Everything measured in one clip.

    Parameters
    ----------
    name : str
        Name of the clip, and of its folder.
    folder : Path or None
        Where the files are; None when nothing was written.
    source : ClipSource
        The clip.
    trial : Trial
        The trial it belongs to.
    turns : tuple of MeasuredTurn
        In the order driven; none is left out.
    events : tuple of Event
        What was not a turn, in order of time.
    track : PoseTrack or None
        The pose in every frame; None where it was not read.
    plane : mapping
        Plane, lens, mounting and card estimates.
    budget : tuple of Contribution
        The uncertainty budget of a heading change.
    settings : mapping
        The choices that the measurement was made with.
    versions : mapping of str to str
        Versions of the programs that made it.
    warnings : tuple of str
        What the user should know, one line each.
    """

    name: str
    folder: Path | None
    source: ClipSource
    trial: Trial
    turns: tuple[MeasuredTurn, ...]
    events: tuple[Event, ...]
    track: PoseTrack | None
    plane: Mapping[str, object]
    budget: tuple[Contribution, ...]
    settings: Mapping[str, object]
    versions: Mapping[str, str]
    warnings: tuple[str, ...] = ()
