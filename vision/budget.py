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
from collections.abc import Iterable
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
"""Time over which the view of a camera in the hand, held steady by cards, errs in one direction."""

REDUNDANCY = 13.0
"""Corner coordinates of the pair beyond its pose."""

CALIBRATED = 13.0
"""Parameters of plane, lens and pair that are estimated without a narrow prior."""

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
    """

    still: Stretch
    lags: bool
    before: NDArray[np.intp]
    after: NDArray[np.intp]


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
    return share * float(np.median(seen.u_heading_deg[frames])) ** 2


def view_variance_deg2(seen: Seen, frames: NDArray[np.intp]) -> float:
    """Return the variance of the mean heading of a rest from a view that is held steady by cards.

    It errs in every frame, and follows the slow drift of a hand: only stretches of `HAND_S` count as independent.
    """
    if len(frames) < 3:
        return 0.0
    length_s = float(seen.time_s[frames[-1]] - seen.time_s[frames[0]])
    return float(np.var(seen.heading_deg[frames], ddof=1)) / max(length_s / HAND_S, 1.0)


def change_uncertainty(
    seen: Seen,
    before: RestHeading,
    after: RestHeading,
    cov: FloatArray,
    clip_share: float,
    lag: Lag,
    *,
    camera_still: bool,
) -> float:
    """Return the standard uncertainty (deg) of a heading change between two rests (JCGM 100, 5.1 and 5.2)."""
    parts = parts_of_change(seen, before, after, cov, clip_share, lag, camera_still=camera_still)
    return math.sqrt(parts.rests + parts.lag + parts.view + parts.plane)


@dataclass(frozen=True, slots=True)
class Parts:
    """Variances (deg^2) of one heading change: residue of the two rests, lag, view held by cards, calibration."""

    rests: float
    lag: float
    view: float
    plane: float


def parts_of_change(
    seen: Seen,
    before: RestHeading,
    after: RestHeading,
    cov: FloatArray,
    clip_share: float,
    lag: Lag,
    *,
    camera_still: bool,
) -> Parts:
    """Return the contributions to the variance of a heading change between two rests."""
    pair = (before.after, after.before)
    lever = seen.by_global[after.before].mean(axis=0) - seen.by_global[before.after].mean(axis=0)
    return Parts(
        rests=sum(rest_variance_deg2(seen, frames, clip_share) for frames in pair),
        lag=(before.lags + after.lags) * lag.u_deg**2,
        view=0.0 if camera_still else sum(view_variance_deg2(seen, frames) for frames in pair),
        plane=float(lever @ cov @ lever),
    )


def budget_of(
    seen: Seen, split: Split, calibration: Calibration, cov: FloatArray, *, camera_still: bool
) -> tuple[Contribution, ...]:
    """Return the budget of a typical heading change of the clip: each contribution's median over its turns.

    The first four (three where the camera stood) are independent and add in squares; the others tell what the one of
    the calibration is made of, and are correlated.
    """
    rests = [r for r in split.rests if len(r.before) and len(r.after)]
    if len(rests) < 2:
        return ()
    share = pooled_share(seen.left, rests)
    pairs = list(itertools.pairwise(rests))
    parts = [parts_of_change(seen, *pair, cov, share, split.lag, camera_still=camera_still) for pair in pairs]
    lines = [
        Contribution(
            name="what averaging over the two rests leaves",
            u_deg=_typical(part.rests for part in parts),
            evaluation="A",
            degrees_of_freedom=_rests_freedom(len(rests)),
            basis="spread of the 13 redundant corner coordinates, rest by rest",
        ),
        Contribution(
            name="lag of the coded picture",
            u_deg=math.sqrt(float(np.mean([part.lag for part in parts]))),
            evaluation="A" if split.lag.n_jumps else "B",
            degrees_of_freedom=split.lag.n_jumps + USUAL_COUNTS,
            basis=f"{split.lag.n_jumps} jumps at key frames inside rests, and what coders usually leave",
        ),
    ]
    if not camera_still:
        lines.append(
            Contribution(
                name="view held steady by cards",
                u_deg=_typical(part.view for part in parts),
                evaluation="A",
                degrees_of_freedom=_view_freedom(seen, rests),
                basis="scatter of the heading within a rest; stretches of 0.3 s count as independent",
            )
        )
    levers = np.array(
        [
            seen.by_global[after.before].mean(axis=0) - seen.by_global[before.after].mean(axis=0)
            for before, after in pairs
        ]
    )
    levers = levers.reshape(len(levers), -1, N_GLOBAL).sum(axis=1)  # each turn lies in one view
    freedom = max(REDUNDANCY * n_sectors(calibration.headings_rad) - CALIBRATED, 1.0)
    lines.append(_of_calibration(CALIBRATION, _typical(part.plane for part in parts), freedom))
    for name, places in GROUPS.items():
        variance = np.einsum("mi,ij,mj->m", levers[:, places], calibration.cov[places, places], levers[:, places])
        lines.append(_of_calibration(PART_OF_IT + name, _typical(variance), freedom))
    return tuple(lines)


def _typical(variances: Iterable[float] | FloatArray) -> float:
    return math.sqrt(max(float(np.median(np.fromiter(variances, dtype=float))), 0.0))


def _of_calibration(name: str, u_deg: float, freedom: float) -> Contribution:
    return Contribution(
        name=name,
        u_deg=u_deg,
        evaluation="A",
        degrees_of_freedom=freedom,
        basis="covariance of the calibration over the rotation",
    )


def _rests_freedom(n_rests: int) -> float:
    """Return the degrees of freedom of the variance that two rests leave, each half its own and half the clip's."""
    return 2.0 / (0.25 / REDUNDANCY + 0.75 / (REDUNDANCY * n_rests))


def _view_freedom(seen: Seen, rests: list[RestHeading]) -> float:
    lengths_s = [float(seen.time_s[r.after[-1]] - seen.time_s[r.after[0]]) for r in rests]
    return 2.0 * max(float(np.median(lengths_s)) / HAND_S - 1.0, 1.0)


def combined_of(budget: tuple[Contribution, ...]) -> Combined:
    """Return the combined and expanded uncertainty (deg) of the budget's independent lines."""
    return combine((line.u_deg, line.degrees_of_freedom) for line in budget if not line.name.startswith(PART_OF_IT))
