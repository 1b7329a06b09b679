"""Where a printed marker lies in a picture, straight from grey values.

The known pattern is rendered where the marker is believed to be, at the picture's own pixels (the picture is never
resampled), and the difference is explained by small displacements of its four corners (a homography), together with
the illumination: a level, a gain, and their slopes across the marker. One linear solution is a Gauss-Newton step
(Lucas and Kanade 1981; Baker and Matthews 2004); what it leaves are the corners and, from the same matrix, their
information: Fisher's, once divided by the noise variance. Nothing more of the picture is needed afterwards: any
model of plane, lens and motion can be fitted to the corners with that weight and loses, to first order, nothing.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

from vision.frames import LumaImage
from vision.markers import UNIT_CORNERS
from vision.records import FloatArray
from vision.template import Template

N_LIGHT = 6
"""Illumination terms eliminated per marker: level and gain, each with two slopes."""

FEWEST_PIXELS = 60.0
"""A marker with fewer pixels in the picture is not measured."""


@dataclass(frozen=True, eq=False, slots=True)
class CornerFit:
    """A quadratic model of the misfit as a function of the four corners.

    Parameters
    ----------
    corners_px : ndarray, shape (4, 2)
        Corners at which the pattern was rendered.
    information : ndarray, shape (8, 8)
        Gauss-Newton matrix over the corners (x0, y0, x1, ...), in 1/px^2; divided by `noise_var` of relative grey
        values it is Fisher's information.
    gradient : ndarray, shape (8,)
        Right-hand side: the displacement that explains the picture solves ``information @ d = gradient``.
    noise_var : float
        Variance left after the best displacement, relative to the squared contrast.
    explained : float
        Share of the picture's variance that the pattern explains at the rendered place, illumination fitted.
    contrast : float
        White minus black in grey levels; negative for a pattern that fits only inverted.
    level : float
        Grey level of black.
    n_pixels : float
        Pixels compared.
    """

    corners_px: FloatArray
    information: FloatArray
    gradient: FloatArray
    noise_var: float
    explained: float
    contrast: float
    level: float
    n_pixels: float

    def displacement_px(self) -> FloatArray:
        """Return the displacement, shape (8,), that explains the picture best."""
        return np.linalg.solve(self.information, self.gradient)


@lru_cache(maxsize=512)
def _grid(height: int, width: int) -> NDArray[np.float32]:
    """Return crop coordinates (x, y, 1) of all pixels, shape (3, height * width)."""
    y, x = np.mgrid[0:height, 0:width]
    grid = np.stack([x.ravel(), y.ravel(), np.ones(height * width)]).astype(np.float32)
    grid.setflags(write=False)
    return grid


def homography_from_corners(corners_px: FloatArray) -> FloatArray:
    """Return the map from marker coordinates (units of side, y down) to the picture, shape (3, 3)."""
    square = UNIT_CORNERS.astype(np.float32)
    map_px: FloatArray = cv2.getPerspectiveTransform(square, corners_px.astype(np.float32)).astype(np.float64)
    return map_px


def fit_corners(
    image: LumaImage,
    homography_px: FloatArray,
    template: Template,
    *,
    smear: tuple[FloatArray, ...] = (),
    soften_px: float = 0.0,
    robust: bool = False,
) -> CornerFit | None:
    """Compare a marker's pattern with the picture and return the corner model.

    Parameters
    ----------
    image : ndarray, shape (height, width)
    homography_px : ndarray, shape (3, 3)
        Believed map from marker coordinates (units of side, y down) to the picture.
    template : Template
    smear : tuple of ndarray, shape (3, 3)
        Picture-to-picture motions over the exposure; the pattern is averaged over them.
    soften_px : float
        Extra blur given to the picture; the template should have been built with it too.
    robust : bool
        Give little weight to pixels that the pattern cannot explain (glint, shadow edge, finger).

    Returns
    -------
    CornerFit or None
        None if the marker is out of the picture or too small, or the pattern has no hold there.
    """
    box = _box(homography_px, template, image.shape)
    if box is None:
        return None
    x0, y0, x1, y1 = box
    crop = image[y0:y1, x0:x1].astype(np.float32)
    if soften_px > 0.0:
        crop = cv2.GaussianBlur(crop, (0, 0), soften_px, borderType=cv2.BORDER_REPLICATE).astype(np.float32)
    to_crop = np.array([[1.0, 0.0, -x0], [0.0, 1.0, -y0], [0.0, 0.0, 1.0]]) @ homography_px
    rendered = _render(template, to_crop, crop.shape, smear, (x0, y0))
    columns, half_px = _columns(rendered, to_crop, crop.shape)
    mask = rendered[3]
    n_pixels = float(mask.sum())
    if n_pixels < FEWEST_PIXELS:
        return None
    columns[-1] = crop.ravel()
    columns[-1] -= columns[-1].mean()
    level_shift = float(crop.mean())
    weight = mask if not robust else mask * _trust(columns, mask)
    return _solve(columns, weight, to_crop, crop.shape, half_px, (x0, y0), level_shift)


def _box(
    homography_px: FloatArray, template: Template, shape: tuple[int, ...]
) -> tuple[int, int, int, int] | None:
    """Return the pixel box (x0, y0, x1, y1) that holds the whole template, clipped to the picture."""
    n_samples = template.channels.shape[0]
    ends = np.array([[-0.5, n_samples - 0.5, n_samples - 0.5, -0.5], [-0.5, -0.5, n_samples - 0.5, n_samples - 0.5]])
    rim = homography_px @ template.unit_from_sample @ np.vstack([ends, np.ones(4)])
    if not np.all(rim[2] > 0.0) and not np.all(rim[2] < 0.0):
        return None
    points = rim[:2] / rim[2]
    if not np.all(np.isfinite(points)):
        return None
    low = np.maximum(np.floor(points.min(axis=1)), 0.0)
    high = np.minimum(np.ceil(points.max(axis=1)) + 1.0, (shape[1], shape[0]))
    if np.any(high - low < 6.0):
        return None
    return int(low[0]), int(low[1]), int(high[0]), int(high[1])


def _render(
    template: Template,
    to_crop: FloatArray,
    shape: tuple[int, ...],
    smear: tuple[FloatArray, ...],
    origin_px: tuple[int, int],
) -> NDArray[np.float32]:
    """Return the template's channels at the crop's pixels, shape (4, n)."""
    size = (shape[1], shape[0])
    still = to_crop @ template.unit_from_sample
    if not smear:
        return _planes(cv2.warpPerspective(template.channels, still, size, flags=cv2.INTER_LINEAR))
    shift = np.array([[1.0, 0.0, origin_px[0]], [0.0, 1.0, origin_px[1]], [0.0, 0.0, 1.0]])
    total = np.zeros((*shape, 4), dtype=np.float32)
    for motion in smear:
        moved = np.linalg.inv(shift) @ motion @ shift @ still
        total += cv2.warpPerspective(template.channels, moved, size, flags=cv2.INTER_LINEAR)
    return _planes(total / len(smear))


def _planes(picture: NDArray[np.float32]) -> NDArray[np.float32]:
    return np.ascontiguousarray(picture.reshape(-1, 4).T)


def _columns(
    rendered: NDArray[np.float32], to_crop: FloatArray, shape: tuple[int, ...]
) -> tuple[NDArray[np.float32], float]:
    """Return the design matrix as rows, shape (15, n): 8 displacements, 6 illumination terms, 1 for data."""
    grid = _grid(*shape)
    inverse = np.linalg.inv(to_crop)
    unit = (inverse.astype(np.float32)) @ grid
    per_w = 1.0 / unit[2]
    unit_x, unit_y = unit[0] * per_w, unit[1] * per_w
    slope_x, slope_y = rendered[1] * per_w, rendered[2] * per_w
    toward = slope_x * unit_x + slope_y * unit_y
    a = inverse.astype(np.float32)
    grey_x = slope_x * a[0, 0] + slope_y * a[1, 0] - toward * a[2, 0]
    grey_y = slope_x * a[0, 1] + slope_y * a[1, 1] - toward * a[2, 1]
    half_px = 0.5 * max(shape)
    x = (grid[0] - 0.5 * (shape[1] - 1)) * np.float32(1.0 / half_px)
    y = (grid[1] - 0.5 * (shape[0] - 1)) * np.float32(1.0 / half_px)
    rows = np.empty((9 + N_LIGHT, grid.shape[1]), dtype=np.float32)
    np.negative(grey_x, out=rows[2])
    np.negative(grey_y, out=rows[5])
    np.multiply(rows[2], x, out=rows[0])
    np.multiply(rows[2], y, out=rows[1])
    np.multiply(rows[5], x, out=rows[3])
    np.multiply(rows[5], y, out=rows[4])
    outward = rows[0] + rows[4]
    np.multiply(outward, x, out=rows[6])
    np.multiply(outward, y, out=rows[7])
    rows[8] = rendered[3]
    rows[9] = x
    rows[10] = y
    rows[11] = rendered[0]
    np.multiply(rendered[0], x, out=rows[12])
    np.multiply(rendered[0], y, out=rows[13])
    return rows, half_px


def _trust(columns: NDArray[np.float32], mask: NDArray[np.float32]) -> NDArray[np.float32]:
    """Return Tukey weights of the pixels from three reweighted solutions for the illumination and displacement."""
    weight = mask.copy()
    for _ in range(3):
        normal = (columns * weight) @ columns.T
        coefficients = np.linalg.lstsq(normal[:-1, :-1], normal[:-1, -1], rcond=1e-7)[0]
        left = columns[-1] - coefficients.astype(np.float32) @ columns[:-1]
        scale = 1.4826 * np.median(np.abs(left[mask > 0.5])) + 1e-6
        ratio = np.minimum((left / (4.685 * scale)) ** 2, 1.0)
        weight = mask * (1.0 - ratio) ** 2
    trust: NDArray[np.float32] = weight.astype(np.float32)
    return trust


def _solve(
    columns: NDArray[np.float32],
    weight: NDArray[np.float32],
    to_crop: FloatArray,
    shape: tuple[int, ...],
    half_px: float,
    origin_px: tuple[int, int],
    level_shift: float,
) -> CornerFit | None:
    normal = (columns @ (columns * weight).T).astype(np.float64)
    light = slice(8, 8 + N_LIGHT)
    try:
        eliminate = np.linalg.solve(normal[light, light], normal[light, :])
    except np.linalg.LinAlgError:
        return None
    reduced = normal - normal[:, light] @ eliminate
    data_left = reduced[-1, -1]
    contrast = float(eliminate[3, -1])
    n_pixels = float(weight.sum())
    total = normal[-1, -1] - normal[8, -1] ** 2 / normal[8, 8]
    if not (total > 0.0) or contrast == 0.0:
        return None
    motion, pull = reduced[:8, :8], reduced[:8, -1] / contrast
    corners_px, to_motion = _corner_frame(to_crop, shape, half_px)
    information = to_motion.T @ motion @ to_motion
    gradient = to_motion.T @ pull
    try:
        gained = float(gradient @ np.linalg.solve(information, gradient)) * contrast**2
    except np.linalg.LinAlgError:
        return None
    freedom = max(n_pixels - 8 - N_LIGHT, 1.0)
    return CornerFit(
        corners_px=corners_px + origin_px,
        information=information,
        gradient=gradient,
        noise_var=max(data_left - gained, 1e-9) / freedom / contrast**2,
        explained=1.0 - data_left / total,
        contrast=contrast,
        level=float(eliminate[0, -1]) + level_shift,
        n_pixels=n_pixels,
    )


def _corner_frame(
    to_crop: FloatArray, shape: tuple[int, ...], half_px: float
) -> tuple[FloatArray, FloatArray]:
    """Return the corners in crop pixels and the map from corner displacements to the eight motion terms."""
    image = to_crop @ np.vstack([UNIT_CORNERS.T, np.ones(4)])
    corners_px = (image[:2] / image[2]).T
    x = (corners_px[:, 0] - 0.5 * (shape[1] - 1)) / half_px
    y = (corners_px[:, 1] - 0.5 * (shape[0] - 1)) / half_px
    basis = np.zeros((8, 8))
    basis[0::2, 0], basis[0::2, 1], basis[0::2, 2] = x, y, 1.0
    basis[1::2, 3], basis[1::2, 4], basis[1::2, 5] = x, y, 1.0
    basis[0::2, 6], basis[0::2, 7] = x * x, x * y
    basis[1::2, 6], basis[1::2, 7] = x * y, y * y
    return corners_px, np.linalg.inv(basis)
