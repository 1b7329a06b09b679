"""The deck plane as the camera sees it: plane map, radial lens term, and the two markers fixed to one body.

A point of the plane goes to the picture through ``H = [[h0, h1, 0], [0, h2, 0], [h3, h4, 1]]`` and a radial lens
term, both about the picture's centre. Of the eight numbers of a homography three (a turn and a shift of the plane)
are a choice of floor frame; here the origin is the point seen at the picture's centre and x runs along the picture's
rows there. A plane parallel to this one at another height has the same numbers up to a common factor.

If the aft marker lies higher or lower than the fore one, its points appear displaced, in the fore marker's plane, away
from the camera's foot point: by a factor that its size shows too, and by a constant vector. Both are parameters.

Inside, plane coordinates have y down like the picture; `to_floor` is the only place where y is flipped.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from vision.markers import UNIT_CORNERS
from vision.records import FloatArray

N_SHAPE = 5
PRINT_NAMES = tuple(f"{which}_print{k}" for which in ("fore", "aft") for k in range(4))
NAMES = (
    *(
        "h0",
        "h1",
        "h2",
        "h3",
        "h4",
        "k1",
        "k2",
        "base",
        "fore_rad",
        "aft_rad",
        "aft_size",
        "lift_x",
        "lift_y",
    ),
    *PRINT_NAMES,
)
"""Global parameters in the order in which vectors hold them; lengths in units of `Units.length_mm`."""

SHAPE, LENS, BASE, FORE_RAD, AFT_RAD, AFT_SIZE, LIFT = slice(0, 5), slice(5, 7), 7, 8, 9, 10, slice(11, 13)
PRINT = slice(13, 21)
"""How far each marker's corners are from a true square: prints, glue, and how the camera renders edges."""

N_GLOBAL = len(NAMES)

MOST_LENS_STEPS, LENS_ROUNDING, LENS_CLOSE = 16, 1e-14, 1e-9
"""Steps that straighten a point, and the miss (half diagonals) at which they end, or the point counts as beyond."""


def _print_modes() -> FloatArray:
    """Return the four ways, shape (4, 4, 2), in which a square's corners move that are not rigid and not a scale."""
    x, y = UNIT_CORNERS.T
    shift_x, shift_y = np.array([[1.0, 0.0]] * 4), np.array([[0.0, 1.0]] * 4)
    rigid = np.stack([shift_x, shift_y, np.stack([-y, x], axis=1), np.stack([x, y], axis=1)])
    _, _, basis = np.linalg.svd(rigid.reshape(4, 8))
    modes: FloatArray = basis[4:].reshape(4, 4, 2)
    return modes


PRINT_MODES = _print_modes()


@dataclass(frozen=True, eq=False, slots=True)
class Units:
    """The units in which the geometry is solved, for good conditioning.

    Parameters
    ----------
    centre_px : ndarray, shape (2,)
        Picture centre: origin of the lens and of the plane map.
    half_px : float
        Half the picture's diagonal: unit of picture coordinates and of the lens term.
    length_mm : float
        Unit of plane coordinates.
    side_mm : float
        Side of the fore marker: what fixes the scale.
    home : ndarray, shape (2,)
        Place, in plane units, about which a difference in size of the aft marker acts: where the robot mostly is.
    """

    centre_px: FloatArray
    half_px: float
    length_mm: float
    side_mm: float
    home: FloatArray

    @property
    def square(self) -> FloatArray:
        """Corners of a marker in plane units, shape (4, 2)."""
        return UNIT_CORNERS * (self.side_mm / self.length_mm)


def units_for(image_px: tuple[int, int], *, side_mm: float, length_mm: float) -> Units:
    """Return the units for a picture of (width, height)."""
    centre_px = 0.5 * (np.array(image_px, dtype=np.float64) - 1.0)
    return Units(centre_px, 0.5 * float(np.hypot(*image_px)), length_mm, side_mm, np.zeros(2))


