"""The uncertainty of a heading change.

What is left at a rest when its frames are averaged is not noise: a coded picture repeats its own errors until the
next key frame, so dividing by the root of the number of frames would be wrong. The rigid pair has sixteen corner
coordinates and three degrees of freedom; the thirteen others show, rest by rest, how large the errors are that
averaging leaves. Pooled over the rests of a clip they scale the heading's own uncertainty (a type A evaluation with
13 degrees of freedom a rest).
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from vision.bundle import Calibration, n_sectors
from vision.combining import Combined, combine
from vision.lag import USUAL_COUNTS, Lag
from vision.plane import AFT_SIZE, BASE, LENS, LIFT, N_GLOBAL, PRINT, SHAPE
from vision.records import Contribution, FloatArray
from vision.rests import Stretch

if TYPE_CHECKING:
    from vision.turns import Seen, Split

HAND_S = 0.3
"""Time over which the slow part of what a hand and the cards do to the view errs in one direction."""

REDUNDANCY = 13.0
"""Corner coordinates of the pair beyond its pose."""

HEADING_SHARE = 0.5
"""Variance that averaging leaves in the heading, relative to what the redundant coordinates suggest.

They carry besides what plane, lens and prints leave, which is budgeted by itself. Over 45 rendered clips (uncoded,
H.264 and HEVC) headings at rests with a key frame erred by 0.72 of what the redundant coordinates alone would say.
"""

EDGES_PX = 0.0012
"""How far a camera's aperture, tone and sharpening displace a marker one way, once or twice a revolution (type B)."""

EDGES_FREEDOM = 8.0
"""That is known to about a quarter of itself (JCGM 100, G.4.2)."""

BEHIND_FREEDOM = 3.0
"""What is yet to go of a lag is known to about 0.4 of itself."""

PLANE_SECTOR_RAD = float(np.deg2rad(30.0))
"""The scale of the calibration's covariance is known as well as the number of these sectors allows."""

CALIBRATION = "calibration over the rotation"
PART_OF_IT = "of it: "
GROUPS = {
    "plane map": SHAPE,
    "lens": LENS,
    "marker mounting": slice(BASE, AFT_SIZE + 1),
    "marker heights": LIFT,
    "marker prints": PRINT,
}


@dataclass(frozen=True, eq=False, slots=True)
class RestHeading:
    """A rest, and which of its frames are averaged for the turn before and after it.

    Parameters
    ----------
    still : Stretch
    lags : bool
        Whether the coded picture may lag behind: a motion came before, and no key frame since.
    before, after : ndarray of int
        Frames averaged as the end of the turn before this rest, and as the start of the turn after.
    behind_deg : float
        What is added to their mean because the coded picture is still catching up.
    """

    still: Stretch
    lags: bool
    before: NDArray[np.intp]
    after: NDArray[np.intp]
    behind_deg: float = 0.0


def heading_before(seen: Seen, rest: RestHeading) -> float:
    """Return the heading (deg) of a rest as the start of the turn that follows it."""
    return float(seen.heading_deg[rest.after].mean()) + rest.behind_deg


def heading_after(seen: Seen, rest: RestHeading) -> float:
    """Return the heading (deg) of a rest as the end of the turn that it follows."""
    return float(seen.heading_deg[rest.before].mean()) + rest.behind_deg


def frozen_share(left: FloatArray, frames: NDArray[np.intp]) -> float:
    """Return the mean square of a rest's averaged residuals against that of one frame's noise.

    Parameters
    ----------
    left : ndarray, shape (N, 16)
        Whitened corner residuals.
    frames : ndarray of int
        Frames of one rest.
    """
    known = left[frames]
    known = known[np.all(np.isfinite(known), axis=1)]
    if len(known) == 0:
        return np.nan
    mean = known.mean(axis=0)
    return float(np.sum(mean**2) / REDUNDANCY)


def pooled_share(left: FloatArray, rests: Iterable[RestHeading]) -> float:
    """Return the mean of `frozen_share` over the rests of a clip; NaN without any."""
    shares = [frozen_share(left, rest.after) for rest in rests if len(rest.after)]
    return float(np.nanmean(shares)) if np.any(np.isfinite(shares)) else np.nan


