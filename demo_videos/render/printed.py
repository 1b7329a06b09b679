"""Printed things as flat pictures: marker cards with exact module edges."""

from __future__ import annotations

from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

FloatImage = NDArray[np.float32]


def dictionary_of(name: str) -> cv2.aruco.Dictionary:
    """Return OpenCV's predefined dictionary of this name, the ``DICT_`` left out."""
    code = getattr(cv2.aruco, f"DICT_{name}", None)
    if code is None:
        raise ValueError(f"no predefined marker dictionary is named {name!r}")
    return cv2.aruco.getPredefinedDictionary(code)


@lru_cache(maxsize=256)
def modules_of(dictionary: str, marker_id: int) -> NDArray[np.bool_]:
    """Return the marker's modules, black border included: True is paper, False is ink. Row 0 is the top."""
    printed = dictionary_of(dictionary)
    size = printed.markerSize + 2
    return cv2.aruco.generateImageMarker(printed, marker_id, size, borderBits=1) > 127


def n_modules(dictionary: str) -> int:
    """Return how many modules a side of the black square has."""
    return int(dictionary_of(dictionary).markerSize) + 2


def marker_picture(
    modules: NDArray[np.bool_],
    *,
    texels: int,
    quiet_texels: int,
    ink: float,
    paper: float,
    dirt: float = 0.0,
    seed: int = 0,
) -> FloatImage:
    """Return a printed card as (height, width, 2): reflectance times opacity, and opacity.

    Module edges fall exactly on texel edges; `texels` is the number of texels along a module. Two clear texels
    surround the paper.
    """
    inside = np.kron(modules, np.ones((texels, texels), dtype=bool))
    sheet = np.pad(np.where(inside, paper, ink), quiet_texels, constant_values=paper).astype(np.float32)
    if dirt > 0.0:
        sheet *= 1.0 - 0.6 * blotches(sheet.shape, dirt, texels * 1.5, seed)
    picture = np.stack([sheet, np.ones_like(sheet)], axis=-1)
    return np.pad(picture, ((2, 2), (2, 2), (0, 0)))


def blotches(shape: tuple[int, ...], share: float, size_texels: float, seed: int) -> FloatImage:
    """Return soft-edged random patches that cover about `share` of the area."""
    rng = np.random.default_rng([seed, 73])
    field = cv2.GaussianBlur(rng.standard_normal(shape).astype(np.float32), (0, 0), size_texels)
    level = np.quantile(field, 1.0 - share)
    return np.clip((field - level) / (0.3 * field.std()) + 0.5, 0.0, 1.0).astype(np.float32)
