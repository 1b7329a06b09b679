"""Corners of a marker from the edges of its black square alone: a second estimate, independent of the printed pattern.

Across each side the greys step from paper to ink. Where they step is found on many short profiles by the middle of
their slope, a line is fitted to these places, and neighbouring lines meet in the corners. Nothing of the pattern, the
tone curve or the point spread is supposed, only that all four sides are alike; so what misleads the alignment does not
mislead this, and the two are held against each other at rests. It is several times noisier.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag

from vision.frames import LumaImage
from vision.records import FloatArray

PROFILES = 16
"""Profiles along a side."""

ENDS = 0.14
"""So much of a side is left out at both ends: there the neighbouring side blurs into the profile."""

REACH_MODULES = 0.8
"""Half the length of a profile, in modules: the border is one module wide, the paper around it wider."""

STEP_PX = 0.35
HUBER = 1.5
FEWEST_PROFILES = 8
LEAST_STEP_GREY = 6.0


@dataclass(frozen=True, eq=False, slots=True)
class EdgeCorners:
    """Corners where the sides' lines meet.

    Parameters
    ----------
    corners_px : ndarray, shape (4, 2)
    cov_px2 : ndarray, shape (8, 8)
        Covariance of (x0, y0, x1, ...) from the scatter of the profiles about their lines.
    """

    corners_px: FloatArray
    cov_px2: FloatArray


def edge_corners(image: LumaImage, corners_px: FloatArray, n_modules: int) -> EdgeCorners | None:
    """Return the corners of a marker's black square from its edges.

    Parameters
    ----------
    image : ndarray, shape (height, width)
    corners_px : ndarray, shape (4, 2)
        Where they are believed to be, to within half a module.
    n_modules : int
        Modules along a side, border included.

    Returns
    -------
    EdgeCorners or None
        None where a side shows no clear step, or the marker is not wholly in the picture.
    """
    if not np.all(np.isfinite(corners_px)):
        return None
    along = np.roll(corners_px, -1, axis=0) - corners_px
    lengths_px = np.hypot(along[:, 0], along[:, 1])
    if lengths_px.min() < 8.0:
        return None
    normals = _outwards(corners_px, along / lengths_px[:, None])
    share = np.linspace(ENDS, 1.0 - ENDS, PROFILES)
    reach_px = REACH_MODULES * float(lengths_px.mean()) / n_modules
    across = np.arange(-reach_px, reach_px + 1e-9, STEP_PX)
    places = corners_px[:, None] + share[:, None] * along[:, None]
    greys = _sampled(image, places[:, :, None] + across[:, None] * normals[:, None, None])
    if greys is None:
        return None
    offset, step = _steps(greys.reshape(4 * PROFILES, -1), across)
    offset, step = offset.reshape(4, PROFILES), step.reshape(4, PROFILES)
    good = np.isfinite(offset) & (step > max(LEAST_STEP_GREY, 0.4 * float(np.median(step))))
    if good.sum(axis=1).min() < FEWEST_PROFILES:
        return None
    return _meet(corners_px, normals, *_lines(share, np.where(good, offset, 0.0), good.astype(np.float64)))


def _outwards(corners_px: FloatArray, along: FloatArray) -> FloatArray:
    """Return the unit normals of the four sides that point away from the marker's middle."""
    normals = np.column_stack([along[:, 1], -along[:, 0]])
    halfway = 0.5 * (corners_px + np.roll(corners_px, -1, axis=0)) - corners_px.mean(axis=0)
    out: FloatArray = normals * np.sign(np.sum(normals * halfway, axis=1))[:, None]
    return out


def _sampled(image: LumaImage, points: FloatArray) -> FloatArray | None:
    """Return the grey values at points (..., 2), between pixels interpolated; None if any is out of the picture."""
    x, y = points[..., 0], points[..., 1]
    if x.min() < 0 or y.min() < 0 or x.max() >= image.shape[1] - 1 or y.max() >= image.shape[0] - 1:
        return None
    u, v = np.floor(x).astype(np.intp), np.floor(y).astype(np.intp)
    a, b = x - u, y - v
    low, high = v.min(), v.max() + 2
    left, right = u.min(), u.max() + 2
    crop = image[low:high, left:right].astype(np.float64)
    u, v = u - left, v - low
    top = (1.0 - a) * crop[v, u] + a * crop[v, u + 1]
    bottom = (1.0 - a) * crop[v + 1, u] + a * crop[v + 1, u + 1]
    greys: FloatArray = (1.0 - b) * top + b * bottom
    return greys


