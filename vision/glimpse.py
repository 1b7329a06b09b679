"""What a first look at a set-up shows: the markers in figures, the light, the camera, and what else is in view."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from vision.align import CornerFit, fit_corners
from vision.errors import MarkersNotFound
from vision.frames import Frame, LumaImage
from vision.ground import GroundPath, GroundWatcher
from vision.markers import detect, dictionary_named
from vision.observations import CornerTrack
from vision.pair import build_pattern, mean_side_px, pair_modules
from vision.plane import BASE, SHAPE, Units, corners_at, plane_map
from vision.records import FloatArray, MarkerSetup
from vision.rigid import projected_slope
from vision.steady import CameraPath, camera_path
from vision.track import track_pair

USUAL_FOCAL = 0.6
"""Focal length of a phone's main camera in diagonals of its picture (about 26 mm on 43 mm film); common practice."""

LIGHT_STEP = 16
"""The brightness of the picture is taken at every so many-th pixel along both axes."""

WHITE_FULL = 230.0
"""Paper whiter than this (of 255) may have run into the end of the scale: video ends at 235 or at 255."""


@dataclass(frozen=True, kw_only=True, slots=True)
class MarkerLook:
    """One robot marker in one frame.

    Parameters
    ----------
    marker_id : int
    side_px : float
    black_grey, white_grey : float
        Brightness of ink and paper on a scale to 255.
    full_share : float
        Share of the marker's pixels that are as white as the picture can show.
    noise_grey : float
        Root mean square of what the pattern does not explain, on the same scale.
    explained : float
        Share of the marker's variance that the pattern explains.
    """

    marker_id: int
    side_px: float
    black_grey: float
    white_grey: float
    full_share: float
    noise_grey: float
    explained: float

    @property
    def contrast_grey(self) -> float:
        """White less black."""
        return self.white_grey - self.black_grey


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Glimpse:
    """What the first frames of a clip, or one still, show.

    Parameters
    ----------
    track : CornerTrack
    ground : GroundPath
    camera : CameraPath
    markers : tuple of MarkerLook
        Fore and aft.
    card_ids, stranger_ids, twice_ids : tuple of int
        Floor cards in view; other codes of the dictionary in view; ids that are in view more than once.
    flicker : float
        Scatter of the picture's brightness from frame to frame, as a share; NaN for a still.
    n_frames : int
    """

    track: CornerTrack
    ground: GroundPath
    camera: CameraPath
    markers: tuple[MarkerLook, ...]
    card_ids: tuple[int, ...]
    stranger_ids: tuple[int, ...]
    twice_ids: tuple[int, ...]
    flicker: float
    n_frames: int


def glimpse_of(frames: Iterable[Frame], setup: MarkerSetup) -> Glimpse:
    """Look at a few frames.

    Raises
    ------
    MarkersNotFound
        If no frame shows both robot markers.
    """
    passing = _Passing()
    ground = GroundWatcher()
    track = track_pair(passing.by(frames), setup, ground)
    shown = passing.first_with(track)
    found = detect(shown.luma, setup.dictionary, range(len(dictionary_named(setup.dictionary).bytesList)))
    ids = [item.marker_id for item in found]
    ours = {setup.fore_id, setup.aft_id, *setup.card_ids}
    path = ground.path()
    return Glimpse(
        track=track,
        ground=path,
        camera=camera_path(track, path),
        markers=_marker_looks(shown, track, setup),
        card_ids=tuple(sorted({number for number in ids if number in setup.card_ids})),
        stranger_ids=tuple(sorted(set(ids) - ours)),
        twice_ids=tuple(sorted({number for number in ids if number in ours and ids.count(number) > 1})),
        flicker=_flicker(passing.lights),
        n_frames=len(track.time_s),
    )


class _Passing:
    """Keeps of passing frames what is looked at afterwards: their brightness, and a few frames whole."""

    def __init__(self) -> None:
        self.lights: list[NDArray[np.float64]] = []
        self._kept: list[Frame] = []

    def by(self, frames: Iterable[Frame]) -> Iterator[Frame]:
        for number, frame in enumerate(frames):
            self.lights.append(frame.luma[::LIGHT_STEP, ::LIGHT_STEP].astype(np.float64))
            if number % 15 == 0 and len(self._kept) < 6:
                self._kept.append(frame)
            yield frame

    def first_with(self, track: CornerTrack) -> Frame:
        """Return the first kept frame that shows both markers calmly."""
        both = np.all(np.isfinite(track.corners_px), axis=(1, 2, 3))
        for frame in self._kept:
            if both[np.argmin(np.abs(track.time_s - frame.time_s))]:
                return frame
        raise MarkersNotFound("the two robot markers are in view together too seldom")


