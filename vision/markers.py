"""Square coded markers: the printed patterns, and the search for them in a picture.

The dictionaries are those that OpenCV predefines (Garrido-Jurado et al. 2014; Olson 2011), named without the
``DICT_`` prefix. Corners go round the printed square as printed: top left, top right, bottom right, bottom left.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

from vision.frames import LumaImage
from vision.records import FloatArray

UNIT_CORNERS = np.array([[-0.5, -0.5], [0.5, -0.5], [0.5, 0.5], [-0.5, 0.5]])
"""Corners of a printed marker in units of its side, x right, y down as printed, origin at its centre."""

SMALLEST_SIDE_PX = 12.0


@dataclass(frozen=True, eq=False, slots=True)
class Detection:
    """A marker found by searching.

    Parameters
    ----------
    marker_id : int
    corners_px : ndarray, shape (4, 2)
    """

    marker_id: int
    corners_px: FloatArray

    @property
    def side_px(self) -> float:
        """Mean length of the four sides."""
        return float(np.hypot(*(np.roll(self.corners_px, -1, axis=0) - self.corners_px).T).mean())


def dictionary_names() -> tuple[str, ...]:
    """Return the names of all known dictionaries."""
    return tuple(sorted(name[5:] for name in dir(cv2.aruco) if name.startswith("DICT_")))


@lru_cache(maxsize=8)
def dictionary_named(name: str) -> cv2.aruco.Dictionary:
    """Return OpenCV's predefined dictionary of that name.

    Raises
    ------
    KeyError
        If there is none.
    """
    number = getattr(cv2.aruco, f"DICT_{name}", None)
    if number is None:
        raise KeyError(name)
    return cv2.aruco.getPredefinedDictionary(number)


def printed_modules(dictionary: str, marker_id: int) -> NDArray[np.bool_]:
    """Return which modules of a marker are black, its black border included.

    Returns
    -------
    ndarray of bool, shape (n, n)
        Row 0 is the top as printed.
    """
    source = dictionary_named(dictionary)
    n_modules = source.markerSize + 2
    picture = cv2.aruco.generateImageMarker(source, marker_id, n_modules, borderBits=1)
    black: NDArray[np.bool_] = picture < 128
    return black


@lru_cache(maxsize=32)
def _detector(dictionary: str, longest_px: int, window_px: int | None) -> cv2.aruco.ArucoDetector:
    settings = cv2.aruco.DetectorParameters()
    # The rate is relative to the longest side of the picture given, so it must follow the crop.
    settings.minMarkerPerimeterRate = min(4.0 * SMALLEST_SIDE_PX / longest_px, 3.9)
    settings.maxMarkerPerimeterRate = 4.0
    settings.minCornerDistanceRate = 0.03
    settings.cornerRefinementMethod = cv2.aruco.CORNER_REFINE_CONTOUR
    if window_px is not None:
        settings.adaptiveThreshWinSizeMin = settings.adaptiveThreshWinSizeMax = window_px
    return cv2.aruco.ArucoDetector(dictionary_named(dictionary), settings)


def as_uint8(image: LumaImage) -> NDArray[np.uint8]:
    """Return a contiguous 8-bit picture; deeper ones are stretched from their own range."""
    if image.dtype == np.uint8:
        return np.ascontiguousarray(image, dtype=np.uint8)
    low, high = np.percentile(image[::7, ::7], (0.5, 99.5))
    span = max(float(high - low), 1.0)
    stretched: NDArray[np.float32] = np.clip((image.astype(np.float32) - low) * (235.0 / span) + 10.0, 0.0, 255.0)
    return stretched.astype(np.uint8)


def detect(
    image: LumaImage, dictionary: str, wanted: Iterable[int], *, window_px: int | None = None
) -> list[Detection]:
    """Search a picture for markers.

    Parameters
    ----------
    image : ndarray, shape (height, width)
    dictionary : str
    wanted : iterable of int
        Ids to report; others are dropped.
    window_px : int, optional
        Side of the one threshold window to use; by default several are tried, which is slower and finds more.

    Returns
    -------
    list of Detection
        Possibly several with one id.
    """
    picture = as_uint8(image)
    corners, ids, _ = _detector(dictionary, max(picture.shape), window_px).detectMarkers(picture)
    if ids is None:
        return []
    keep = set(wanted)
    return [
        Detection(int(number), np.asarray(quad, dtype=np.float64).reshape(4, 2))
        for number, quad in zip(np.ravel(ids), corners, strict=True)
        if int(number) in keep
    ]
