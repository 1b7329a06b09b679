"""A check over the rotation: on the calibrated plane the pair must look the same in every heading.

If the plane is stretched by what the model does not hold (a tilt, a lens, a height), the distance between the markers
goes up and down with the heading. A displacement that is constant on the floor makes one cycle a revolution, a stretch
along one axis two; either turns the apparent heading by as much (in radians) as it changes the distance (in shares), a
quarter of a cycle later. That bounds what calibration has left in a heading change. A stretch shears the markers too,
but so does what blur and tone do to their edges, which turns no heading: the squareness is told and does not bound.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import stats

from vision.bundle import SECTOR_RAD, Calibration
from vision.observations import CornerTrack
from vision.plane import corners_at, from_floor, to_plane
from vision.poses import Poses
from vision.records import FloatArray

FEWEST_SECTORS = 24
"""Sectors of heading that must be covered to tell the harmonics from each other (144 degrees)."""

CHANCE = 0.01
"""Amplitudes that noise alone reaches this often bound the error by their uncertainty alone."""


@dataclass(frozen=True, slots=True, kw_only=True)
class SelfCheck:
    """Amplitudes over the rotation, and the bound that they put on a heading change.

    Parameters
    ----------
    distance_first, distance_second : float
        One and two cycles a revolution in the logarithm of the marker distance, measured less modelled.
    squareness_second : float
        Two cycles a revolution in half the shear of the markers (rad): a stretch would make it equal to the distance's.
    u_distance, u_squareness : float
        Standard uncertainties of the amplitudes.
    beyond_chance : bool
        Whether the waves are larger than noise makes them.
    bound_deg : float
        What a heading change may be off by at the most: from the top of the wave to its bottom.
    n_sectors : int
        Sectors of heading that were seen.
    """

    distance_first: float
    distance_second: float
    squareness_second: float
    u_distance: float
    u_squareness: float
    beyond_chance: bool
    bound_deg: float
    n_sectors: int


def check_rotation(track: CornerTrack, calibration: Calibration, poses: Poses) -> SelfCheck | None:
    """Return the check of a clip; None if too few headings were seen to tell the harmonics apart.

    Parameters
    ----------
    track : CornerTrack
    calibration : Calibration
    poses : Poses
        Solved by that calibration.
    """
    both = np.all(np.isfinite(track.corners_px), axis=(1, 2, 3)) & np.isfinite(poses.heading_rad)
    if not both.any():
        return None
    p, units = calibration.p, calibration.units
    heading = poses.heading_rad[both]
    model_px = corners_at(p, from_floor(heading, poses.x_mm[both], poses.y_mm[both], units), units)
    seen = to_plane(track.corners_px[both].reshape(-1, 8, 2), p, units).reshape(-1, 2, 4, 2)
    meant = to_plane(model_px.reshape(-1, 8, 2), p, units).reshape(-1, 2, 4, 2)
    distance = np.log(_distance(seen) / _distance(meant))
    shear = 0.5 * (_shear(seen) - _shear(meant))
    headings, values = _by_sector(heading, np.column_stack([distance, shear]))
    if len(headings) < FEWEST_SECTORS:
        return None
    first, second, u_distance = _waves(headings, values[:, 0])
    _, square, u_square = _waves(headings, values[:, 1])
    return SelfCheck(
        distance_first=first,
        distance_second=second,
        squareness_second=square,
        u_distance=u_distance,
        u_squareness=u_square,
        beyond_chance=_beyond_chance(first, second, u_distance, len(headings)),
        bound_deg=2.0 * float(np.degrees(_bound(first, second, u_distance, len(headings)))),
        n_sectors=len(headings),
    )


def _distance(points: FloatArray) -> FloatArray:
    apart = points[:, 0].mean(axis=1) - points[:, 1].mean(axis=1)
    out: FloatArray = np.hypot(apart[:, 0], apart[:, 1])
    return out


def _shear(points: FloatArray) -> FloatArray:
    """Return how far the markers' diagonals miss a right angle (rad), the mean of both markers, shape (N,)."""
    one, other = points[:, :, 2] - points[:, :, 0], points[:, :, 3] - points[:, :, 1]
    along = np.sum(one * other, axis=-1)
    across = one[..., 0] * other[..., 1] - one[..., 1] * other[..., 0]
    out: FloatArray = np.arctan2(along, np.abs(across)).mean(axis=1)
    return out


def _by_sector(heading_rad: FloatArray, values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the middle heading and the median values of each sector seen."""
    sector = np.floor(np.mod(heading_rad, 2.0 * np.pi) / SECTOR_RAD).astype(int)
    numbers = np.unique(sector)
    medians = np.array([np.median(values[sector == number], axis=0) for number in numbers])
    return (numbers + 0.5) * SECTOR_RAD, medians.reshape(len(numbers), values.shape[1])


def _waves(heading_rad: FloatArray, values: FloatArray) -> tuple[float, float, float]:
    """Return the amplitudes of one and two cycles a revolution, and their standard uncertainty."""
    design = np.column_stack(
        [np.ones_like(heading_rad), *(wave(k * heading_rad) for k in (1.0, 2.0) for wave in (np.cos, np.sin))]
    )
    found, *_ = np.linalg.lstsq(design, values, rcond=None)
    left = values - design @ found
    variance = float(left @ left) / max(len(values) - 5, 1)
    cov = np.linalg.pinv(design.T @ design) * variance
    u = float(np.sqrt(np.mean(np.diag(cov)[1:])))
    return float(np.hypot(found[1], found[2])), float(np.hypot(found[3], found[4])), u


def _beyond_chance(first: float, second: float, u: float, n_sectors: int) -> bool:
    limit = 4.0 * float(stats.f.ppf(1.0 - CHANCE, 4, n_sectors - 5))  # four amplitudes, five parameters
    return bool(first**2 + second**2 > limit * u**2)


def _bound(first: float, second: float, u: float, n_sectors: int) -> float:
    """Return the amplitude of both waves, less what noise puts into it; their uncertainty where noise explains them."""
    if not _beyond_chance(first, second, u, n_sectors):
        return u
    return float(np.sqrt(first**2 + second**2 - 4.0 * u**2))