def rest_variance_deg2(seen: Seen, frames: NDArray[np.intp], clip_share: float) -> float:
    """Return the variance of the mean heading of a rest, from what averaging leaves of noise and coding.

    Parameters
    ----------
    seen : Seen
    frames : ndarray of int
        Frames averaged.
    clip_share : float
        `pooled_share` of the clip: a rest's own share has few degrees of freedom and is drawn half way to it.
    """
    own = frozen_share(seen.left, frames)
    share = clip_share if not np.isfinite(own) else 0.5 * (own + clip_share)
    return HEADING_SHARE * share * float(np.median(seen.u_heading_deg[frames])) ** 2


@dataclass(frozen=True, slots=True)
class ViewNoise:
    """Scatter of the heading at rest (deg^2): from frame to frame, and slow beyond that; how many frames showed it."""

    fresh: float
    slow: float
    n_frames: int


STEADY = ViewNoise(0.0, 0.0, 0)


def view_noise(seen: Seen, stills: Iterable[NDArray[np.intp]]) -> ViewNoise:
    """Return how a view that cards hold steady scatters within rests, pooled over the rests of a clip.

    Neighbouring frames tell the fresh part (von Neumann 1941); what the whole rest has beyond it follows the slow drift
    of a hand.
    """
    parts = [seen.heading_deg[frames] for frames in stills if len(frames) > 2]
    if not parts:
        return STEADY
    steps = np.concatenate([np.diff(part) for part in parts])
    around = np.concatenate([part - part.mean() for part in parts])
    fresh = 0.5 * float(np.mean(steps**2))
    whole = float(around @ around) / (len(around) - len(parts))
    return ViewNoise(fresh, max(whole - fresh, 0.0), len(around) - len(parts))


def view_variance_deg2(seen: Seen, frames: NDArray[np.intp], view: ViewNoise) -> float:
    """Return the variance of the mean heading of a rest from a view that is held steady by cards.

    Fresh noise shrinks with the number of frames; of the slow part only stretches of `HAND_S` count as independent.
    """
    length_s = float(seen.time_s[frames[-1]] - seen.time_s[frames[0]])
    return view.fresh / len(frames) + view.slow / max(length_s / HAND_S, 1.0)


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class ClipErrors:
    """What a clip as a whole says about the errors of its headings.

    Parameters
    ----------
    cov : ndarray, shape (21 K, 21 K)
        Covariance of its calibrations.
    share : float
        `pooled_share` of its rests.
    lag : Lag
    view : ViewNoise
        `STEADY` for a camera that stood still.
    n_rests : int
    plane_freedom : float
        Degrees of freedom of the calibration's covariance.
    """

    cov: FloatArray
    share: float
    lag: Lag
    view: ViewNoise
    n_rests: int
    plane_freedom: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Parts:
    """Variances (deg^2) of one heading change."""

    rests: float
    lag: float
    behind: float
    view: float
    plane: float
    edges: float

    def combined(self, errors: ClipErrors) -> Combined:
        """Return the combined and expanded uncertainty (deg) of the change (JCGM 100, 5.1 and G.4)."""
        freedom = freedoms(errors)
        return combine((math.sqrt(max(getattr(self, name), 0.0)), freedom[name]) for name in freedom)


def freedoms(errors: ClipErrors) -> dict[str, float]:
    """Return the degrees of freedom of each of `Parts`."""
    return {
        "rests": _rests_freedom(errors.n_rests),
        "lag": errors.lag.n_jumps + USUAL_COUNTS,
        "behind": BEHIND_FREEDOM,
        "view": max(float(errors.view.n_frames), 1.0),
        "plane": errors.plane_freedom,
        "edges": EDGES_FREEDOM,
    }


def errors_of(seen: Seen, rests: Iterable[RestHeading], cov: FloatArray, lag: Lag, *, camera_still: bool) -> ClipErrors:
    """Return what the rests of a clip say about its errors."""
    kept = tuple(rests)
    stills = [np.arange(rest.still.first, rest.still.last + 1) for rest in kept]
    return ClipErrors(
        cov=cov,
        share=pooled_share(seen.left, kept),
        lag=lag,
        view=STEADY if camera_still else view_noise(seen, stills),
        n_rests=max(len(kept), 1),
        plane_freedom=float(n_sectors(np.deg2rad(seen.heading_deg), PLANE_SECTOR_RAD)),
    )


