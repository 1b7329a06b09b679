"""The uncertainty of a heading change.

What is left at a rest when its frames are averaged is not noise: a coded picture repeats its own errors until the
next key frame, so dividing by the root of the number of frames would be wrong. The rigid pair has sixteen corner
coordinates and three degrees of freedom; the thirteen others show, rest by rest, how large the errors are that
averaging leaves. Pooled over the rests of a clip they scale the heading's own uncertainty (a type A evaluation with
13 degrees of freedom a rest).
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from vision.bundle import Calibration
from vision.lag import Lag
from vision.plane import AFT_SIZE, BASE, LENS, LIFT, N_GLOBAL, PRINT, SHAPE
from vision.records import Contribution, FloatArray
from vision.rests import Stretch

if TYPE_CHECKING:
    from vision.turns import Seen, Split

HAND_S = 0.3
"""Time over which the view of a camera in the hand, held steady by cards, errs in one direction."""

REDUNDANCY = 13.0
"""Corner coordinates of the pair beyond its pose."""


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


def rest_variance_deg2(seen: Seen, frames: NDArray[np.intp], clip_share: float, *, camera_still: bool) -> float:
    """Return the variance of the mean heading of a rest.

    Parameters
    ----------
    seen : Seen
    frames : ndarray of int
        Frames averaged.
    clip_share : float
        `pooled_share` of the clip: a rest's own share has few degrees of freedom and is drawn half way to it.
    camera_still : bool
        A view that is held steady by cards adds an error of its own in every frame; as it follows the slow
        drift of a hand, only stretches of `HAND_S` count as independent.
    """
    own = frozen_share(seen.left, frames)
    share = clip_share if not np.isfinite(own) else 0.5 * (own + clip_share)
    variance = share * float(np.median(seen.u_heading_deg[frames])) ** 2
    if camera_still or len(frames) < 3:
        return variance
    length_s = float(seen.time_s[frames[-1]] - seen.time_s[frames[0]])
    return variance + float(np.var(seen.heading_deg[frames], ddof=1)) / max(length_s / HAND_S, 1.0)


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
    total = sum(
        rest_variance_deg2(seen, frames, clip_share, camera_still=camera_still)
        for frames in (before.after, after.before)
    )
    total += (before.lags + after.lags) * lag.u_deg**2
    lever = seen.by_global[after.before].mean(axis=0) - seen.by_global[before.after].mean(axis=0)
    return float(np.sqrt(total + lever @ cov @ lever))


def budget_of(seen: Seen, split: Split, calibration: Calibration, *, camera_still: bool) -> tuple[Contribution, ...]:
    """Return the budget of a typical heading change of the clip (medians over its turns)."""
    rests = [r for r in split.rests if len(r.before) and len(r.after)]
    if len(rests) < 2:
        return ()
    share = pooled_share(seen.left, rests)
    left = [rest_variance_deg2(seen, rest.after, share, camera_still=camera_still) for rest in rests]
    levers = np.array(
        [
            seen.by_global[after.before].mean(axis=0) - seen.by_global[before.after].mean(axis=0)
            for before, after in itertools.pairwise(rests)
        ]
    )
    levers = levers.reshape(len(levers), -1, N_GLOBAL).sum(axis=1)  # each turn lies in one view
    parts = [
        Contribution(
            name="what averaging over the two rests leaves",
            u_deg=float(np.sqrt(2.0 * np.median(left))),
            evaluation="A",
            degrees_of_freedom=REDUNDANCY * len(rests),
            basis="spread of the 13 redundant corner coordinates, rest by rest",
        )
    ]
    groups = {
        "plane map": SHAPE,
        "lens": LENS,
        "marker mounting": slice(BASE, AFT_SIZE + 1),
        "marker heights": LIFT,
        "marker prints": PRINT,
    }
    for name, places in groups.items():
        part = np.einsum("mi,ij,mj->m", levers[:, places], calibration.cov[places, places], levers[:, places])
        parts.append(
            Contribution(
                name=name,
                u_deg=float(np.sqrt(np.median(part))),
                evaluation="A",
                degrees_of_freedom=max(13.0 * calibration.n_frames - 13.0, 1.0),
                basis="covariance of the calibration over the rotation",
            )
        )
    return tuple(parts)
