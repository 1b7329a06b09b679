"""Whether a set-up will do, from the first seconds of a clip or from one photo."""

from __future__ import annotations

import itertools
import os
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from floorswing.advice import Advice, Sight, advice_for
from floorswing.errors import FloorswingError
from floorswing.trial import DEFAULT_CARDS, Trial, read_trial
from vision.errors import MarkersNotFound, PlaneError
from vision.foresight import Foresight, Plan, Prospect, foresee, prospect_of
from vision.frames import Clip, key_interval_s
from vision.glimpse import Glimpse, glimpse_of
from vision.records import MarkerSetup
from vision.stills import is_still, read_still

SECONDS = 2.0
STILL_PX = 1920
"""A photo is looked at as a clip of this width would show it: phones film with fewer pixels than they take photos."""
DRAWS = 3
"""Imagined clips of which the mean variance is taken: where key frames fall among the rests is chance."""
SURE = 1.5
"""What measuring states lies within this factor of what is foreseen, or of the verdict's doubt."""
USUAL_KEY_S = 1.0
"""Interval of a phone's key frames; common practice, no source."""
USUAL_REST_S = 1.2
USUAL_RATE_DEG_S = 90.0


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Preview:
    """What is to be said about a set-up before filming.

    Parameters
    ----------
    path : Path
    is_still : bool
    reduced : float
        Factor by which a photo was made smaller.
    glimpse : Glimpse or None
        None where the robot's markers were not found, or are seen too poorly; `complaint` then says why.
    prospect : Prospect or None
    plan : Plan
    foresight : Foresight or None
    rate_hz, key_s, bits : float
        Frames a second, interval of key frames, bits a pixel and frame; NaN for a still.
    advice : tuple of Advice
    want_deg : float or None
    complaint : str
    """

    path: Path
    is_still: bool
    reduced: float
    glimpse: Glimpse | None
    prospect: Prospect | None
    plan: Plan
    foresight: Foresight | None
    rate_hz: float
    key_s: float
    bits: float
    advice: tuple[Advice, ...]
    want_deg: float | None
    complaint: str = ""

    @property
    def u_deg(self) -> float:
        """Standard uncertainty to expect of a turn; infinite where nothing can be measured."""
        return self.foresight.u_deg if self.foresight is not None else np.inf

    @property
    def expanded_deg(self) -> float:
        """Expanded uncertainty (about 95 %) to expect of a turn; infinite where nothing can be measured."""
        return self.foresight.expanded_deg if self.foresight is not None else np.inf

    @property
    def verdict(self) -> str:
        """``will do``, ``will not do`` or ``close``, for the wanted expanded uncertainty; empty without one."""
        if self.want_deg is None:
            return ""
        expanded_deg = self.expanded_deg
        if any(item.kind == "unsteady" and item.after_deg is None for item in self.advice) and self._loose:
            return "will not do"
        if expanded_deg > SURE * self.want_deg:
            return "will not do"
        return "will do" if expanded_deg * SURE < self.want_deg else "close"

    @property
    def _loose(self) -> bool:
        return self.glimpse is not None and self.glimpse.camera.loose


