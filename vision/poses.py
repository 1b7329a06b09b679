"""A pose per frame, from its corners and the calibrated plane, with what each heading owes to the calibration."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from vision.bundle import Calibration, start_poses, whitening
from vision.observations import CornerTrack
from vision.plane import N_GLOBAL, Projection, Units, corners_at, project_pair, to_floor, to_plane
from vision.records import FloatArray

CHUNK = 4096
"""Frames solved at once: bounds the memory on long clips."""


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Poses:
    """Poses of N frames, NaN where nothing was seen.

    Parameters
    ----------
    heading_rad : ndarray, shape (N,)
        Counter-clockwise, not unwrapped.
    x_mm, y_mm : ndarray, shape (N,)
    u_heading_rad : ndarray, shape (N,)
        From the sensor noise of the frame alone.
    by_global : ndarray, shape (N, 21)
        Derivative of the heading (rad) by the calibration's parameters.
    left : ndarray, shape (N, 16)
        Corner residuals in units of their own noise, uncorrelated; NaN for a marker not seen.
    residual_px : ndarray, shape (N,)
        Root mean square distance of the corners from the fitted pair.
    scale : ndarray, shape (N,)
        Apparent size of the pair relative to the calibrated plane.
    """

    heading_rad: FloatArray
    x_mm: FloatArray
    y_mm: FloatArray
    u_heading_rad: FloatArray
    by_global: FloatArray
    left: FloatArray
    residual_px: FloatArray
    scale: FloatArray


def solve_poses(track: CornerTrack, calibration: Calibration) -> Poses:
    """Solve every frame of a track for its pose."""
    n_frames = len(track.time_s)
    parts = [_solve_chunk(track, calibration, slice(k, k + CHUNK)) for k in range(0, n_frames, CHUNK)]
    return Poses(**{name: np.concatenate([part[name] for part in parts]) for name in parts[0]})


def _solve_chunk(track: CornerTrack, calibration: Calibration, rows: slice) -> dict[str, FloatArray]:
    corners_px = track.corners_px[rows].reshape(-1, 16)
    known = np.isfinite(corners_px)
    seen = known.any(axis=1)
    out = _blank(len(corners_px))
    if not seen.any():
        return out
    p, units = calibration.p, calibration.units
    observed, mask = corners_px[seen], known[seen]
    whiten = whitening(track.information[rows][seen])
    poses = start_poses(observed, p, units)
    for _ in range(4):
        _, _, left, j_pose, information = _linear(p, poses, observed, mask, whiten, units, by_global=False)
        gradient = np.einsum("nki,nk->ni", j_pose, left)
        poses = poses + np.linalg.solve(information, gradient[..., None])[..., 0]
    projection, left_px, left, j_pose, information = _linear(p, poses, observed, mask, whiten, units)
    cov = np.linalg.inv(information)
    j_global = _apply(whiten, projection.by_global)
    pull = np.einsum("nki,nkj->nij", j_pose, j_global)
    heading_rad, x_mm, y_mm = to_floor(poses, units)
    out["heading_rad"][seen], out["x_mm"][seen], out["y_mm"][seen] = heading_rad, x_mm, y_mm
    out["u_heading_rad"][seen] = np.sqrt(cov[:, 0, 0])
    out["by_global"][seen] = np.einsum("ni,nij->nj", cov[:, 0], pull)  # the sign of y down is undone by that of -J
    out["left"][seen] = np.where(mask, left, np.nan)
    out["residual_px"][seen] = np.sqrt(2.0 * np.sum(left_px**2, axis=1) / mask.sum(axis=1))
    out["scale"][seen] = _scale(observed, poses, calibration)
    return out


def _blank(n_frames: int) -> dict[str, FloatArray]:
    scalars = ("heading_rad", "x_mm", "y_mm", "u_heading_rad", "residual_px", "scale")
    out = {name: np.full(n_frames, np.nan) for name in scalars}
    return out | {
        "by_global": np.full((n_frames, N_GLOBAL), np.nan),
        "left": np.full((n_frames, 16), np.nan),
    }


def _apply(whiten: FloatArray, columns: FloatArray) -> FloatArray:
    n_frames, _, n_columns = columns.shape
    out: FloatArray = (whiten @ columns.reshape(n_frames, 2, 8, n_columns)).reshape(n_frames, 16, n_columns)
    return out


def _linear(
    p: FloatArray,
    poses: FloatArray,
    observed: FloatArray,
    mask: NDArray[np.bool_],
    whiten: FloatArray,
    units: Units,
    *,
    by_global: bool = True,
) -> tuple[Projection, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return the projection, the residuals (px and whitened), the whitened pose slopes and their information."""
    projection = project_pair(p, poses, units, by_global=by_global)
    left_px = np.where(mask, observed - projection.corners_px, 0.0)
    left = _apply(whiten, left_px[..., None])[..., 0]
    j_pose = _apply(whiten, projection.by_pose)
    information = np.swapaxes(j_pose, 1, 2) @ j_pose
    return projection, left_px, left, j_pose, information


def _scale(observed: FloatArray, poses: FloatArray, calibration: Calibration) -> FloatArray:
    """Return the least-squares size of the seen corners about their middle, relative to the modelled ones."""
    p, units = calibration.p, calibration.units
    model = corners_at(p, poses, units)
    points = to_plane(observed.reshape(-1, 8, 2), p, units)
    ideal = np.where(np.isfinite(points), to_plane(model.reshape(-1, 8, 2), p, units), np.nan)
    around = points - np.nanmean(points, axis=1, keepdims=True)
    meant = ideal - np.nanmean(ideal, axis=1, keepdims=True)
    size: FloatArray = np.sqrt(np.nansum(around**2, axis=(1, 2)) / np.nansum(meant**2, axis=(1, 2)))
    return size
