"""What tracking hands on: corners, their information, and nothing else of the pictures."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from vision.pair import Body
from vision.records import FloatArray
from vision.template import Optics


@dataclass(frozen=True, eq=False, slots=True)
class CardLook:
    """One card at one moment.

    Parameters
    ----------
    card_id : int
    time_s : float
    corners_px : ndarray, shape (4, 2)
    u_px : float
        Standard uncertainty of a corner coordinate from the picture's noise.
    """

    card_id: int
    time_s: float
    corners_px: FloatArray
    u_px: float


@dataclass(frozen=True, eq=False, slots=True)
class EdgeLook:
    """What the edges of the pair's squares say at one moment, beside the alignment or in its place.

    Parameters
    ----------
    time_s : float
    apart_px : ndarray, shape (2, 4, 2)
        Corners from the edges less those from the alignment; zero where there is no alignment.
    information : ndarray, shape (2, 8, 8), float32
        Of the corners from the edges.
    alone : bool
        Whether the alignment found no hold, so that the edges stand in its place.
    """

    time_s: float
    apart_px: FloatArray
    information: NDArray[np.float32]
    alone: bool


@dataclass(frozen=True, eq=False, slots=True)
class Sight:
    """What one frame said about the pair.

    Parameters
    ----------
    corners_px : ndarray, shape (2, 4, 2)
        Aligned corners; NaN for a marker not seen.
    information : ndarray, shape (2, 8, 8), float32
        Fisher's information of each marker's corners, in 1/px^2; zero for a marker not seen.
    noise_var, explained, contrast : ndarray, shape (2,)
    smear_px : float
        How far the pair moved during the exposure.
    repeat : bool
        Whether the picture of the pair is bit by bit that of the frame before.
    by_edges : bool
        Whether the corners come from the edges of the squares, since the alignment found no hold.
    """

    corners_px: FloatArray
    information: NDArray[np.float32]
    noise_var: FloatArray
    explained: FloatArray
    contrast: FloatArray
    smear_px: float
    repeat: bool
    by_edges: bool = False


def nothing_seen() -> Sight:
    """Return the sight of a frame without the pair."""
    gap = np.full(2, np.nan)
    return Sight(np.full((2, 4, 2), np.nan), np.zeros((2, 8, 8), np.float32), gap, gap, gap, 0.0, False)


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class CornerTrack:
    """Corners of both markers in every frame (N frames); arrays as in `Sight`, stacked.

    Parameters
    ----------
    body : Body
        The pair as first estimated, before calibration.
    optics : Optics
    exposure_s : float
        Exposure time estimated from the smear of fast frames; 0 if none was fast.
    image_px : tuple of int
        Width and height.
    looks : tuple of CardLook
    edge_looks : tuple of EdgeLook
    """

    time_s: FloatArray
    is_key: NDArray[np.bool_]
    corners_px: FloatArray
    information: NDArray[np.float32]
    noise_var: FloatArray
    explained: FloatArray
    smear_px: FloatArray
    repeat: NDArray[np.bool_]
    body: Body
    optics: Optics
    exposure_s: float
    image_px: tuple[int, int]
    looks: tuple[CardLook, ...] = ()
    edge_looks: tuple[EdgeLook, ...] = ()