def _marker_looks(frame: Frame, track: CornerTrack, setup: MarkerSetup) -> tuple[MarkerLook, ...]:
    corners_px = track.corners_px[int(np.argmin(np.abs(track.time_s - frame.time_s)))]
    scale = 1.0 if frame.luma.dtype == np.uint8 else 255.0 / _full_scale(frame.luma)
    looks = []
    for marker_id, black, corners in zip(
        (setup.fore_id, setup.aft_id), pair_modules(setup), corners_px, strict=True
    ):
        pattern = build_pattern(black, mean_side_px(corners), track.optics)
        fit = fit_corners(frame.luma, corners, pattern.sharp)
        if fit is not None:
            looks.append(_marker_look(marker_id, frame.luma, corners, fit, scale))
    return tuple(looks)


def _full_scale(luma: LumaImage) -> float:
    return 1023.0 if int(luma.max()) < 1024 else 65535.0


def _marker_look(
    marker_id: int, luma: LumaImage, corners_px: FloatArray, fit: CornerFit, scale: float
) -> MarkerLook:
    low, high = np.floor(corners_px.min(axis=0)).astype(int), np.ceil(corners_px.max(axis=0)).astype(int) + 1
    crop = luma[max(low[1], 0) : high[1], max(low[0], 0) : high[0]].astype(np.float64) * scale
    top = float(crop.max()) if crop.size else 0.0
    full = float(np.mean(crop >= top - 1.0)) if top >= WHITE_FULL else 0.0
    return MarkerLook(
        marker_id=marker_id,
        side_px=mean_side_px(corners_px),
        black_grey=fit.level * scale,
        white_grey=(fit.level + fit.contrast) * scale,
        full_share=full,
        noise_grey=float(np.sqrt(fit.noise_var)) * abs(fit.contrast) * scale,
        explained=fit.explained,
    )


def _flicker(lights: list[NDArray[np.float64]]) -> float:
    """Return the scatter of the brightness between neighbouring frames; what moves in the picture does not count."""
    if len(lights) < 8:
        return np.nan
    steps = [
        float(np.median((after + 1.0) / (before + 1.0))) - 1.0 for before, after in itertools.pairwise(lights)
    ]
    return float(np.std(steps) / np.sqrt(2.0))


def tilt_deg(p: FloatArray, units: Units, pose: FloatArray) -> float:
    """Return the angle between the line of sight to the robot and the deck's normal, for a usual focal length.

    Parameters
    ----------
    p : ndarray, shape (21,)
    units : Units
    pose : ndarray, shape (3,)
        Where the robot stands.

    Notes
    -----
    The plane's map about that place, with the line of sight turned into the axis, shrinks what lies along the tilt by
    its cosine.
    """
    _, slope = projected_slope(plane_map(p[SHAPE]), pose[None, 1:])
    seen = corners_at(p, pose[None], units).reshape(8, 2).mean(axis=0) - units.centre_px
    focal_px = 2.0 * units.half_px * USUAL_FOCAL
    away = float(np.hypot(*seen)) / focal_px
    along = seen / max(float(np.hypot(*seen)), 1e-9)
    # Off the middle a small square is stretched: by 1 + r^2 along the radius, by the root of that across.
    straighten = np.eye(2) + (1.0 / np.sqrt(1.0 + away**2) - 1.0) * np.outer(along, along)
    large, small = np.linalg.svd(straighten @ slope[0], compute_uv=False)
    return float(np.degrees(np.arccos(np.clip(small / large, 0.0, 1.0))))


def distance_sides(side_px: float, image_px: tuple[int, int]) -> float:
    """Return the distance from the camera to a marker, in marker sides, for a usual focal length."""
    return USUAL_FOCAL * float(np.hypot(*image_px)) / side_px


def swept_out_px(p: FloatArray, units: Units, pose: FloatArray, image_px: tuple[int, int]) -> float:
    """Return how far the markers leave the picture when the robot turns once about the middle of its pair; 0 if not."""
    turned = np.repeat(pose[None], 72, axis=0)
    turned[:, 0] += np.linspace(0.0, 2.0 * np.pi, 72, endpoint=False)
    corners = corners_at(p, turned, units).reshape(-1, 2)
    low, high = corners.min(axis=0), corners.max(axis=0)
    return float(max(-low.min(), (high - (np.array(image_px) - 1.0)).max(), 0.0))


def least_code_distance(dictionary: str, ids: Iterable[int]) -> tuple[int, int, int] | None:
    """Return the two ids whose codes are most alike, and in how many modules they differ, turned as they may be."""
    source = dictionary_named(dictionary)
    best: tuple[int, int, int] | None = None
    for one, other in itertools.combinations(sorted(set(ids)), 2):
        bits = source.getBitsFromByteList(source.bytesList[one : one + 1], source.markerSize)
        apart = int(source.getDistanceToId(bits, other))
        if best is None or apart < best[2]:
            best = (one, other, apart)
    return best


def base_sides(p: FloatArray, units: Units) -> float:
    """Return the distance between the markers' middles in marker sides."""
    return float(p[BASE] * units.length_mm / units.side_mm)
