"""Where the fitted pair and the floor lie in one frame: through the fitted map, or by the markers found in it."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from floorswing.records import Measurement
from vision.frames import Frame
from vision.markers import detect
from vision.plane import body_points
from vision.records import FloatArray, PoseTrack
from vision.redraw import View, deck_px, deck_to_picture, pair_px, view_from

POSE, PICTURE = "pose", "picture"


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Sight:
    """The pair in one frame.

    Parameters
    ----------
    outlines_px : ndarray, shape (K, 4, 2)
        Corners of one or two markers in the picture.
    outlines_mm : ndarray, shape (K, 4, 2)
        The same on the deck, floor axes.
    middle_mm : ndarray, shape (2,)
        Middle between the markers.
    heading_deg : float
    to_px : callable
        Takes points of the deck (..., 2) in floor axes to the picture.
    drawn_from : str
        `POSE` where the outlines are the reported pose seen through the fitted map, `PICTURE` where the camera moved
        and they are the markers found in this very frame.
    """

    outlines_px: FloatArray
    outlines_mm: FloatArray
    middle_mm: FloatArray
    heading_deg: float
    to_px: Callable[[FloatArray], FloatArray]
    drawn_from: str


class Sighter:
    """Finds the sight of each frame of a measured clip.

    Parameters
    ----------
    one : Measurement
        With its track.

    Raises
    ------
    KeyError, TypeError, ValueError
        If the measurement does not hold what redraws the pair.
    """

    def __init__(self, one: Measurement) -> None:
        record: Any = one.plane["redraw"]
        if one.track is None:
            raise ValueError("no track")
        self._track: PoseTrack = one.track
        self._view = view_from(record, (one.source.info.width_px, one.source.info.height_px))
        self._setup = one.trial.marker_setup()
        self._moved = any(event.kind == "camera moved" for event in one.events)
        self._body = body_mm(self._view)
        self.reach_mm = float(np.hypot(*self._body.reshape(-1, 2).T).max())
        """Distance of the farthest corner from the middle."""

    def __call__(self, frame: Frame, heading_deg: float | None = None) -> Sight | None:
        """Return the sight of a frame, at a heading of its rest or at its own; None where nothing can be drawn."""
        k = self._row(frame.time_s)
        heading = float(self._track.heading_deg[k]) if heading_deg is None else heading_deg
        if not math.isfinite(heading):
            return None
        return self._by_markers(frame, heading) if self._moved else self._by_pose(k, heading)

    def _row(self, time_s: float) -> int:
        times = self._track.time_s
        after = min(int(np.searchsorted(times, time_s)), len(times) - 1)
        return after - 1 if after and time_s - times[after - 1] < times[after] - time_s else after

    def _by_pose(self, k: int, heading_deg: float) -> Sight | None:
        x_mm, y_mm = self._track.x_mm[k : k + 1], self._track.y_mm[k : k + 1]
        if not math.isfinite(float(x_mm[0] + y_mm[0])):
            return None
        middle = np.array([float(x_mm[0]), float(y_mm[0])])
        corners_px = pair_px(self._view, np.array([heading_deg]), x_mm, y_mm)[0]
        view = self._view
        return Sight(
            outlines_px=corners_px,
            outlines_mm=_back(view, corners_px, _turned(self._body, heading_deg) + middle),
            middle_mm=middle,
            heading_deg=heading_deg,
            to_px=lambda points: deck_px(view, points),
            drawn_from=POSE,
        )

    def _by_markers(self, frame: Frame, heading_deg: float) -> Sight | None:
        wanted = (self._setup.fore_id, self._setup.aft_id)
        found = {one.marker_id: one.corners_px for one in detect(frame.luma, self._setup.dictionary, wanted)}
        seen = [n for n, marker_id in enumerate(wanted) if marker_id in found]
        if not seen:
            return None
        corners_px = np.stack([found[wanted[n]] for n in seen])
        deck = _turned(self._body, heading_deg)[seen]
        map_ = deck_to_picture(corners_px.reshape(-1, 2), deck.reshape(-1, 2))
        return Sight(
            outlines_px=corners_px,
            outlines_mm=_through(np.asarray(np.linalg.inv(map_), dtype=np.float64), corners_px),
            middle_mm=np.zeros(2),
            heading_deg=heading_deg,
            to_px=lambda points: _through(map_, points),
            drawn_from=PICTURE,
        )


def body_mm(view: View) -> FloatArray:
    """Return the corners of both markers about the middle between them at heading 0, y up, shape (2, 4, 2)."""
    return np.asarray(body_points(view.p, view.units) * view.units.length_mm * np.array([1.0, -1.0]))


def _turned(points: FloatArray, heading_deg: float) -> FloatArray:
    c, s = math.cos(math.radians(heading_deg)), math.sin(math.radians(heading_deg))
    turned: FloatArray = points @ np.array([[c, s], [-s, c]])
    return turned


def _through(map_: FloatArray, points: FloatArray) -> FloatArray:
    there = np.concatenate([points, np.ones((*points.shape[:-1], 1))], axis=-1) @ map_.T
    out: FloatArray = there[..., :2] / there[..., 2:]
    return out


def _back(view: View, corners_px: FloatArray, points: FloatArray) -> FloatArray:
    """Return which points of the deck appear at these places of the picture, by Newton's steps from a first guess.

    The pair's own corners would do, were the aft marker not displaced in the picture where it lies higher.
    """
    x_step, y_step = np.array([0.5, 0.0]), np.array([0.0, 0.5])
    for _ in range(4):
        here = deck_px(view, points)
        slope = np.stack([deck_px(view, points + x_step) - here, deck_px(view, points + y_step) - here], axis=-1) / 0.5
        points = points + np.linalg.solve(slope, (corners_px - here)[..., None])[..., 0]
    return np.asarray(points)