def parts_of_change(seen: Seen, before: RestHeading, after: RestHeading, errors: ClipErrors) -> Parts:
    """Return the contributions to the variance of a heading change between two rests."""
    pair = (before.after, after.before)
    lever = seen.by_global[after.before].mean(axis=0) - seen.by_global[before.after].mean(axis=0)
    half_turn = 0.5 * np.deg2rad(heading_after(seen, after) - heading_before(seen, before))
    return Parts(
        rests=sum(rest_variance_deg2(seen, frames, errors.share) for frames in pair),
        lag=(before.lags + after.lags) * errors.lag.u_deg**2,
        behind=before.behind_deg**2 + after.behind_deg**2,
        view=sum(view_variance_deg2(seen, frames, errors.view) for frames in pair),
        plane=float(lever @ errors.cov @ lever),
        edges=float(2.0 * np.degrees(EDGES_PX / seen.reach_px) * np.sin(half_turn)) ** 2,
    )


def change_uncertainty(seen: Seen, before: RestHeading, after: RestHeading, errors: ClipErrors) -> Combined:
    """Return the combined and expanded uncertainty (deg) of a heading change between two rests (JCGM 100, 5 and G)."""
    return parts_of_change(seen, before, after, errors).combined(errors)


BASES = {
    "rests": (
        "what averaging over the two rests leaves",
        "A",
        "spread of the 13 redundant corner coordinates, rest by rest",
    ),
    "lag": (
        "lag of the coded picture",
        "A",
        "{n_jumps} jumps at key frames inside rests, and what coders usually leave",
    ),
    "behind": ("coded picture still catching up", "B", "as much as was added for it at rests without a key frame"),
    "view": ("view held steady by cards", "A", "scatter of the heading within rests, from frame to frame and slow"),
    "plane": (CALIBRATION, "A", "covariance of the calibration over the rotation"),
    "edges": ("how the camera draws edges", "B", "0.0012 px once or twice a revolution"),
}
"""Name, evaluation and basis of each of `Parts`."""


def budget_of(
    seen: Seen, split: Split, calibration: Calibration, cov: FloatArray, *, camera_still: bool
) -> tuple[Contribution, ...]:
    """Return the budget of a typical heading change of the clip: each contribution's root mean square over its turns.

    Those of `Parts` are independent and add in squares; the others tell what the one of the calibration is made of,
    and are correlated.
    """
    rests = [r for r in split.rests if len(r.before) and len(r.after)]
    if len(rests) < 2:
        return ()
    errors = errors_of(seen, rests, cov, split.lag, camera_still=camera_still)
    pairs = list(itertools.pairwise(rests))
    parts = [parts_of_change(seen, *pair, errors) for pair in pairs]
    freedom = freedoms(errors)
    lines = []
    for key, (name, evaluation, basis) in BASES.items():
        if key == "view" and camera_still:
            continue
        lines.append(
            Contribution(
                name=name,
                u_deg=_typical([getattr(part, key) for part in parts]),
                evaluation="B" if key == "lag" and not split.lag.n_jumps else evaluation,
                degrees_of_freedom=freedom[key],
                basis=basis.format(n_jumps=split.lag.n_jumps),
            )
        )
    levers = np.array(
        [
            seen.by_global[after.before].mean(axis=0) - seen.by_global[before.after].mean(axis=0)
            for before, after in pairs
        ]
    )
    levers = levers.reshape(len(levers), -1, N_GLOBAL).sum(axis=1)  # each turn lies in one view
    for name, places in GROUPS.items():
        variance = np.einsum("mi,ij,mj->m", levers[:, places], calibration.cov[places, places], levers[:, places])
        lines.append(
            Contribution(
                name=PART_OF_IT + name,
                u_deg=_typical(variance),
                evaluation="A",
                degrees_of_freedom=freedom["plane"],
                basis=BASES["plane"][2],
            )
        )
    return tuple(lines)


def _typical(variances: Sequence[float] | FloatArray) -> float:
    return math.sqrt(max(float(np.mean(variances)), 0.0))


def _rests_freedom(n_rests: int) -> float:
    """Return the degrees of freedom of the variance that two rests leave, each half its own and half the clip's."""
    return 2.0 / (0.25 / REDUNDANCY + 0.75 / (REDUNDANCY * n_rests))


def combined_of(budget: tuple[Contribution, ...]) -> Combined:
    """Return the combined and expanded uncertainty (deg) of the budget's independent lines."""
    return combine((line.u_deg, line.degrees_of_freedom) for line in budget if not line.name.startswith(PART_OF_IT))
