"""Where a printed marker lies in a picture, straight from grey values.

The known pattern is rendered where the marker is believed to be, at the picture's own pixels (the picture is never
resampled), and the difference is explained by small displacements of its four corners (a homography), together with
the illumination: a level, a gain, and their slopes across the marker. One linear solution is a Gauss-Newton step
(Lucas and Kanade 1981; Baker and Matthews 2004); what it leaves are the corners and, from the same matrix, their
information: Fisher's, once divided by the noise variance. Nothing more of the picture is needed afterwards: any
model of plane, lens and motion can be fitted to the corners with that weight and loses, to first order, nothing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.linalg.lapack import dgesv, dposv

from vision.frames import LumaImage
from vision.records import FloatArray
from vision.template import Template

N_LIGHT = 7
"""Terms eliminated per marker: level and gain of the light, each with two slopes, and the bleed of the edges.

White bleeds over black, or black over white, where ink spreads or a tone curve bends the greys of edges. All edges
then move by one small distance, which would make a foreshortened square look less so.
"""

WHOLLY = 0.999
"""A pixel is compared only if the template covers its interpolation wholly; beyond the rim it knows nothing."""

ALL = (1, 1)
"""Every row and every column of pixels is compared."""

ROOM = 1.1
"""The template's surround reaches so far beyond the corners, in its own widths; perspective adds little."""

FEWEST_PIXELS = 60
"""A marker with fewer pixels in the picture is not measured."""


