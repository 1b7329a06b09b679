"""Rolling shutter: rows of a picture are taken one after the other, so a moving robot is seen at many moments at once.

A corner in row v is seen at the frame's time plus the line delay times the distance of v from the picture's middle.
While the robot stands that changes nothing. While it moves it displaces the corners by their speed in the picture times
that time, and the pair no longer looks rigid: from that the line delay is estimated, turn by turn, and the corners of
moving frames are carried to the moment of the picture's middle. Frames at rest are left as they are, bit by bit.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from vision.bundle import Calibration, whitening
from vision.observations import CornerTrack
from vision.plane import from_floor, project_pair
from vision.poses import Poses
from vision.records import FloatArray
from vision.rests import stretches

SURE = 4.0
"""An estimate counts from so many standard uncertainties on."""

FEWEST_MOTIONS = 3
"""Motions that must agree; their scatter is the uncertainty of the estimate."""

LONGEST_READ_S = 0.06
"""No camera takes longer over a frame."""


@dataclass(frozen=True, slots=True)
class LineDelay:
    """Time from one row of the picture to the next, along the upright picture's scan axis.

    Parameters
    ----------
    delay_s : float
        Per row; negative if rows are taken upwards (or leftwards). 0 where none is corrected.
    u_s : float
        Standard uncertainty; NaN where it was given or is not known.
    how : str
        ``given``, ``estimated`` or ``not found``.
    n_motions : int
        Motions from which it was estimated.
    """

    delay_s: float
    u_s: float
    how: str
    n_motions: int


def scan_axis(rotation_deg: int) -> tuple[int, float]:
    """Return the axis of the upright picture (0 across, 1 down) along which rows are taken, and the direction.

    Parameters
    ----------
    rotation_deg : int
        Quarter turns, counter-clockwise, that brought the stored picture upright.
    """
    return ((1, 1.0), (0, 1.0), (1, -1.0), (0, -1.0))[(rotation_deg // 90) % 4]


def line_delay(
    track: CornerTrack,
    calibration: Calibration,
    poses: Poses,
    moving: NDArray[np.bool_],
    axis: tuple[int, float],
    given_s: float | None,
) -> LineDelay:
    """Return the line delay that was given, or else the one that the moving frames tell."""
    if given_s is not None:
        return LineDelay(given_s, np.nan, "given", 0)
    return find_line_delay(track, calibration, poses, moving, axis)


def find_line_delay(
    track: CornerTrack, calibration: Calibration, poses: Poses, moving: NDArray[np.bool_], axis: tuple[int, float]
) -> LineDelay:
    """Estimate the line delay from the corners of moving frames.

    Parameters
    ----------
    track, calibration, poses
    moving : ndarray of bool, shape (N,)
        Frames in which the robot moves.
    axis : (int, float)
        From `scan_axis`.

    Returns
    -------
    LineDelay
        ``not found``, with a delay of 0, unless several motions agree on it.
    """
    frames, skew = _skew(track, calibration, poses, moving, axis)
    if len(frames) == 0:
        return LineDelay(0.0, np.nan, "not found", 0)
    values, weights = _by_motion(track, calibration, poses, moving, frames, skew)
    if len(values) < FEWEST_MOTIONS:
        return LineDelay(0.0, np.nan, "not found", len(values))
    delay_s = float(np.average(values, weights=weights))
    share = weights / weights.sum()
    u_s = float(np.sqrt(np.sum(share**2 * (values - delay_s) ** 2) * len(values) / (len(values) - 1)))
    whole_s = abs(delay_s) * track.image_px[1 if axis[0] == 1 else 0]
    if abs(delay_s) < SURE * u_s or whole_s > LONGEST_READ_S:
        return LineDelay(0.0, u_s, "not found", len(values))
    return LineDelay(delay_s, u_s, "estimated", len(values))


def at_one_moment(
    track: CornerTrack,
    calibration: Calibration,
    poses: Poses,
    moving: NDArray[np.bool_],
    axis: tuple[int, float],
    delay_s: float,
) -> CornerTrack:
    """Return the track with the corners of moving frames where they were when the picture's middle row was taken."""
    frames, skew = _skew(track, calibration, poses, moving, axis)
    corners_px = track.corners_px.copy()
    corners_px[frames] -= delay_s * skew.reshape(-1, 2, 4, 2)
    return replace(track, corners_px=corners_px)


