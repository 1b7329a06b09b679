"""Heading changes from the edges of the squares against those from the alignment: two estimates, one picture.

The edges know nothing of the pattern, the tone curve or the point spread, and are several times noisier. Where both
agree within that noise, neither is misled by anything that the other does not share.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import stats

from vision.budget import RestHeading
from vision.bundle import Calibration
from vision.observations import CornerTrack, EdgeLook
from vision.poses import solve_poses
from vision.records import FloatArray
from vision.turns import Seen

CHANCE = 0.002
"""A mean or a slope that scatter alone reaches this often is no disagreement."""

FEWEST_CHANGES = 4


@dataclass(frozen=True, slots=True, kw_only=True)
class CrossCheck:
    """Heading changes by the edges less those by the alignment (deg).

    Parameters
    ----------
    mean_deg, spread_deg, largest_deg : float
        Mean, standard deviation and largest size of the differences.
    gain_share : float
        Slope of the differences over the heading changes: what a wrong scale of angles would make.
    u_gain_share : float
    n_changes : int
    n_looks : int
        Frames at rest that were looked at.
    """

    mean_deg: float
    spread_deg: float
    largest_deg: float
    gain_share: float
    u_gain_share: float
    n_changes: int
    n_looks: int

    @property
    def agree(self) -> bool:
        """Whether the differences are no more than their own scatter explains."""
        if self.n_changes < FEWEST_CHANGES:
            return True
        u_mean_deg = self.spread_deg / np.sqrt(self.n_changes)
        sure = float(stats.t.ppf(1.0 - 0.5 * CHANCE, self.n_changes - 1))
        mean_agrees = abs(self.mean_deg) <= sure * u_mean_deg
        return bool(mean_agrees and abs(self.gain_share) <= sure * self.u_gain_share)


def cross_check(
    track: CornerTrack, calibration: Calibration, seen: Seen, rests: Sequence[RestHeading]
) -> CrossCheck | None:
    """Return the cross-check of a clip; None if fewer than two rests were looked at."""
    looks = [look for look in track.edge_looks if not look.alone]
    if not looks:
        return None
    index = np.searchsorted(track.time_s, [look.time_s for look in looks]).clip(0, len(track.time_s) - 1)
    apart_deg = _apart_deg(track, calibration, looks, index)
    times_s = track.time_s[index]
    by_rest = [_mean_over(apart_deg, times_s, seen, rest) for rest in rests]
    differences, changes = [], []
    for (before, first), (after, second) in itertools.pairwise(zip(rests, by_rest, strict=True)):
        if np.isfinite(first) and np.isfinite(second):
            differences.append(second - first)
            changes.append(float(seen.heading_deg[after.before].mean() - seen.heading_deg[before.after].mean()))
    if not differences:
        return None
    found, size = np.array(differences), np.array(changes)
    gain, u_gain = _slope(size, found)
    return CrossCheck(
        mean_deg=float(found.mean()),
        spread_deg=float(found.std(ddof=1)) if len(found) > 1 else np.nan,
        largest_deg=float(np.abs(found).max()),
        gain_share=gain,
        u_gain_share=u_gain,
        n_changes=len(found),
        n_looks=len(looks),
    )


def _apart_deg(
    track: CornerTrack, calibration: Calibration, looks: list[EdgeLook], index: np.ndarray
) -> FloatArray:
    """Return the heading by the edges less that by the alignment, both through one calibration, shape (L,)."""
    aligned = track.corners_px[index]
    information = np.stack([look.information for look in looks])
    edged = aligned + np.stack([look.apart_px for look in looks])
    few = {"time_s": track.time_s[index], "information": information}
    by_edges = solve_poses(replace(track, corners_px=edged, **few), calibration)
    by_pattern = solve_poses(replace(track, corners_px=aligned, time_s=few["time_s"],
                                     information=track.information[index]), calibration)  # fmt: skip
    turned = np.exp(1j * (by_edges.heading_rad - by_pattern.heading_rad))
    apart: FloatArray = np.degrees(np.angle(turned))
    return apart


def _mean_over(apart_deg: FloatArray, times_s: FloatArray, seen: Seen, rest: RestHeading) -> float:
    first_s, last_s = seen.time_s[rest.still.first], seen.time_s[rest.still.last]
    inside = (times_s >= first_s) & (times_s <= last_s) & np.isfinite(apart_deg)
    return float(apart_deg[inside].mean()) if inside.any() else np.nan


def _slope(size: FloatArray, found: FloatArray) -> tuple[float, float]:
    """Return the slope through the origin and its standard uncertainty."""
    square = float(size @ size)
    if square == 0.0 or len(size) < 2:
        return 0.0, np.inf
    gain = float(size @ found) / square
    left = found - gain * size
    return gain, float(np.sqrt(left @ left / (len(size) - 1) / square))
