"""The fitted pair drawn back into the picture, from what a measurement keeps.

A drawn outline is what the reported pose claims, seen through the fitted plane map, lens and mounting: where it lies on
the printed squares, the numbers and the picture agree. It holds for a camera that stood still; the pictures of one that
moved do not share a map.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from vision.plane import LENS, N_GLOBAL, SHAPE, Units, distort, from_floor, plane_map, project_pair, units_for
from vision.records import FloatArray, frozen_array

FloorFrame = tuple[float, float, float]
"""Heading (deg) and place (mm) of the floor frame in the plane's own frame, y up."""


@dataclass(frozen=True, eq=False, slots=True)
class View:
    """How floor and pair appear in the pictures of a clip.

    Parameters
    ----------
    p : ndarray, shape (21,)
        Fitted parameters in the order of `vision.plane.NAMES`.
    units : Units
    frame : FloorFrame
    """

    p: FloatArray
    units: Units
    frame: FloorFrame


def redraw_record(p: FloatArray, units: Units, frame: FloorFrame) -> dict[str, object]:
    """Return what `view_from` needs, ready for JSON."""
    return {
        "parameters": p.tolist(),
        "home": units.home.tolist(),
        "length_mm": units.length_mm,
        "side_mm": units.side_mm,
        "floor_frame_deg": frame[0],
        "floor_frame_mm": [frame[1], frame[2]],
    }


def view_from(record: Mapping[str, Any], image_px: tuple[int, int]) -> View:
    """Return the view that `redraw_record` described.

    Parameters
    ----------
    record : mapping
    image_px : (width, height)

    Raises
    ------
    KeyError, TypeError, ValueError
        If `record` is not such a description.
    """
    units = units_for(image_px, side_mm=float(record["side_mm"]), length_mm=float(record["length_mm"]))
    home = frozen_array(record["home"], (2,))
    x_mm, y_mm = record["floor_frame_mm"]
    return View(
        p=frozen_array(record["parameters"], (N_GLOBAL,)),
        units=Units(units.centre_px, units.half_px, units.length_mm, units.side_mm, home),
        frame=(float(record["floor_frame_deg"]), float(x_mm), float(y_mm)),
    )


def pair_px(view: View, heading_deg: FloatArray, x_mm: FloatArray, y_mm: FloatArray) -> FloatArray:
    """Return where the corners of both markers appear at poses given in the floor frame, shape (N, 2, 4, 2)."""
    place = _off_floor(view.frame, np.stack([x_mm, y_mm], axis=-1))
    poses = from_floor(np.deg2rad(heading_deg + view.frame[0]), place[:, 0], place[:, 1], view.units)
    return project_pair(view.p, poses, view.units).corners_px.reshape(-1, 2, 4, 2)


def deck_px(view: View, points_mm: FloatArray) -> FloatArray:
    """Return where points (..., 2) of the deck plane, given in the floor frame, appear in the picture."""
    place = _off_floor(view.frame, points_mm)
    points = from_floor(np.zeros(place.shape[:-1]), place[..., 0], place[..., 1], view.units)[..., 1:]
    there = np.concatenate([points, np.ones((*points.shape[:-1], 1))], axis=-1) @ plane_map(view.p[SHAPE]).T
    straight = there[..., :2] / there[..., 2:]
    out: FloatArray = distort(straight, view.p[LENS]) * view.units.half_px + view.units.centre_px
    return out


def deck_to_picture(pair: FloatArray, body_mm: FloatArray) -> FloatArray:
    """Return the homography, shape (3, 3), from the deck to the picture about one sight of the pair.

    For pictures that share no map: of a camera that moved. Least squares over the corners (direct linear transform with
    scaled coordinates; Hartley 1997), no lens term.

    Parameters
    ----------
    pair : ndarray, shape (K, 2)
        Corners in the picture.
    body_mm : ndarray, shape (K, 2)
        The same corners on the deck, y up.
    """
    to_unit_a, a = _scaled(body_mm)
    to_unit_b, b = _scaled(pair)
    ones, nothing = np.ones(len(a)), np.zeros((len(a), 3))
    flat = np.column_stack([a, ones])
    rows = np.concatenate(
        [np.hstack([flat, nothing, -b[:, :1] * flat]), np.hstack([nothing, flat, -b[:, 1:] * flat])]
    )
    _, _, right = np.linalg.svd(rows)
    found = np.linalg.inv(to_unit_b) @ right[-1].reshape(3, 3) @ to_unit_a
    return np.asarray(found / found[2, 2])


def _scaled(points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the map to coordinates about their middle with mean distance root two, and the points there."""
    middle = points.mean(axis=0)
    scale = np.sqrt(2.0) / float(np.hypot(*(points - middle).T).mean())
    to_unit = np.array([[scale, 0.0, -scale * middle[0]], [0.0, scale, -scale * middle[1]], [0.0, 0.0, 1.0]])
    return to_unit, (points - middle) * scale


def _off_floor(frame: FloorFrame, points_mm: FloatArray) -> FloatArray:
    """Return points of the floor frame in the plane's own frame, y up."""
    c, s = np.cos(np.deg2rad(frame[0])), np.sin(np.deg2rad(frame[0]))
    moved: FloatArray = points_mm @ np.array([[c, s], [-s, c]]) + np.array(frame[1:])
    return moved