def plane_map(shape: FloatArray) -> FloatArray:
    """Return H, shape (3, 3), from its five numbers."""
    return np.array([[shape[0], shape[1], 0.0], [0.0, shape[2], 0.0], [shape[3], shape[4], 1.0]])


def shape_from_homography(homography: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Bring a homography (plane units to picture units) into the five-number form.

    Returns
    -------
    shape : ndarray, shape (5,)
    place : ndarray, shape (3, 3)
        Rigid motion of the plane with ``homography ~ plane_map(shape) @ inv(place)``.
    """
    back = np.linalg.inv(homography)
    origin = back[:2, 2] / back[2, 2]
    w = homography[2, :2] @ origin + homography[2, 2]
    at_origin = homography[:2, :2] / w  # the picture point is (0, 0), so the second term of the slope vanishes
    turn_rad = float(np.arctan2(-at_origin[1, 0], at_origin[1, 1]))
    c, s = np.cos(turn_rad), np.sin(turn_rad)
    if (at_origin @ np.array([c, s]))[0] < 0.0:
        c, s = -c, -s
    place = np.array([[c, -s, origin[0]], [s, c, origin[1]], [0.0, 0.0, 1.0]])
    plain = homography @ place
    plain = plain / plain[2, 2]
    return np.array([plain[0, 0], plain[0, 1], plain[1, 1], plain[2, 0], plain[2, 1]]), place


def body_points(p: FloatArray, units: Units) -> FloatArray:
    """Return the corners of both markers in the body frame, plane units, shape (2, 4, 2); lift left out."""
    square = units.square
    printed = np.einsum("mi,ikj->mkj", p[PRINT].reshape(2, 4), PRINT_MODES)
    fore = _turned(square + printed[0], p[FORE_RAD]) + np.array([0.5 * p[BASE], 0.0])
    aft = _turned(square + printed[1], p[AFT_RAD]) * p[AFT_SIZE] - np.array([0.5 * p[BASE], 0.0])
    return np.stack([fore, aft])


def _turned(points: FloatArray, turn_rad: float) -> FloatArray:
    c, s = np.cos(turn_rad), np.sin(turn_rad)
    turned: FloatArray = points @ np.array([[c, s], [-s, c]])
    return turned


def distort(points: FloatArray, lens: FloatArray) -> FloatArray:
    """Return picture points (..., 2) in units of `half_px` with the radial lens term applied."""
    r2 = np.sum(points**2, axis=-1, keepdims=True)
    bent: FloatArray = points * (1.0 + r2 * (lens[0] + r2 * lens[1]))
    return bent


def undistort(points: FloatArray, lens: FloatArray) -> FloatArray:
    """Invert `distort` by Newton's steps on the radius; NaN beyond where the lens term folds back on itself.

    Below the fold a radial term of one sign has a curvature of one sign, so the steps approach from one side.
    """
    k1, k2 = float(lens[0]), float(lens[1])
    seen = np.sqrt(np.sum(points**2, axis=-1, keepdims=True))
    radius = seen
    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        for _ in range(MOST_LENS_STEPS):
            r2 = radius * radius
            slope = 1.0 + r2 * (3.0 * k1 + r2 * 5.0 * k2)
            miss = radius * (1.0 + r2 * (k1 + r2 * k2)) - seen
            if not np.any(np.abs(miss) > LENS_ROUNDING):
                break
            radius = np.where(slope > 0.0, radius - miss / slope, np.nan)
        straight: FloatArray = points * np.where(seen > 0.0, radius / seen, 1.0)
    straight[(np.abs(miss) > LENS_CLOSE)[..., 0]] = np.nan
    return straight


def to_plane(corners_px: FloatArray, p: FloatArray, units: Units) -> FloatArray:
    """Return where picture points (..., 2) lie on the fore marker's plane, in plane units, y down."""
    m = undistort((corners_px - units.centre_px) / units.half_px, p[LENS])
    back = np.linalg.inv(plane_map(p[SHAPE]))
    w = m @ back[2, :2] + back[2, 2]
    points: FloatArray = (m @ back[:2, :2].T + back[:2, 2]) / w[..., None]
    return points


def to_floor(pose: FloatArray, units: Units) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return heading_rad (counter-clockwise), x_mm and y_mm (y up) of poses (N, 3): the only flip of y."""
    return -pose[:, 0], pose[:, 1] * units.length_mm, -pose[:, 2] * units.length_mm


def from_floor(heading_rad: FloatArray, x_mm: FloatArray, y_mm: FloatArray, units: Units) -> FloatArray:
    """Return poses (N, 3) from headings and places (y up): undoes `to_floor`, flip of y included."""
    return np.stack([-heading_rad, x_mm / units.length_mm, -y_mm / units.length_mm], axis=-1)


@dataclass(frozen=True, eq=False, slots=True)
class Projection:
    """Corners in the picture (N frames) and their derivatives.

    Parameters
    ----------
    corners_px : ndarray, shape (N, 16)
        Fore then aft, x and y in turn.
    by_global : ndarray, shape (N, 16, 21)
    by_pose : ndarray, shape (N, 16, 3)
    """

    corners_px: FloatArray
    by_global: FloatArray
    by_pose: FloatArray


def corners_at(p: FloatArray, poses: FloatArray, units: Units) -> FloatArray:
    """Return where the corners of the pair appear at given poses, shape (N, 16): `project_pair` without slopes."""
    points = _placed(p, poses, units, body_points(p, units))[0]
    h = p[SHAPE]
    w = 1.0 / (h[3] * points[..., 0] + h[4] * points[..., 1] + 1.0)
    m = np.stack([(h[0] * points[..., 0] + h[1] * points[..., 1]) * w, h[2] * points[..., 1] * w], axis=-1)
    corners_px: FloatArray = distort(m, p[LENS]) * units.half_px + units.centre_px
    return corners_px.reshape(len(poses), 16)


def project_pair(p: FloatArray, poses: FloatArray, units: Units, *, by_global: bool = True) -> Projection:
    """Return where the corners of the pair appear at given poses.

    Parameters
    ----------
    p : ndarray, shape (21,)
    poses : ndarray, shape (N, 3)
        Turn (rad, y down), x and y in plane units.
    units : Units
    by_global : bool
        Leave it out where only poses are sought: then its last axis is empty.
    """
    n_frames = len(poses)
    local, local_slopes = _body_with_slopes(p, units)  # (2, 4, 2), name -> (2, 4, 2)
    points, around, turn = _placed(p, poses, units, local)
    by_pose_points = np.zeros((n_frames, 2, 4, 2, 3))
    by_pose_points[..., 0, 0] = -around[..., 1]
    by_pose_points[..., 1, 0] = around[..., 0]
    by_pose_points[:, 0, :, 0, 1] = by_pose_points[:, 0, :, 1, 2] = 1.0
    by_pose_points[:, 1, :, 0, 1] = by_pose_points[:, 1, :, 1, 2] = p[AFT_SIZE]
    bent, by_point, by_camera = through_camera(p, points)
    slopes = np.empty((n_frames, 2, 4, 2, 0))
    if by_global:
        to_points = np.zeros((n_frames, 2, 4, 2, N_GLOBAL - 7))  # by base, angles, size, lift, print
        places = np.array(list(local_slopes)) - 7
        stacked = np.stack(list(local_slopes.values()), axis=-1)  # (2, 4, 2, K)
        to_points[..., places] = turn[:, None, None] @ stacked
        to_points[:, 1, :, :, AFT_SIZE - 7] += (poses[:, 1:] - units.home)[:, None]
        to_points[:, 1, :, 0, LIFT.start - 7] = -1.0
        to_points[:, 1, :, 1, LIFT.start - 6] = -1.0
        slopes = np.concatenate([by_camera, by_point @ to_points], axis=-1) * units.half_px
    by_pose = (by_point @ by_pose_points) * units.half_px
    return Projection(
        (bent * units.half_px + units.centre_px).reshape(n_frames, 16),
        slopes.reshape(n_frames, 16, slopes.shape[-1]),
        by_pose.reshape(n_frames, 16, 3),
    )


def _placed(
    p: FloatArray, poses: FloatArray, units: Units, local: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the body's points on the plane (N, 2, 4, 2), the same before shifting, and the turns (N, 2, 2)."""
    cos, sin = np.cos(poses[:, 0]), np.sin(poses[:, 0])
    turn = np.stack([np.stack([cos, -sin], -1), np.stack([sin, cos], -1)], axis=-2)
    around = (local.reshape(1, 8, 2) @ np.swapaxes(turn, 1, 2)).reshape(-1, 2, 4, 2)
    points = around + poses[:, None, None, 1:]
    points[:, 1] += (p[AFT_SIZE] - 1.0) * (poses[:, 1:] - units.home)[:, None] - p[LIFT]
    return points, around, turn


def _body_with_slopes(p: FloatArray, units: Units) -> tuple[FloatArray, dict[int, FloatArray]]:
    """Return body points and their derivatives by the parameters that shape the body, by place in `p`."""
    local, nothing = body_points(p, units), np.zeros((4, 2))
    half = np.full((4, 2), (0.5, 0.0))
    fore, aft = local[0] - p[BASE] * half, (local[1] + p[BASE] * half) / p[AFT_SIZE]
    quarter = 0.5 * np.pi
    slopes = {
        BASE: np.stack([half, -half]),
        FORE_RAD: np.stack([_turned(fore, quarter), nothing]),
        AFT_RAD: np.stack([nothing, _turned(aft, quarter) * p[AFT_SIZE]]),
        AFT_SIZE: np.stack([nothing, aft]),
    }
    for k, mode in enumerate(PRINT_MODES):
        slopes[PRINT.start + k] = np.stack([_turned(mode, p[FORE_RAD]), nothing])
        slopes[PRINT.start + 4 + k] = np.stack([nothing, _turned(mode, p[AFT_RAD]) * p[AFT_SIZE]])
    return local, slopes


def through_camera(p: FloatArray, points: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return bent picture points (..., 2), their derivative by the plane point, and by shape and lens."""
    h = p[SHAPE]
    x, y = points[..., 0], points[..., 1]
    w = 1.0 / (h[3] * x + h[4] * y + 1.0)
    m = np.stack([(h[0] * x + h[1] * y) * w, h[2] * y * w], axis=-1)
    by_point = np.empty((*x.shape, 2, 2))
    by_point[..., 0, 0] = (h[0] - m[..., 0] * h[3]) * w
    by_point[..., 0, 1] = (h[1] - m[..., 0] * h[4]) * w
    by_point[..., 1, 0] = -m[..., 1] * h[3] * w
    by_point[..., 1, 1] = (h[2] - m[..., 1] * h[4]) * w
    by_shape = np.zeros((*x.shape, 2, N_SHAPE))
    by_shape[..., 0, 0] = x * w
    by_shape[..., 0, 1] = y * w
    by_shape[..., 1, 2] = y * w
    by_shape[..., 3] = -m * (x * w)[..., None]
    by_shape[..., 4] = -m * (y * w)[..., None]
    k1, k2 = p[LENS]
    r2 = np.sum(m**2, axis=-1)
    swell = 1.0 + r2 * (k1 + r2 * k2)
    bend = m[..., :, None] * m[..., None, :] * (2.0 * (k1 + 2.0 * r2 * k2))[..., None, None]
    bend[..., 0, 0] += swell
    bend[..., 1, 1] += swell
    by_lens = np.stack([m * r2[..., None], m * (r2**2)[..., None]], axis=-1)
    by_camera = np.concatenate([bend @ by_shape, by_lens], axis=-1)
    return m * swell[..., None], bend @ by_point, by_camera
