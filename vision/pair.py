"""The robot's two markers as one rigid pair: where they are first found, and how the pair is built.

The markers may sit anywhere on the robot at any angle; only their side is known. One picture of both gives a first
estimate of the deck plane and of their relative pose, good enough to follow them; the calibration over the whole
clip (`vision.plane`) replaces it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares, minimize, minimize_scalar

from vision.align import CornerFit, fit_corners
from vision.frames import LumaImage
from vision.markers import UNIT_CORNERS, printed_modules
from vision.records import FloatArray, MarkerSetup
from vision.rigid import fit_homography, inverse, project, rigid, rigid_between
from vision.template import Optics, Template, build_template

PROCESSED_STARTS = ((0.0, 0.15, 1.5), (0.0, 0.5, 1.0), (-0.3, 0.4, 1.0), (0.2, 0.0, 1.5), (-0.2, 0.0, 1.5))
"""Tone, halo and halo radius (px) from which the optics are sought."""

WORTH = 0.98
"""A rendering with tone curve and halo is kept if it leaves less than this share of what plain blur leaves."""


ENOUGH_PX = 400.0
"""So many compared pixels on a marker are enough while the pair moves: rests are what counts."""

THINNED = ((1, 1), (2, 1), (2, 2), (3, 2), (3, 3), (4, 3), (4, 4), (5, 4), (5, 5))
"""Every so many-th row and column that may be compared, from all to ever fewer."""


@dataclass(frozen=True, eq=False, slots=True)
class Body:
    """The pair as a rigid body in the deck plane.

    Parameters
    ----------
    points_mm : ndarray, shape (2, 4, 2)
        Corners of the fore and the aft marker, origin midway between the centres, x from aft to fore, y to the
        right-hand side of that seen from above.
    plane_px : ndarray, shape (3, 3)
        Map from the body frame to the picture at the frame it was estimated from.
    """

    points_mm: FloatArray
    plane_px: FloatArray

    @property
    def base_mm(self) -> float:
        """Distance between the two marker centres."""
        return float(np.hypot(*(self.points_mm[0].mean(axis=0) - self.points_mm[1].mean(axis=0))))


def body_from_corners(corners_px: FloatArray, side_mm: float) -> Body | None:
    """Estimate plane and relative pose from one picture of both markers.

    Parameters
    ----------
    corners_px : ndarray, shape (2, 4, 2)
        Corners of the fore and the aft marker.
    side_mm : float

    Returns
    -------
    Body or None
        None if the corners do not look like two squares in one plane.
    """
    square = UNIT_CORNERS * side_mm
    centre_px = corners_px.reshape(-1, 2).mean(axis=0)
    spread_px = float(np.abs(corners_px - centre_px).max())
    seen = (corners_px - centre_px) / spread_px
    first = fit_homography(square, seen[0])
    if first is None:
        return None
    back = np.linalg.inv(first)
    start_pose = rigid_between(square, project(back / back[2, 2], seen[1]))
    if not np.all(np.isfinite(start_pose)):
        return None

    def misfit(p: FloatArray) -> FloatArray:
        plane = np.append(p[:8] * scale[:8], 1.0).reshape(3, 3)
        aft = project(rigid(p[8], p[9] * side_mm, p[10] * side_mm), square)
        both = project(plane, np.concatenate([square, aft]))
        apart: FloatArray = np.nan_to_num((both - seen.reshape(-1, 2)).ravel(), nan=10.0)
        return apart

    scale = np.array([1 / side_mm, 1 / side_mm, 1.0] * 2 + [1 / side_mm, 1 / side_mm])
    plane0 = (first / first[2, 2]).ravel()[:8] / scale
    start = np.concatenate([plane0, [start_pose[0], start_pose[1] / side_mm, start_pose[2] / side_mm]])
    found = least_squares(misfit, start, method="lm", max_nfev=400)
    worst_px = float(np.abs(found.fun).max()) * spread_px
    sides_px = np.hypot(*np.moveaxis(np.roll(corners_px, -1, axis=1) - corners_px, -1, 0))
    if worst_px > max(1.5, 0.08 * float(sides_px.mean())):
        return None
    plane = np.append(found.x[:8] * scale, 1.0).reshape(3, 3)
    aft = project(rigid(found.x[8], found.x[9] * side_mm, found.x[10] * side_mm), square)
    lift = np.array([[spread_px, 0.0, centre_px[0]], [0.0, spread_px, centre_px[1]], [0.0, 0.0, 1.0]])
    return _in_body_frame(np.stack([square, aft]), lift @ plane)


def _in_body_frame(points_mm: FloatArray, plane_px: FloatArray) -> Body | None:
    fore, aft = points_mm.mean(axis=1)
    if np.hypot(*(fore - aft)) < 1e-6:
        return None
    heading_rad = float(np.arctan2(*(fore - aft)[::-1]))
    middle = 0.5 * (fore + aft)
    place = rigid(heading_rad, middle[0], middle[1])
    return Body(project(inverse(place), points_mm), plane_px @ place)


@dataclass(frozen=True, eq=False, slots=True)
class Pattern:
    """A marker's modules with the templates to look for it: one sharp, one softened for coarse search."""

    black: NDArray[np.bool_]
    side_px: float
    sharp: Template
    soft: Template
    soften_px: float

    @property
    def thin(self) -> tuple[int, int]:
        """Every so many-th row and column is compared while the pair moves."""
        return thin_for(self.side_px)


