"""A photo in the place of a clip: one frame."""

from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np

from vision.errors import ClipError
from vision.frames import MAX_PIXELS, Frame

ENDINGS = (".jpg", ".jpeg", ".png", ".bmp", ".tif", ".tiff", ".webp")
"""Endings of files that are read as stills."""


def is_still(path: Path) -> bool:
    """Return whether a file is taken for a still, by its ending."""
    return path.suffix.lower() in ENDINGS


def read_still(path: Path, *, longest_px: int | None = None) -> tuple[Frame, float]:
    """Return a photo's brightness as a frame, and the factor by which it was made smaller.

    Parameters
    ----------
    path : Path
    longest_px : int, optional
        A larger picture is reduced until its longer side has so many pixels.

    Raises
    ------
    ClipError
        If the file is missing or no picture.
    """
    if not path.is_file():
        raise ClipError(f"{path}: no such file; check the path of the photo")
    data = np.fromfile(path, dtype=np.uint8)
    try:
        picture = cv2.imdecode(data, cv2.IMREAD_GRAYSCALE) if data.size else None
    except cv2.error:
        picture = None
    if picture is None:
        raise ClipError(f"{path}: cannot be read as a photo; accepted: {', '.join(e[1:] for e in ENDINGS)}")
    height, width = picture.shape
    if width * height > MAX_PIXELS:
        raise ClipError(
            f"{path}: a picture of {width} x {height} px; accepted up to {MAX_PIXELS // 10**6} million pixels"
        )
    factor = min(longest_px / max(width, height), 1.0) if longest_px else 1.0
    if factor < 1.0:
        picture = cv2.resize(picture, None, fx=factor, fy=factor, interpolation=cv2.INTER_AREA)
    return Frame(0, 0.0, np.ascontiguousarray(picture, dtype=np.uint8), True), factor