def _skew(
    track: CornerTrack, calibration: Calibration, poses: Poses, moving: NDArray[np.bool_], axis: tuple[int, float]
) -> tuple[NDArray[np.intp], FloatArray]:
    """Return moving frames whose speed is known, and how a line delay displaces their corners (px per s of delay)."""
    time_s = track.time_s
    known = np.isfinite(poses.heading_rad)
    inner = np.flatnonzero(moving[1:-1] & known[:-2] & known[1:-1] & known[2:]) + 1
    step_s = time_s[inner + 1] - time_s[inner - 1]
    usual_s = 2.0 * float(np.median(np.diff(time_s))) if len(time_s) > 1 else 0.0
    frames: NDArray[np.intp] = inner[(step_s > 0.0) & (step_s < 1.6 * usual_s)]
    if len(frames) == 0:
        return frames, np.zeros((0, 16))
    units = calibration.units
    floor = from_floor(poses.heading_rad, poses.x_mm, poses.y_mm, units)
    apart = floor[frames + 1] - floor[frames - 1]
    apart[:, 0] = np.angle(np.exp(1j * apart[:, 0]))
    speed = apart / (time_s[frames + 1] - time_s[frames - 1])[:, None]
    seen = project_pair(calibration.p, floor[frames], units, by_global=False)
    velocity_px_s = np.einsum("nkj,nj->nk", seen.by_pose, speed)
    place, direction = axis
    middle = 0.5 * (track.image_px[place] - 1.0)
    rows = direction * (np.repeat(seen.corners_px.reshape(-1, 8, 2)[..., place], 2, axis=1) - middle)
    return frames, velocity_px_s * rows


def _by_motion(
    track: CornerTrack,
    calibration: Calibration,
    poses: Poses,
    moving: NDArray[np.bool_],
    frames: NDArray[np.intp],
    skew: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Return the line delay (s) that each motion asks for, and the weight of each."""
    both = np.all(np.isfinite(track.corners_px[frames]), axis=(1, 2, 3))
    frames, skew = frames[both], skew[both]
    floor = from_floor(poses.heading_rad[frames], poses.x_mm[frames], poses.y_mm[frames], calibration.units)
    seen = project_pair(calibration.p, floor, calibration.units, by_global=False)
    whiten = whitening(track.information[frames])
    left = _apply(whiten, (track.corners_px[frames].reshape(-1, 16) - seen.corners_px)[..., None])
    j_pose, pull = _apply(whiten, seen.by_pose), _apply(whiten, skew[..., None])
    # What a pose takes up says nothing; only what is left of the displacement is compared with what is left over.
    information = np.swapaxes(j_pose, 1, 2) @ j_pose
    taken = np.linalg.solve(information, np.swapaxes(j_pose, 1, 2) @ np.concatenate([left, pull], axis=2))
    free = np.concatenate([left, pull], axis=2) - j_pose @ taken
    top, bottom = np.sum(free[..., 0] * free[..., 1], axis=1), np.sum(free[..., 1] ** 2, axis=1)
    values, weights = [], []
    for motion in stretches(moving):
        inside = (frames >= motion.first) & (frames <= motion.last)
        weight = float(bottom[inside].sum())
        if weight > 0.0:
            values.append(float(top[inside].sum()) / weight)
            weights.append(weight)
    return np.array(values), np.array(weights)


def _apply(whiten: FloatArray, columns: FloatArray) -> FloatArray:
    n_frames, _, n_columns = columns.shape
    out: FloatArray = (whiten @ columns.reshape(n_frames, 2, 8, n_columns)).reshape(n_frames, 16, n_columns)
    return out
