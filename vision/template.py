"""A printed marker as a camera sees it: grey values and their slopes, blurred, ready to be sampled.

A marker is a sum of black squares, so its picture under a Gaussian point spread is a product of sums of error
functions along the two axes: exact at any point, slopes included. Inside the camera a tone curve bends the greys of
edges to one side, and sharpening adds a halo, an unsharp mask; both act after the blur, in this order.
"""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from vision.records import FloatArray

QUIET_MODULES = 0.8
"""Width of the white surround that is compared with the picture, in modules."""


@dataclass(frozen=True, slots=True)
class Optics:
    """How the camera renders an edge.

    Parameters
    ----------
    blur_px : float
        Standard deviation of the point spread, pixel box included, in image pixels.
    tone : float
        Bend of the tone curve: grey g between black (0) and white (1) is shown as ``g + tone * g * (1 - g)``.
    halo : float
        Strength of the unsharp mask; 0 for none.
    halo_px : float
        Its radius (standard deviation).
    """

    blur_px: float
    tone: float = 0.0
    halo: float = 0.0
    halo_px: float = 2.0


@dataclass(frozen=True, eq=False, slots=True)
class Template:
    """A marker's picture on a fine grid.

    Parameters
    ----------
    channels : ndarray, shape (S, S, 4), float32
        White (1) to black (0), its slopes per unit of side along x and y, and 1 where the template is valid.
    unit_from_sample : ndarray, shape (3, 3)
        Map from samples of the grid to marker coordinates (units of side, centre at 0, y down).
    margin : float
        Width of the surround, in sides.
    """

    channels: NDArray[np.float32]
    unit_from_sample: FloatArray
    margin: float


def build_template(black: NDArray[np.bool_], *, side_px: float, optics: Optics) -> Template:
    """Return the blurred template of a printed marker.

    Parameters
    ----------
    black : ndarray of bool, shape (n, n)
        The black modules, border included.
    side_px : float
        Size of the marker in the picture: fixes how fine the grid must be and how wide the blur is.
    optics : Optics
    """
    n_modules = black.shape[0]
    quiet = QUIET_MODULES / n_modules
    per_side = int(np.clip(3.0 * side_px, 12 * n_modules, 24 * n_modules))
    n_samples = int(np.ceil((1.0 + 2.0 * quiet) * per_side))
    unit = (np.arange(n_samples) + 0.5) / per_side - (0.5 + quiet)
    layers = np.stack([*_blurred(black, unit, optics.blur_px / side_px), np.ones((n_samples, n_samples))], axis=-1)
    channels = _processed(layers.astype(np.float32), optics, samples_per_px=per_side / side_px)
    offset = (0.5 + quiet) * per_side - 0.5
    sample_from_unit = np.array([[per_side, 0.0, offset], [0.0, per_side, offset], [0.0, 0.0, 1.0]])
    return Template(channels, np.linalg.inv(sample_from_unit), quiet)


def _processed(layers: NDArray[np.float32], optics: Optics, *, samples_per_px: float) -> NDArray[np.float32]:
    """Apply tone curve and halo to a picture and its slopes; the last layer (validity) is left alone."""
    if optics.tone:
        grey = layers[..., 0].copy()
        layers[..., 1:3] *= (1.0 + optics.tone * (1.0 - 2.0 * grey))[..., None]
        layers[..., 0] += optics.tone * grey * (1.0 - grey)
    if optics.halo:
        seen = np.ascontiguousarray(layers[..., :3])
        wide = cv2.GaussianBlur(seen, (0, 0), optics.halo_px * samples_per_px, borderType=cv2.BORDER_REPLICATE)
        layers[..., :3] = seen + optics.halo * (seen - wide)
    return layers


def _blurred(black: NDArray[np.bool_], unit: FloatArray, blur: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the picture and its slopes on the grid `unit` x `unit`, blur in units of side."""
    edges = np.linspace(-0.5, 0.5, black.shape[0] + 1)
    standard = (unit[:, None] - edges) / blur
    steps = ndtr(standard)
    bumps = np.exp(-0.5 * standard**2) / (np.sqrt(2.0 * np.pi) * blur)
    cover = steps[:, :-1] - steps[:, 1:]  # how much of module j is seen from sample i
    slope = bumps[:, :-1] - bumps[:, 1:]
    ink = black.astype(np.float64)
    return 1.0 - cover @ ink @ cover.T, -(cover @ ink @ slope.T), -(slope @ ink @ cover.T)
