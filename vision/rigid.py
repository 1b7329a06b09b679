"""Small pieces of plane geometry shared by tracking and calibration: homographies and rigid motions.

Plane coordinates here are seen as the picture shows them (x right, y down); the one flip to the floor's y up is in
`vision.plane`.
"""

from __future__ import annotations

import math

import cv2
import numpy as np

from vision.records import FloatArray


def project(homography: FloatArray, points: FloatArray) -> FloatArray:
    """Return `points` (..., 2) mapped by a homography (3, 3); NaN on its horizon."""
    mapped = points @ homography[:, :2].T
    mapped += homography[:, 2]
    w = mapped[..., 2:]
    if w.size and float(w.min()) > 0.0:
        ahead: FloatArray = mapped[..., :2] / w
        return ahead
    with np.errstate(divide="ignore", invalid="ignore"):
        anywhere: FloatArray = mapped[..., :2] / w
    anywhere[~(w[..., 0] > 0.0)] = np.nan
    return anywhere


def projected_slope(homography: FloatArray, points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return mapped points (K, 2) and the derivative of each by its source point, shape (K, 2, 2)."""
    w = points @ homography[2, :2] + homography[2, 2]
    mapped = (points @ homography[:2, :2].T + homography[:2, 2]) / w[:, None]
    slope = (homography[None, :2, :2] - mapped[:, :, None] * homography[2, :2]) / w[:, None, None]
    return mapped, slope


def inverse(map_: FloatArray) -> FloatArray:
    """Return the inverse of a map, shape (3, 3), by cofactors (NaN where it has none)."""
    (a, b, c), (d, e, f), (g, h, i) = map_.tolist()
    p, q, r = e * i - f * h, f * g - d * i, d * h - e * g
    det = a * p + b * q + c * r
    if det == 0.0:
        return np.full((3, 3), np.nan)
    cofactors = [
        [p, c * h - b * i, b * f - c * e],
        [q, a * i - c * g, c * d - a * f],
        [r, b * g - a * h, a * e - b * d],
    ]
    return np.array(cofactors, dtype=np.float64) / np.float64(det)


def rigid(turn_rad: float, x: float, y: float) -> FloatArray:
    """Return the motion that turns by `turn_rad` about the origin, then shifts, shape (3, 3)."""
    c, s = math.cos(turn_rad), math.sin(turn_rad)
    return np.array([[c, -s, x], [s, c, y], [0.0, 0.0, 1.0]])


def rigid_between(source: FloatArray, target: FloatArray) -> tuple[float, float, float]:
    """Return the least-squares rigid motion (turn_rad, x, y) that takes `source` (K, 2) to `target`.

    Source: Kabsch (1976), in two dimensions closed form.
    """
    share = 1.0 / len(source)
    centre_s, centre_t = source.sum(axis=0) * share, target.sum(axis=0) * share
    (xx, xy), (yx, yy) = ((source - centre_s).T @ (target - centre_t)).tolist()
    turn_rad = math.atan2(xy - yx, xx + yy)
    c, s = math.cos(turn_rad), math.sin(turn_rad)
    (x_s, y_s), (x_t, y_t) = centre_s.tolist(), centre_t.tolist()
    return turn_rad, x_t - (c * x_s - s * y_s), y_t - (s * x_s + c * y_s)


def fit_homography(source: FloatArray, target: FloatArray) -> FloatArray | None:
    """Return the least-squares homography from `source` (K, 2) to `target`, or None where there is none."""
    found, _ = cv2.findHomography(source, target, 0)
    if found is None or not np.all(np.isfinite(found)) or np.linalg.matrix_rank(found) < 3:
        return None  # points on one line leave a map that cannot be inverted
    map_: FloatArray = np.asarray(found, dtype=np.float64)
    return map_