def thin_for(side_px: float) -> tuple[int, int]:
    """Return which rows and columns of a marker of that size are compared while it moves."""
    most = max(side_px**2 / ENOUGH_PX, 1.0)
    return max((down, across) for down, across in THINNED if down * across <= most)


def build_pattern(black: NDArray[np.bool_], side_px: float, optics: Optics) -> Pattern:
    """Return both templates of a marker that is about `side_px` large in the picture."""
    soften_px = max(1.2, 0.5 * side_px / black.shape[0])
    softer = replace(optics, blur_px=float(np.hypot(optics.blur_px, soften_px)), tone=0.0, halo=0.0)
    return Pattern(
        black=black,
        side_px=side_px,
        sharp=build_template(black, side_px=side_px, optics=optics),
        soft=build_template(black, side_px=side_px, optics=softer),
        soften_px=soften_px,
    )


def pair_modules(setup: MarkerSetup) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Return the modules of the fore and the aft marker."""
    return printed_modules(setup.dictionary, setup.fore_id), printed_modules(setup.dictionary, setup.aft_id)


def mean_side_px(corners_px: FloatArray) -> float:
    """Return the mean length of the four sides of one marker, corners of shape (4, 2)."""
    points = corners_px.tolist()
    return 0.25 * sum(math.dist(points[k - 1], points[k]) for k in range(4))


def settle_corners(
    image: LumaImage, corners_px: FloatArray, template: Template, *, steps: int = 5
) -> tuple[FloatArray, CornerFit] | None:
    """Align one marker freely from nearby corners; None if the pattern has no hold there.

    Returns
    -------
    corners_px : ndarray, shape (4, 2)
    fit : CornerFit
        The last model, rendered within a small fraction of a pixel of `corners_px`.
    """
    fit = None
    for _ in range(steps):
        fit = fit_corners(image, corners_px, template)
        if fit is None:
            return None
        move = fit.move_px
        limit = 0.15 * mean_side_px(fit.corners_px)
        if not np.all(np.isfinite(move)) or np.abs(move).max() > limit:
            return None
        corners_px = fit.corners_px + move
        if np.abs(move).max() < 0.05:
            break
    return (corners_px, fit) if fit is not None else None


def tune_optics(
    image: LumaImage, corners_px: FloatArray, modules: tuple[NDArray[np.bool_], ...]
) -> tuple[Optics, FloatArray]:
    """Find the point spread and the halo under which the patterns explain the picture best.

    Parameters
    ----------
    image : ndarray
    corners_px : ndarray, shape (M, 4, 2)
        Corners of each marker, to about a pixel.
    modules : tuple of ndarray of bool

    Returns
    -------
    optics : Optics
    corners_px : ndarray, shape (M, 4, 2)
        Aligned under these optics.
    """
    optics = Optics(blur_px=min(1.0, 0.35 * mean_side_px(corners_px[0]) / modules[0].shape[0]))
    corners_px = _settle_all(image, corners_px, modules, optics)
    optics = _plain_optics(_Rendering(image, corners_px, modules))
    corners_px = _settle_all(image, corners_px, modules, optics)
    optics = _best_optics(_Rendering(image, corners_px, modules), optics)
    return optics, _settle_all(image, corners_px, modules, optics)


class _Rendering:
    """How much of the markers' picture some optics leave unexplained, the markers held in place."""

    def __init__(self, image: LumaImage, corners_px: FloatArray, modules: tuple[NDArray[np.bool_], ...]) -> None:
        self._image = image
        self._markers = [
            (corners, black, mean_side_px(corners)) for corners, black in zip(corners_px, modules, strict=True)
        ]

    def left(self, values: FloatArray) -> float:
        """Return the sum of relative noise variances under (log blur, tone, halo, log halo radius)."""
        optics = _optics(values)
        if not (0.35 <= optics.blur_px <= 5.0 and abs(optics.tone) < 0.95 and 0.0 <= optics.halo < 3.0):
            return 10.0
        if not 0.5 <= optics.halo_px <= 5.0:
            return 10.0
        total = 0.0
        for corners, black, side_px in self._markers:
            fit = fit_corners(self._image, corners, build_template(black, side_px=side_px, optics=optics))
            total += fit.noise_var if fit is not None else 1.0
        return total


