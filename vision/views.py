"""Several views of one clip: a camera that was knocked, where no floor card holds the view, has a map of its own then.

Each stretch in which the camera stood still and the robot turned far enough is calibrated by itself. Headings are
compared only within a stretch. How the one view lies to the other is not known, nor needed; so that the track does not
jump, the robot is taken to have stood still in between.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag

from vision.bundle import Calibration, calibrate
from vision.errors import PlaneError
from vision.observations import CornerTrack
from vision.plane import N_GLOBAL
from vision.poses import Poses, solve_poses
from vision.records import FloatArray
from vision.steady import ENOUGH_RAD, CameraPath, blanked

EDGE_FRAMES = 5
"""Frames at the end of one view and the start of the next that say where the robot stood."""


@dataclass(frozen=True, eq=False, slots=True)
class View:
    """A stretch of a clip and its own calibration.

    Parameters
    ----------
    start_s, end_s : float
        When the camera stood still.
    calibration : Calibration
    from_s, until_s : float
        When no other stretch with a calibration is nearer; infinite at the ends of the clip.
    """

    start_s: float
    end_s: float
    calibration: Calibration
    from_s: float = -np.inf
    until_s: float = np.inf

    def holds(self, time_s: FloatArray) -> NDArray[np.bool_]:
        """Return which moments are worked out by this view, shape (N,)."""
        return (time_s >= self.from_s) & (time_s < self.until_s)


def further_views(corners: CornerTrack, path: CameraPath) -> tuple[View, ...]:
    """Return the still stretches, besides the longest, that calibrate themselves; none if anything holds the view."""
    if not path.loose or path.best is None:
        return ()
    found: list[View] = []
    for start_s, end_s in path.stills:
        if (start_s, end_s) == path.best:
            continue
        outside = (corners.time_s < start_s) | (corners.time_s > end_s)
        try:
            calibration = calibrate(blanked(corners, outside))
        except (PlaneError, np.linalg.LinAlgError):
            continue
        if calibration.turned_rad > ENOUGH_RAD:
            found.append(View(start_s, end_s, calibration))
    return _bordered(found, path.best)


def _bordered(views: list[View], best: tuple[float, float]) -> tuple[View, ...]:
    """Give every moment outside all still stretches to the nearest of them."""
    stills = sorted([best, *((view.start_s, view.end_s) for view in views)])
    borders = [-np.inf, *(0.5 * (a[1] + b[0]) for a, b in itertools.pairwise(stills)), np.inf]
    reach = {still: (borders[k], borders[k + 1]) for k, still in enumerate(stills)}
    return tuple(
        replace(view, from_s=reach[view.start_s, view.end_s][0], until_s=reach[view.start_s, view.end_s][1])
        for view in views
    )


def in_first_view(time_s: FloatArray, views: tuple[View, ...]) -> NDArray[np.bool_]:
    """Return which moments belong to no further view, shape (N,)."""
    first = np.ones(len(time_s), dtype=bool)
    for view in views:
        first &= ~view.holds(time_s)
    return first


def solve_views(corners: CornerTrack, calibration: Calibration, views: tuple[View, ...]) -> tuple[Poses, FloatArray]:
    """Return the poses, each by the calibration of its own view, and the covariance of all calibrations together.

    Returns
    -------
    poses : Poses
        ``by_global`` has 21 columns for the first calibration and 21 for each further view.
    cov : ndarray, shape (21 K, 21 K)
    """
    poses = solve_poses(corners, calibration)
    if not views:
        return poses, calibration.cov
    n_frames, width = len(corners.time_s), N_GLOBAL * (1 + len(views))
    values = {field.name: getattr(poses, field.name).copy() for field in fields(poses) if field.name != "by_global"}
    by_global = np.zeros((n_frames, width))
    by_global[:, :N_GLOBAL] = poses.by_global
    spans = [in_first_view(corners.time_s, views)]
    for number, view in enumerate(views, 1):
        own = solve_poses(corners, view.calibration)
        inside = view.holds(corners.time_s)
        spans.append(inside)
        for name, array in values.items():
            array[inside] = getattr(own, name)[inside]
        by_global[inside] = 0.0
        by_global[inside, N_GLOBAL * number : N_GLOBAL * (number + 1)] = own.by_global[inside]
    _join(values, sorted(spans, key=lambda inside: int(np.argmax(inside))))
    cov: FloatArray = block_diag(calibration.cov, *(view.calibration.cov for view in views))
    return Poses(by_global=by_global, **values), cov


def _join(values: dict[str, FloatArray], spans: list[NDArray[np.bool_]]) -> None:
    """Move the frames of each view, in order of time, to where those of the one before left the robot."""
    for before, after in itertools.pairwise(spans):
        edge = int(np.argmax(after))
        earlier = _still(values, np.flatnonzero(before & (np.arange(len(before)) < edge)), last=True)
        later = _still(values, np.flatnonzero(after), last=False)
        if earlier is None or later is None:
            continue
        turn_rad = earlier[0] - later[0]
        c, s = np.cos(turn_rad), np.sin(turn_rad)
        x_mm, y_mm = values["x_mm"][after] - later[1], values["y_mm"][after] - later[2]
        values["heading_rad"][after] += turn_rad
        values["x_mm"][after] = earlier[1] + c * x_mm - s * y_mm
        values["y_mm"][after] = earlier[2] + s * x_mm + c * y_mm


def _still(values: dict[str, FloatArray], frames: NDArray[np.intp], *, last: bool) -> FloatArray | None:
    """Return heading (rad), x and y (mm) over the few seen frames at one end of a view; None if there are none."""
    known = frames[np.isfinite(values["heading_rad"][frames])]
    few = known[-EDGE_FRAMES:] if last else known[:EDGE_FRAMES]
    if len(few) == 0:
        return None
    heading = np.unwrap(values["heading_rad"][few])
    return np.array([np.median(heading), np.median(values["x_mm"][few]), np.median(values["y_mm"][few])])
