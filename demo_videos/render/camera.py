"""The camera's geometry: rays, poses, projection."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from demo_videos.render.scene import Camera

FloatArray = NDArray[np.float64]

DOWN = np.diag([1.0, -1.0, -1.0])
"""Floor axes to camera axes when looking straight down: y flips, since image y points down."""


@dataclass(frozen=True, eq=False)
class View:
    """Camera poses, one each for M instants: ``camera = rotation @ (floor - centre_mm)``."""

    rotation: FloatArray
    """Shape (M, 3, 3)."""
    centre_mm: FloatArray
    """Shape (M, 3)."""
    zoom: FloatArray
    """Shape (M,): scale of the picture about its centre, before the lens distortion."""

    def rows(self, picked: slice) -> View:
        """Return the poses of some rows; a single pose stands for all rows."""
        if len(self.zoom) == 1:
            return self
        return View(self.rotation[picked], self.centre_mm[picked], self.zoom[picked])


def view_at(camera: Camera, time_s: ArrayLike) -> View:
    """Return the camera's pose at M times."""
    times = np.atleast_1d(np.asarray(time_s, dtype=float))
    rotation, centre = resting_pose(camera)
    if not camera.moves:
        n = len(times)
        return View(np.tile(rotation, (n, 1, 1)), np.tile(centre, (n, 1)), np.ones(n))
    total = np.sum([move.at(times) for move in camera.moves], axis=0)
    return View(
        rotation_matrices(total[:, 3:6]) @ rotation,
        centre + total[:, :3],
        np.exp(total[:, 6]),
    )


def resting_pose(camera: Camera) -> tuple[FloatArray, FloatArray]:
    """Return floor-to-camera rotation (3, 3) and camera centre (3,) in mm, before any movement."""
    tilt, azimuth, roll = np.deg2rad([camera.tilt_deg, camera.tilt_azimuth_deg, camera.roll_deg])
    axis = np.array([-np.sin(azimuth), np.cos(azimuth), 0.0])
    lean = rotation_matrices(tilt * axis[None])[0]
    about_axis = rotation_matrices(np.array([[0.0, 0.0, roll]]))[0]
    rotation = about_axis @ DOWN @ lean.T
    centre = np.array([*camera.look_at_mm, 0.0]) + camera.distance_mm * lean[:, 2]
    return rotation, centre


def rotation_matrices(vectors_rad: FloatArray) -> FloatArray:
    """Return rotation matrices (M, 3, 3) for rotation vectors (M, 3), by Rodrigues' formula."""
    v = np.asarray(vectors_rad, dtype=float)
    angle = np.linalg.norm(v, axis=1)[:, None, None]
    zero = np.zeros(len(v))
    x, y, z = v.T
    cross = np.stack([zero, -z, y, z, zero, -x, -y, x, zero], axis=1).reshape(-1, 3, 3)
    return np.eye(3) + np.sinc(angle / np.pi) * cross + 0.5 * np.sinc(angle / (2 * np.pi)) ** 2 * (cross @ cross)


def principal_point(camera: Camera) -> tuple[float, float]:
    """Return the picture's centre in px."""
    return (camera.width_px - 1) / 2.0, (camera.height_px - 1) / 2.0


def distort(camera: Camera, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Apply the radial distortion to normalised coordinates."""
    r2 = x * x + y * y
    factor = 1.0 + r2 * (camera.k1 + camera.k2 * r2)
    return x * factor, y * factor


def undistort(camera: Camera, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Invert `distort` by Newton's method on the radius."""
    if camera.k1 == 0.0 and camera.k2 == 0.0:
        return x, y
    rd = np.hypot(x, y)
    r = rd.copy()
    for _ in range(4):
        r2 = r * r
        value = r * (1.0 + r2 * (camera.k1 + camera.k2 * r2)) - rd
        r -= value / (1.0 + r2 * (3.0 * camera.k1 + 5.0 * camera.k2 * r2))
    ratio = np.divide(r, rd, out=np.ones_like(rd), where=rd > 0)
    return x * ratio, y * ratio


def project(camera: Camera, points_mm: ArrayLike, time_s: float = 0.0) -> FloatArray:
    """Return where floor-frame points (K, 3) appear, shape (K, 2), in px (the stabiliser's warp left out)."""
    view = view_at(camera, time_s)
    p = (np.asarray(points_mm, dtype=float) - view.centre_mm[0]) @ view.rotation[0].T
    return to_pixels(camera, view.zoom[0] * p[:, 0] / p[:, 2], view.zoom[0] * p[:, 1] / p[:, 2])


def to_pixels(camera: Camera, x: FloatArray, y: FloatArray) -> FloatArray:
    """Return pixel positions (..., 2) of undistorted normalised coordinates."""
    xd, yd = distort(camera, x, y)
    cx, cy = principal_point(camera)
    return np.stack([camera.focal_px * xd + cx, camera.focal_px * yd + cy], axis=-1)


def sensor_plane(camera: Camera, pad_px: int, time_s: float | None = None) -> tuple[FloatArray, FloatArray]:
    """Return undistorted coordinates (H, W) of every pixel of the padded picture at the resting focal length."""
    cx, cy = principal_point(camera)
    x, y = np.meshgrid(
        np.arange(-pad_px, camera.width_px + pad_px, dtype=float),
        np.arange(-pad_px, camera.height_px + pad_px, dtype=float),
    )
    if camera.stabiliser is not None and time_s is not None:
        dx, dy = camera.stabiliser.shift_px(x, y, time_s)
        x, y = x + dx, y + dy
    return undistort(camera, (x - cx) / camera.focal_px, (y - cy) / camera.focal_px)