_LIGHT = slice(8, 8 + N_LIGHT)
_EYE = np.eye(8)


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
    move_px : ndarray, shape (4, 2)
        Displacement of the corners that explains the picture best.
    design : Design
        What the model was built from.
    """

    corners_px: FloatArray
    information: FloatArray
    gradient: FloatArray
    move_px: FloatArray
    noise_var: float
    explained: float
    contrast: float
    level: float
    n_pixels: float
    design: Design


@dataclass(frozen=True, eq=False, slots=True)
class Design:
    """The pixels that were compared and how they answer to displacement and light.

    Parameters
    ----------
    window : tuple of slice
        The crop of the picture, strided if it was thinned.
    rows : ndarray, shape (16, n)
        As `_rows` returns them; zero at pixels that the template does not cover.
    normal : ndarray, shape (16, 16)
    basis : ndarray, shape (8, 8)
        Map from the eight motion terms to corner displacements.
    """

    window: tuple[slice, slice]
    rows: NDArray[np.float32]
    normal: FloatArray
    basis: FloatArray


class Held:
    """The same comparison again, for pictures in which the marker has hardly moved: one product a frame.

    The pattern, its slopes and the normal matrix stay those of `fit`; only the picture is new. Valid while the
    displacement stays a small part of a pixel.

    Parameters
    ----------
    fit : CornerFit
        From a comparison without smear, softening or weights.
    """

    def __init__(self, fit: CornerFit) -> None:
        self._fit = fit
        rows = fit.design.rows
        self._inside = np.flatnonzero(rows[8])
        self._rows = np.ascontiguousarray(rows[:-1, self._inside])
        self._inverse = np.linalg.inv(fit.design.normal[:-1, :-1])
        self._freedom = max(fit.n_pixels - 8 - N_LIGHT, 1.0)

    def again(self, image: LumaImage) -> CornerFit | None:
        """Return the corner model under a new picture; `explained` is then that of the displaced pattern."""
        design = self._fit.design
        data = image[design.window].ravel()[self._inside].astype(np.float32)
        data -= data.mean()
        pull = (self._rows @ data).astype(np.float64)
        answer = self._inverse @ pull
        total, contrast = float(data @ data), float(answer[11])
        if not total > 0.0 or contrast <= 0.0:
            return None
        left = max(total - float(pull @ answer), 1e-9)
        return replace(
            self._fit,
            move_px=(design.basis @ answer[:8] / contrast).reshape(4, 2),
            noise_var=left / self._freedom / contrast**2,
            explained=1.0 - left / total,
            contrast=contrast,
        )


@lru_cache(maxsize=1024)
def _grid(height: int, width: int, thin: tuple[int, int]) -> NDArray[np.float32]:
    """Return the pixels' places about the crop's centre in units of half its longer side, shape (2, n)."""
    y, x = np.mgrid[0 : height : thin[0], 0 : width : thin[1]]
    half = 0.5 * max(height, width)
    grid = np.stack([(x - 0.5 * (width - 1)) / half, (y - 0.5 * (height - 1)) / half])
    flat: NDArray[np.float32] = grid.reshape(2, -1).astype(np.float32)
    flat.setflags(write=False)
    return flat


def homography_from_corners(corners_px: FloatArray) -> FloatArray:
    """Return the map from marker coordinates (units of side, y down) to the picture, shape (3, 3).

    Source: Heckbert (1989), Fundamentals of texture mapping and image warping, square to quadrilateral.
    """
    (x0, y0), (x1, y1), (x2, y2), (x3, y3) = corners_px.tolist()
    dx1, dx2, dx3 = x1 - x2, x3 - x2, x0 - x1 + x2 - x3
    dy1, dy2, dy3 = y1 - y2, y3 - y2, y0 - y1 + y2 - y3
    det = dx1 * dy2 - dx2 * dy1
    if det == 0.0:
        return np.full((3, 3), np.nan)
    g, h = (dx3 * dy2 - dx2 * dy3) / det, (dx1 * dy3 - dx3 * dy1) / det
    a, b, c = x1 - x0 + g * x1, x3 - x0 + h * x3, x0
    d, e, f = y1 - y0 + g * y1, y3 - y0 + h * y3, y0
    # From here on the square runs from -1/2 to 1/2 instead of 0 to 1.
    return np.array(
        [
            [a, b, 0.5 * (a + b) + c],
            [d, e, 0.5 * (d + e) + f],
            [g, h, 0.5 * (g + h) + 1.0],
        ]
    )


def fit_corners(
    image: LumaImage,
    corners_px: FloatArray,
    template: Template,
    *,
    smear: tuple[FloatArray, ...] = (),
    soften_px: float = 0.0,
    thin: tuple[int, int] = ALL,
    robust: bool = False,
) -> CornerFit | None:
    """Compare a marker's pattern with the picture and return the corner model.

    Parameters
    ----------
    image : ndarray, shape (height, width)
    corners_px : ndarray, shape (4, 2)
        Where the corners are believed to be.
    template : Template
    smear : tuple of ndarray, shape (3, 3)
        Picture-to-picture motions over the exposure; the pattern is averaged over them.
    soften_px : float
        Extra blur given to the picture; the template should have been built with it too.
    thin : (int, int)
        Compare only every so many-th row and column: quicker, and less sharp by as much.
    robust : bool
        Give little weight to pixels that the pattern cannot explain (glint, shadow edge, finger).

    Returns
    -------
    CornerFit or None
        None if the marker is out of the picture or too small, or the pattern has no hold there.
    """
    box = _box(corners_px, template, image.shape)
    if box is None:
        return None
    x0, y0, x1, y1 = box
    window = (slice(y0, y1, thin[0]), slice(x0, x1, thin[1]))
    crop = _softened(image[y0:y1, x0:x1], soften_px)[:: thin[0], :: thin[1]] if soften_px > 0.0 else image[window]
    local_px = corners_px - (x0, y0)
    to_crop = homography_from_corners(local_px)
    channels = _render(template, to_crop, crop.shape, smear, (x0, y0), thin)
    grid = _grid(y1 - y0, x1 - x0, thin)
    rows, mean = _rows(channels, crop, grid, to_crop)
    if rows is None:
        return None
    if robust:
        rows *= np.sqrt(_trust(rows))
    basis = _motion_basis(local_px, (y1 - y0, x1 - x0))
    return _solve(Design(window, rows, (rows @ rows.T).astype(np.float64), basis), corners_px, mean)


def _softened(crop: LumaImage, soften_px: float) -> NDArray[np.float32]:
    soft = cv2.GaussianBlur(crop.astype(np.float32), (0, 0), soften_px, borderType=cv2.BORDER_REPLICATE)
    return np.asarray(soft, dtype=np.float32)


def _box(corners_px: FloatArray, template: Template, shape: tuple[int, ...]) -> tuple[int, int, int, int] | None:
    """Return the pixel box (x0, y0, x1, y1) that holds the whole template, clipped to the picture."""
    points = corners_px.tolist()
    xs, ys = [p[0] for p in points], [p[1] for p in points]
    left, right, top, bottom = min(xs), max(xs), min(ys), max(ys)
    size = max(right - left, bottom - top)
    if not 4.0 < size < 4.0 * max(shape):  # written so that NaN also lands here
        return None
    pad = template.margin * ROOM * size
    x0, y0 = max(math.floor(left - pad), 0), max(math.floor(top - pad), 0)
    x1, y1 = min(math.ceil(right + pad) + 1, shape[1]), min(math.ceil(bottom + pad) + 1, shape[0])
    return (x0, y0, x1, y1) if x1 - x0 >= 6 and y1 - y0 >= 6 else None


def _render(
    template: Template,
    to_crop: FloatArray,
    shape: tuple[int, ...],
    smear: tuple[FloatArray, ...],
    origin_px: tuple[int, int],
    thin: tuple[int, int],
) -> NDArray[np.float32]:
    """Return the template's channels at the crop's pixels, shape (4, n)."""
    size = (shape[1], shape[0])
    still = to_crop @ template.unit_from_sample
    down, across = thin
    still[0] /= across
    still[1] /= down
    if not smear:
        seen = cv2.warpPerspective(template.channels, still, size, flags=cv2.INTER_LINEAR)
        return np.ascontiguousarray(seen.reshape(-1, 4).T)
    x0, y0 = origin_px
    there = np.array([[across, 0.0, x0], [0.0, down, y0], [0.0, 0.0, 1.0]])
    back = np.array([[1.0 / across, 0.0, -x0 / across], [0.0, 1.0 / down, -y0 / down], [0.0, 0.0, 1.0]])
    in_picture = there @ still
    total = np.zeros((*shape, 4), dtype=np.float32)
    for motion in smear:
        map_ = back @ motion @ in_picture
        cv2.accumulate(cv2.warpPerspective(template.channels, map_, size, flags=cv2.INTER_LINEAR), total)
    total *= np.float32(1.0 / len(smear))
    return np.ascontiguousarray(total.reshape(-1, 4).T)


def _rows(
    channels: NDArray[np.float32], crop: LumaImage | NDArray[np.float32], grid: NDArray[np.float32], to_crop: FloatArray
) -> tuple[NDArray[np.float32] | None, float]:
    """Return the design as rows, shape (16, n): 8 displacements, 7 terms of light and bleed, the data; and its mean.

    Pixels that the template does not cover wholly have zeros. None where too few are covered.
    """
    rows = np.empty((9 + N_LIGHT, channels.shape[1]), dtype=np.float32)
    mask = rows[8]
    np.greater(channels[3], WHOLLY, out=mask, casting="unsafe")
    n_pixels = float(mask.sum())
    if n_pixels < FEWEST_PIXELS:
        return None, 0.0
    grey_x, grey_y, grey = rows[2], rows[5], rows[11]
    np.matmul(_slope_map(to_crop), channels[1:3], out=rows[2:6:3])
    grey_x *= mask
    grey_y *= mask
    np.multiply(channels[0], mask, out=grey)
    np.multiply(grid, grey_x, out=rows[0:2])
    np.multiply(grid, grey_y, out=rows[3:5])
    np.multiply(grid, rows[0] + rows[4], out=rows[6:8])
    np.multiply(grid, mask, out=rows[9:11])
    np.multiply(grid, grey, out=rows[12:14])
    np.multiply(grey_x, grey_x, out=rows[14])  # not by OpenCV, whose last bit depends on where the memory lies
    rows[14] += grey_y * grey_y
    np.sqrt(rows[14], out=rows[14])
    data = rows[15]
    np.multiply(crop.ravel(), mask, out=data, dtype=np.float32)
    mean = float(data.sum()) / n_pixels
    data -= np.float32(mean) * mask
    return rows, mean


def _slope_map(to_crop: FloatArray) -> NDArray[np.float32]:
    """Return minus the map from slopes per unit of side to slopes per pixel, at the marker's centre.

    Perspective makes it vary by a per cent over a marker. That is left out: it changes how fast the steps converge,
    not where they end.
    """
    (a, b, c), (d, e, f), (g, h, i) = to_crop.tolist()
    a, b, d, e = a - g * c / i, b - h * c / i, d - g * f / i, e - h * f / i
    det = (a * e - b * d) / i
    return np.array([[-e / det, d / det], [b / det, -a / det]], dtype=np.float32)


def _trust(rows: NDArray[np.float32]) -> NDArray[np.float32]:
    """Return Tukey weights of the pixels from three reweighted solutions."""
    weight = np.ones(rows.shape[1], dtype=np.float32)
    for _ in range(3):
        normal = (rows * weight) @ rows.T
        coefficients = np.linalg.lstsq(normal[:-1, :-1], normal[:-1, -1], rcond=1e-7)[0]
        left = rows[-1] - coefficients.astype(np.float32) @ rows[:-1]
        scale = 1.4826 * float(np.median(np.abs(left))) + 1e-6
        weight = (1.0 - np.minimum((left / np.float32(4.685 * scale)) ** 2, 1.0)) ** 2
    return weight


def _solve(design: Design, corners_px: FloatArray, shift: float) -> CornerFit | None:
    normal, basis = design.normal, design.basis
    _, _, to_motion, singular = dgesv(basis, _EYE)
    _, eliminate, no_light = dposv(normal[_LIGHT, _LIGHT], normal[_LIGHT])
    if singular or no_light:
        return None
    reduced = normal - normal[:, _LIGHT] @ eliminate
    contrast = float(eliminate[3, -1])
    _, answer, no_hold = dposv(reduced[:8, :8], reduced[:8, -1])
    if no_hold or contrast == 0.0:
        return None
    left, n_pixels = float(reduced[-1, -1]), float(normal[8, 8])
    total = float(normal[-1, -1] - normal[8, -1] ** 2 / n_pixels)
    gained = float(reduced[:8, -1] @ answer)
    if not total > 0.0 or not math.isfinite(gained):
        return None
    return CornerFit(
        corners_px=corners_px,
        information=to_motion.T @ reduced[:8, :8] @ to_motion,
        gradient=to_motion.T @ reduced[:8, -1] / contrast,
        move_px=(basis @ answer / contrast).reshape(4, 2),
        noise_var=max(left - gained, 1e-9) / max(n_pixels - 8 - N_LIGHT, 1.0) / contrast**2,
        explained=1.0 - left / total,
        contrast=contrast,
        level=float(eliminate[0, -1]) + shift,
        n_pixels=n_pixels,
        design=design,
    )


def _motion_basis(local_px: FloatArray, shape: tuple[int, ...]) -> FloatArray:
    """Return the map, shape (8, 8), from the eight motion terms of `_rows` to corner displacements."""
    half_px, middle_x, middle_y = 0.5 * max(shape), 0.5 * (shape[1] - 1), 0.5 * (shape[0] - 1)
    rows = []
    for x_px, y_px in local_px.tolist():
        x, y = (x_px - middle_x) / half_px, (y_px - middle_y) / half_px
        rows.append([x, y, 1.0, 0.0, 0.0, 0.0, x * x, x * y])
        rows.append([0.0, 0.0, 0.0, x, y, 1.0, x * y, y * y])
    return np.array(rows)
