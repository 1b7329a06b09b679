"""The data that flows from clip to turns, one frozen record a stage.

Conventions: ``_px`` is the image frame (x right, y down, pixel centres at integer coordinates), ``_mm`` the
floor frame (x right, y up, seen from above). Headings are counter-clockwise positive, unwrapped. ``u_`` is a
standard uncertainty (k = 1). Radians stay in kernels; records that leave `vision` carry degrees.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def frozen_array(values: object, shape: tuple[int | None, ...]) -> FloatArray:
    """Return a read-only float64 copy of `values`, checked against `shape` (None fits any length)."""
    array = np.array(values, dtype=np.float64)
    if array.ndim != len(shape) or any(
        want is not None and want != got for want, got in zip(shape, array.shape, strict=True)
    ):
        raise ValueError(f"expected an array of shape {shape}, found {array.shape}")
    array.setflags(write=False)
    return array


@dataclass(frozen=True, kw_only=True, slots=True)
class MarkerSetup:
    """Which markers to look for, and how large they are.

    Parameters
    ----------
    dictionary : str
        Name of an OpenCV predefined dictionary without the ``DICT_`` prefix.
    fore_id, aft_id : int
        Ids of the robot's two markers; the heading points from aft to fore.
    card_ids : tuple of int
        Ids that floor cards may carry; empty for none.
    marker_side_mm : float
        Outer edge of the black square of the robot's markers.
    card_side_mm : float or None
        The same for the floor cards; None when there are none.
    line_delay_s : float or None
        Time from one row of the camera's picture to the next, where it is known; None to estimate it.
    """

    dictionary: str = "APRILTAG_36h11"
    fore_id: int = 0
    aft_id: int = 1
    card_ids: tuple[int, ...] = tuple(range(10, 30))
    marker_side_mm: float
    card_side_mm: float | None = None
    line_delay_s: float | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class ClipInfo:
    """What the container says about a clip, after rotation to upright."""

    width_px: int
    height_px: int
    codec: str
    pixel_format: str
    rotation_deg: int
    mirrored: bool
    nominal_rate_hz: float | None
    duration_s: float | None


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class PoseTrack:
    """The robot's pose in every decoded frame.

    Parameters
    ----------
    time_s : ndarray, shape (N,)
        Presentation times, counted from the first frame.
    heading_deg, u_heading_deg : ndarray, shape (N,)
        Unwrapped heading and its per-frame standard uncertainty (noise only); NaN where not measured.
    x_mm, y_mm : ndarray, shape (N,)
        Midpoint between the two marker centres on the deck plane, in the floor frame.
    scale : ndarray, shape (N,)
        Apparent size of the markers relative to the deck plane's; 1 while the robot stands on the floor.
    residual_px : ndarray, shape (N,)
        Root mean square distance of the eight corners from the fitted rigid pair.
    state : tuple of str, length N
        ``rest``, ``turn``, ``move``, ``blurred`` or ``hidden``.
    """

    time_s: FloatArray
    heading_deg: FloatArray
    u_heading_deg: FloatArray
    x_mm: FloatArray
    y_mm: FloatArray
    scale: FloatArray
    residual_px: FloatArray
    state: tuple[str, ...]

    def __post_init__(self) -> None:
        n_frames = len(self.state)
        for name in ("time_s", "heading_deg", "u_heading_deg", "x_mm", "y_mm", "scale", "residual_px"):
            object.__setattr__(self, name, frozen_array(getattr(self, name), (n_frames,)))


@dataclass(frozen=True, kw_only=True, slots=True)
class Turn:
    """One spin between two rests. Numbers that could not be found are NaN."""

    start_s: float
    end_s: float
    heading_change_deg: float
    u_heading_change_deg: float
    start_heading_deg: float
    end_heading_deg: float
    peak_rate_deg_s: float
    overshoot_deg: float
    settle_s: float
    centre_x_mm: float
    centre_y_mm: float
    wander_mm: float
    flags: tuple[str, ...] = ()
    degrees_of_freedom: float = math.inf
    """Effective ones of `u_heading_change_deg` (JCGM 100, G.4)."""
    expanded_deg: float = math.nan
    """Expanded uncertainty of the heading change at 95 %."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Event:
    """A stretch that was not a turn: handled, driven, hidden, camera moved, missing turn."""

    start_s: float
    end_s: float
    kind: str
    detail: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Contribution:
    """One line of the uncertainty budget of a heading change (JCGM 100, 4 and 5)."""

    name: str
    u_deg: float
    evaluation: str
    """``A`` or ``B``, as in the GUM."""
    degrees_of_freedom: float
    basis: str
    """How the value was found, in a few words."""


@dataclass(frozen=True, kw_only=True, slots=True)
class ClipResult:
    """Everything `vision` says about one clip."""

    clip: ClipInfo
    track: PoseTrack
    turns: tuple[Turn, ...]
    events: tuple[Event, ...]
    plane: dict[str, object] = field(default_factory=dict)
    """Plane, lens, mounting and card estimates with their standard uncertainties, ready for JSON."""
    budget: tuple[Contribution, ...] = ()
    warnings: tuple[str, ...] = ()