def _optics(values: FloatArray) -> Optics:
    return Optics(float(np.exp(values[0])), float(values[1]), float(values[2]), float(np.exp(values[3])))


def _plain_optics(rendering: _Rendering) -> Optics:
    found = minimize_scalar(
        lambda log_blur: rendering.left(np.array([log_blur, 0.0, 0.0, 0.0])),
        bounds=(np.log(0.4), np.log(4.0)),
        method="bounded",
        options={"maxiter": 12, "xatol": 0.02},
    )
    return Optics(float(np.exp(found.x)))


def _best_optics(rendering: _Rendering, plain: Optics) -> Optics:
    """Return the optics that explain most; plain blur unless tone curve and halo explain clearly more."""
    log_blur = np.log(plain.blur_px)
    plain_left = rendering.left(np.array([log_blur, 0.0, 0.0, 0.0]))
    starts = [np.array([log_blur, tone, halo, np.log(radius)]) for tone, halo, radius in PROCESSED_STARTS]
    lefts = [rendering.left(start) for start in starts]
    if min(lefts) > plain_left:
        return plain
    first = starts[int(np.argmin(lefts))]
    simplex = first + np.vstack([np.zeros(4), np.diag([0.15, 0.25, 0.3, 0.3])])
    found = minimize(
        rendering.left,
        first,
        method="Nelder-Mead",
        options={"maxfev": 70, "xatol": 0.01, "fatol": 1e-6, "initial_simplex": simplex},
    )
    return _optics(found.x) if found.fun < WORTH * plain_left else plain


def _settle_all(
    image: LumaImage, corners_px: FloatArray, modules: tuple[NDArray[np.bool_], ...], optics: Optics
) -> FloatArray:
    settled = []
    for corners, black in zip(corners_px, modules, strict=True):
        template = build_template(black, side_px=mean_side_px(corners), optics=optics)
        found = settle_corners(image, corners, template)
        settled.append(found[0] if found is not None else corners)
    return np.stack(settled)