def _steps(greys: FloatArray, across: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return where each profile steps from dark to light outwards, and by how much.

    The slope's middle is taken about its own place twice over, within a window that is even about it: the pull of
    whatever lies at the ends of the profile then cancels.
    """
    slope = np.zeros_like(greys)
    slope[:, 1:-1] = np.maximum(greys[:, 2:] - greys[:, :-2], 0.0) / (2.0 * STEP_PX)
    half = 0.6 * float(across[-1])
    offset = np.zeros(len(greys))
    for _ in range(4):
        window = np.clip((half - np.abs(across[None, :] - offset[:, None])) / (2.0 * STEP_PX), 0.0, 1.0)
        weight = slope * window
        total = weight.sum(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            offset = np.where(total > 0.0, np.clip((weight @ across) / total, -0.5 * half, 0.5 * half), np.nan)
        offset = np.where(np.isfinite(offset), offset, 0.0)
    step = total * STEP_PX
    return np.where(step > 0.0, offset, np.nan), step


def _lines(share: FloatArray, offset: FloatArray, good: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return robust lines through the offsets along the sides (Huber 1964), and their covariances.

    Returns
    -------
    ends : ndarray, shape (4, 2)
        How far each side lies outwards at its start and its end.
    cov : ndarray, shape (4, 2, 2)
    """
    design = np.column_stack([1.0 - share, share])
    products = design[:, :, None] * design[:, None, :]
    weight = good
    middle = (good.sum(axis=1, keepdims=True) // 2).astype(np.intp)  # place of the median among the good ones
    for _ in range(4):
        normal = np.einsum("kp,pij->kij", weight, products)
        ends = np.linalg.solve(normal, np.einsum("kp,pi->ki", weight * offset, design)[..., None])[..., 0]
        left = offset - ends @ design.T
        far = np.abs(left)
        ordered = np.sort(np.where(good > 0.0, far, np.inf), axis=1)
        scale = 1.4826 * np.take_along_axis(ordered, middle, axis=1) + 1e-4
        weight = good * np.minimum(1.0, HUBER * scale / np.maximum(far, 1e-12))
    variance = (weight * left**2).sum(axis=1) / np.maximum(weight.sum(axis=1) - 2.0, 1.0)
    cov: FloatArray = np.linalg.inv(normal) * variance[:, None, None]
    return ends, cov


def _meet(corners_px: FloatArray, normals: FloatArray, ends: FloatArray, covs: FloatArray) -> EdgeCorners | None:
    """Return where neighbouring sides meet, each moved outwards as its line says."""
    starts = corners_px + ends[:, :1] * normals
    along = np.roll(corners_px, -1, axis=0) + ends[:, 1:] * normals - starts
    across = _outwards(corners_px, along / np.hypot(along[:, 0], along[:, 1])[:, None])
    levels = np.sum(across * starts, axis=1)
    pairs = np.stack([np.roll(across, 1, axis=0), across], axis=1)  # corner k: side k - 1, which ends there, and side k
    if np.abs(np.linalg.det(pairs)).min() < 0.2:
        return None
    back = np.linalg.inv(pairs)
    met = np.einsum("kij,kj->ki", back, np.stack([np.roll(levels, 1), levels], axis=1))
    jacobian = np.zeros((8, 8))  # by the start and the end of each side
    for k in range(4):
        jacobian[2 * k : 2 * k + 2, 2 * ((k - 1) % 4) + 1] = back[k][:, 0]
        jacobian[2 * k : 2 * k + 2, 2 * k] = back[k][:, 1]
    return EdgeCorners(met, jacobian @ block_diag(*covs) @ jacobian.T)


def information_of(edges: EdgeCorners) -> NDArray[np.float32]:
    """Return the inverse of the covariance, with a little of its size added so that it always exists."""
    size = float(np.trace(edges.cov_px2)) / 8.0
    return np.linalg.inv(edges.cov_px2 + 1e-3 * size * np.eye(8)).astype(np.float32)