def preview(
    path: str | os.PathLike[str],
    trial: Trial | str | os.PathLike[str] | None = None,
    *,
    seconds: float = SECONDS,
    want_deg: float | None = None,
    rate_deg_s: float = USUAL_RATE_DEG_S,
    rest_s: float = USUAL_REST_S,
) -> Preview:
    """Say what a set-up will give, from the first seconds of a clip or one photo.

    Parameters
    ----------
    path : path-like
        A clip, or a photo.
    trial : Trial or path-like, optional
        Its markers are looked for and its commands imagined; without it the usual markers and turns of 90 degrees.
    seconds : float
        How much of a clip is looked at.
    want_deg : float, optional
        Wanted expanded uncertainty (about 95 %) of a single turn.
    rate_deg_s, rest_s : float
        How fast the robot will turn, and how long it will rest between turns.

    Raises
    ------
    vision.errors.ClipError, FloorswingError
        If a file cannot be read, or a number makes no sense. Markers that are not found are an answer, not an error.
    """
    place = Path(path)
    known = read_trial(Path(trial)) if isinstance(trial, str | os.PathLike) else trial
    setup = known.marker_setup() if known is not None else _usual_setup()
    plan = Plan(turns_deg=_turns_deg(known), rest_s=rest_s, rate_deg_s=rate_deg_s)
    still = is_still(place)
    reduced, rate_hz, key_s, bits = 1.0, np.nan, np.nan, np.nan
    blank = Preview(
        path=place, is_still=still, reduced=1.0, glimpse=None, prospect=None, plan=plan, foresight=None,
        rate_hz=np.nan, key_s=np.nan, bits=np.nan, advice=(), want_deg=want_deg,
    )  # fmt: skip
    try:
        if still:
            frame, reduced = read_still(place, longest_px=STILL_PX)
            glimpse = glimpse_of([frame], setup)
        else:
            with Clip(place) as clip:
                glimpse = glimpse_of(itertools.takewhile(lambda frame: frame.time_s < seconds, clip.frames()), setup)
            rate_hz, bits = _rate_and_bits(glimpse, place, clip.info.duration_s)
            key_s = key_interval_s(place)
        prospect = prospect_of(glimpse.track, glimpse.ground, key_s=USUAL_KEY_S if still else key_s)
    except (MarkersNotFound, PlaneError) as error:
        return replace(blank, reduced=reduced, complaint=str(error))
    foreseen = foresee_often(prospect, plan)
    sight = Sight(
        glimpse=glimpse, prospect=prospect, plan=plan, bits=bits, rate_hz=rate_hz, dictionary=setup.dictionary,
        marker_ids=(setup.fore_id, setup.aft_id),
    )  # fmt: skip
    return replace(
        blank, reduced=reduced, glimpse=glimpse, prospect=prospect, foresight=foreseen, rate_hz=rate_hz, key_s=key_s,
        bits=bits, advice=tuple(advice_for(sight, foreseen.expanded_deg)),
    )  # fmt: skip


def foresee_often(prospect: Prospect, plan: Plan) -> Foresight:
    """Return the mean, in variance, of several imagined clips whose rests lie differently among the key frames."""
    draws = [
        foresee(prospect, replace(plan, rest_s=plan.rest_s * (1.0 + 0.07 * (number - 1))), seed=number)
        for number in range(DRAWS)
    ]
    u_deg = float(np.sqrt(np.mean([draw.u_deg**2 for draw in draws])))
    expanded_deg = float(np.sqrt(np.mean([draw.expanded_deg**2 for draw in draws])))
    return replace(draws[1], u_deg=u_deg, expanded_deg=expanded_deg)


def _usual_setup() -> MarkerSetup:
    first, last = DEFAULT_CARDS
    return MarkerSetup(marker_side_mm=40.0, card_side_mm=60.0, card_ids=tuple(range(first, last + 1)))


def _turns_deg(trial: Trial | None) -> tuple[float, ...]:
    """Return the heading changes that a trial's commands would make without slip, or the usual ones."""
    if trial is None or trial.robot.inner_track_mm is None or trial.robot.tyre_width_mm is None:
        return Plan().turns_deg
    track_mm = trial.robot.inner_track_mm + trial.robot.tyre_width_mm
    gain = trial.robot.wheel_diameter_mm / track_mm
    turns = tuple(gain * value for value in trial.commands.wheel_deg if value)
    return turns[:12] or Plan().turns_deg


def _rate_and_bits(glimpse: Glimpse, path: Path, duration_s: float | None) -> tuple[float, float]:
    """Return frames a second, and the bits that the file spends on a pixel of a frame."""
    steps_s = np.diff(glimpse.track.time_s)
    if not np.any(steps_s > 0.0):
        raise FloorswingError(f"{path.name}: holds a single picture; give a longer clip, or a photo")
    rate_hz = 1.0 / float(np.median(steps_s[steps_s > 0.0]))
    width, height = glimpse.track.image_px
    n_pixels = width * height * rate_hz * (duration_s or np.nan)
    return rate_hz, 8.0 * path.stat().st_size / n_pixels
