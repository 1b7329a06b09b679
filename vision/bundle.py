"""Calibration of the deck plane by the robot's own rotation: planar bundle adjustment.

The rigid pair, turned through many headings, makes circles of the plane's circles; that fixes the plane map, the
lens term, the pair's own geometry and a pose per frame together (Triggs et al. 2000, with the poses eliminated by
Schur complement). Every parameter that the data may leave open carries a weak prior of what phones and robots are
like, so that the returned covariance is finite, and as wide as the truth.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from vision.card_squares import CardSquares, card_normal, heavier
from vision.errors import PlaneError
from vision.observations import CornerTrack
from vision.plane import (
    AFT_RAD,
    AFT_SIZE,
    BASE,
    FORE_RAD,
    N_GLOBAL,
    NAMES,
    PRINT,
    PRINT_NAMES,
    SHAPE,
    Units,
    body_points,
    corners_at,
    project_pair,
    shape_from_homography,
    to_plane,
    units_for,
)
from vision.records import FloatArray
from vision.rigid import rigid_between

PRIOR_SD = {"k1": 0.15, "k2": 0.03, "aft_size": 0.05, "lift_x": 0.05, "lift_y": 0.05}
"""Standard deviations of the weak priors: lens terms at half a diagonal, size ratio, lift in marker distances."""

PRINT_SD_SIDES = 0.01
"""The same for the corners' offsets from true squares, in marker sides."""

EVIDENCE_FLOOR = 0.5
"""Narrowest learned prior, in units of what the clip can tell: some doubt must always stay in the covariance."""

SECTOR_RAD = float(np.deg2rad(6.0))
"""Frames whose headings differ by less repeat each other's errors."""

ALIKE_RAD = float(np.deg2rad(30.0))
"""Over such a sector residuals that the model leaves, rather than noise or coding, resemble each other."""

OUTLYING = 6.0
"""A frame's squared residuals count for no more than so many times the usual."""

N_HEADING_BINS = 72
PER_BIN = 3
MAX_STEPS = 40
CALM_SMEAR_PX = 2.0


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Calibration:
    """The plane, the lens and the pair, with their joint covariance.

    Parameters
    ----------
    p : ndarray, shape (21,)
        Global parameters in the order of `vision.plane.NAMES`.
    cov : ndarray, shape (21, 21)
        Their covariance, scaled by the misfit actually found and by how far frames err alike: by `design_effect`, but
        at least half way, as a ratio, to all frames of a sector of `SECTOR_RAD` being one.
    units : Units
    misfit : float
        Chi-square per degree of freedom against the corners' own information: 1 for pure sensor noise, more where
        coding or the model leaves something.
    n_frames : int
        Frames that entered.
    headings_rad : ndarray, shape (n_frames,)
    turned_rad : float
        Extent of headings covered, at most 2 pi.
    residual_px : float
        Root mean square corner residual.
    left_out : tuple of int
        Floor cards that were left out because they are no flat squares on the floor.
    alone : Calibration or None
        What the robot's rotation gives without the cards, where these took part.
    """

    p: FloatArray
    cov: FloatArray
    units: Units
    misfit: float
    n_frames: int
    headings_rad: FloatArray
    turned_rad: float
    residual_px: float
    left_out: tuple[int, ...] = ()
    alone: Calibration | None = None


@dataclass(frozen=True, eq=False, slots=True)
class Prior:
    """Independent normal priors of the global parameters; precision 0 where there is none."""

    mean: FloatArray
    precision: FloatArray

    def cost(self, p: FloatArray) -> float:
        """Return the weighted square distance of `p` from the mean."""
        return float(self.precision @ (p - self.mean) ** 2)


def weak_prior(units: Units) -> Prior:
    """Return the priors that only keep open parameters finite."""
    mean, precision = np.zeros(N_GLOBAL), np.zeros(N_GLOBAL)
    mean[AFT_SIZE] = 1.0
    precision[PRINT] = (PRINT_SD_SIDES * units.side_mm / units.length_mm) ** -2
    for name, sd in PRIOR_SD.items():
        precision[NAMES.index(name)] = sd**-2
    return Prior(mean, precision)


def learned_prior(p: FloatArray, cov: FloatArray, units: Units) -> Prior:
    """Return priors as narrow as the clip itself allows (empirical Bayes; Morris 1983).

    Whether the aft marker lies higher than the fore one, or is printed larger, is seldom so; where the first
    solution finds nothing beyond its own uncertainty, the parameter is drawn to its mean and costs the heading little.
    """
    prior = weak_prior(units)
    precision = prior.precision.copy()
    for group in (("lift_x", "lift_y"), ("aft_size",), ("k2",), PRINT_NAMES):
        places = [NAMES.index(name) for name in group]
        square = float(np.mean((p[places] - prior.mean[places]) ** 2))
        noise = float(np.mean(np.diag(cov)[places]))
        spread = max(square - 2.0 * noise, EVIDENCE_FLOOR**2 * noise, 1e-14)
        precision[places] = np.maximum(precision[places], 1.0 / spread)
    return Prior(prior.mean, precision)


def calibrate(track: CornerTrack, cards: CardSquares | None = None) -> Calibration:
    """Calibrate plane, lens and pair from the frames of a still camera.

    Parameters
    ----------
    track : CornerTrack
    cards : CardSquares, optional
        Floor cards under the same camera: squares on a plane parallel to the deck.

    Raises
    ------
    PlaneError
        If too few frames show both markers.
    """
    body = track.body
    units = units_for(track.image_px, side_mm=_side_mm(track), length_mm=body.base_mm)
    p = _start(track, units)
    chosen = _choose(track, p, units)
    if len(chosen) < 3:
        raise PlaneError(f"only {len(chosen)} frames show both robot markers sharply enough; 3 are needed")
    corners_px = track.corners_px[chosen].reshape(-1, 16)
    whiten = whitening(track.information[chosen])
    poses = start_poses(corners_px, p, units)
    units = replace(units, home=np.median(poses[:, 1:], axis=0))
    repeats = len(chosen) / n_sectors(poses[:, 0])
    if cards is not None:
        cards = heavier(cards, float(np.sqrt(repeats)))  # frames count that often too, until the covariance is scaled
    p, poses, cov, misfit, residual_px = _adjust(p, poses, corners_px, whiten, units, weak_prior(units), cards)
    repeats = len(chosen) / n_sectors(poses[:, 0])
    prior = learned_prior(p, cov * repeats, units)
    p, poses, cov, misfit, residual_px = _adjust(p, poses, corners_px, whiten, units, prior, cards)
    left = _whiten(whiten, (corners_px - corners_at(p, poses, units))[..., None])[..., 0]
    return Calibration(
        p=p,
        cov=cov * max(design_effect(left, poses[:, 0]), float(np.sqrt(repeats))),
        units=units,
        misfit=misfit,
        n_frames=len(chosen),
        headings_rad=poses[:, 0],
        turned_rad=covered_rad(poses[:, 0]),
        residual_px=residual_px,
    )


def _side_mm(track: CornerTrack) -> float:
    fore = track.body.points_mm[0]
    return float(np.hypot(*(np.roll(fore, -1, axis=0) - fore).T).mean())


def _start(track: CornerTrack, units: Units) -> FloatArray:
    """Return global parameters from the tracker's first estimate of plane and pair."""
    body = track.body
    to_units = np.diag([1.0 / units.half_px, 1.0 / units.half_px, 1.0])
    to_units[:2, 2] = -units.centre_px / units.half_px
    shape, _ = shape_from_homography(to_units @ body.plane_px @ np.diag([units.length_mm, units.length_mm, 1.0]))
    p = np.zeros(N_GLOBAL)
    p[SHAPE] = shape
    p[BASE] = body.base_mm / units.length_mm
    p[AFT_SIZE] = 1.0
    for place, points in ((FORE_RAD, body.points_mm[0]), (AFT_RAD, body.points_mm[1])):
        p[place] = rigid_between(units.square, points / units.length_mm)[0]
    return p


def _choose(track: CornerTrack, p: FloatArray, units: Units) -> NDArray[np.intp]:
    """Choose frames that show both markers calmly, spread over headings and, within one heading, over time."""
    both = np.all(np.isfinite(track.corners_px), axis=(1, 2, 3)) & ~track.repeat
    explained = np.min(np.nan_to_num(track.explained, nan=0.0), axis=1)
    if not both.any():
        return np.zeros(0, dtype=np.intp)
    good = both & (explained > 0.5 * (np.median(explained[both]) + 0.5))
    calm = good & (track.smear_px < CALM_SMEAR_PX)
    usable = np.flatnonzero(calm if calm.sum() >= 30 else good)
    headings = start_poses(track.corners_px[usable].reshape(-1, 16), p, units)[:, 0]
    bins = np.floor(np.mod(headings, 2.0 * np.pi) / (2.0 * np.pi) * N_HEADING_BINS).astype(int)
    n_bins = len(np.unique(bins))
    per_bin = max(PER_BIN, int(np.ceil(60 / max(n_bins, 1))))
    chosen: list[int] = []
    for number in np.unique(bins):
        members = usable[bins == number]
        places = np.unique(np.linspace(0, len(members) - 1, per_bin).round().astype(int))
        chosen.extend(members[places])
    return np.array(sorted(chosen), dtype=np.intp)


def whitening(information: NDArray[np.float32]) -> FloatArray:
    """Return factors W, shape (N, 2, 8, 8), with ``W.T @ W`` the information of each marker's corners."""
    full = information.astype(np.float64)
    # A marker that was not seen has no information at all; a grain of it keeps the factor defined and weighs nothing.
    grain = 1e-9 * np.maximum(np.trace(full, axis1=-2, axis2=-1), 1e-9)
    lower = np.linalg.cholesky(full + grain[..., None, None] * np.eye(full.shape[-1]))
    factors: FloatArray = np.swapaxes(lower, -1, -2)
    return factors


def start_poses(corners_px: FloatArray, p: FloatArray, units: Units) -> FloatArray:
    """Return a first pose (N, 3) of each frame from whichever markers it shows; NaN where it shows none."""
    points = to_plane(corners_px.reshape(-1, 8, 2), p, units)
    known = np.isfinite(points[..., :1])
    count = np.maximum(known.sum(axis=1), 1)
    seen = np.where(known, points, 0.0)
    body = np.where(known, body_points(p, units).reshape(8, 2), 0.0)
    middle_seen, middle_body = seen.sum(axis=1) / count, body.sum(axis=1) / count
    a = np.where(known, body - middle_body[:, None], 0.0)
    b = np.where(known, seen - middle_seen[:, None], 0.0)
    turn = np.arctan2(np.sum(a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0], axis=1), np.sum(a * b, axis=(1, 2)))
    c, s = np.cos(turn), np.sin(turn)
    moved = np.column_stack(
        [c * middle_body[:, 0] - s * middle_body[:, 1], s * middle_body[:, 0] + c * middle_body[:, 1]]
    )
    poses = np.column_stack([turn, middle_seen - moved])
    poses[~known.any(axis=(1, 2))] = np.nan
    return poses


def _whiten(whiten: FloatArray, columns: FloatArray) -> FloatArray:
    """Apply the factors to arrays of shape (N, 16, K)."""
    n_frames, _, n_columns = columns.shape
    split = columns.reshape(n_frames, 2, 8, n_columns)
    out: FloatArray = (whiten @ split).reshape(n_frames, 16, n_columns)
    return out


def _adjust(
    p: FloatArray,
    poses: FloatArray,
    corners_px: FloatArray,
    whiten: FloatArray,
    units: Units,
    prior: Prior,
    cards: CardSquares | None,
) -> tuple[FloatArray, FloatArray, FloatArray, float, float]:
    """Levenberg-Marquardt over all parameters, poses eliminated; Cauchy weights per marker and frame, and per card."""
    damping, misfit = 1e-3, 1.0
    _, weight, misfit = _cost(p, poses, corners_px, whiten, units, misfit)
    for _ in range(MAX_STEPS):
        system = _normal(p, poses, corners_px, whiten * np.sqrt(weight)[..., None, None], units, misfit)
        system = _with_cards(_with_prior(system, p, prior), p, units, cards)
        step, pose_steps = _solve(system, damping)
        trial_p, trial_poses = p + step, poses + pose_steps
        trial_cost, _, _ = _cost(trial_p, trial_poses, corners_px, whiten, units, misfit, fixed=True)
        now_cost, _, _ = _cost(p, poses, corners_px, whiten, units, misfit, fixed=True)
        trial_cost += prior.cost(trial_p) + _card_cost(trial_p, units, cards)
        now_cost += prior.cost(p) + _card_cost(p, units, cards)
        if not np.isfinite(trial_cost) or trial_cost > now_cost:
            damping *= 8.0
            if damping > 1e6:
                break
            continue
        p, poses = trial_p, trial_poses
        damping = max(damping * 0.2, 1e-9)
        _, weight, misfit = _cost(p, poses, corners_px, whiten, units, misfit)
        if now_cost - trial_cost < 1e-6 * max(trial_cost, 1.0):
            break
    system = _normal(p, poses, corners_px, whiten * np.sqrt(weight)[..., None, None], units, misfit)
    system = _with_cards(_with_prior(system, p, prior), p, units, cards)
    cov: FloatArray = np.asarray(np.linalg.inv(_schur(system)[0]), dtype=np.float64)
    left = corners_at(p, poses, units) - corners_px
    kept = np.repeat(weight > 0.2, 8, axis=1).reshape(len(left), 16)
    return p, poses, cov, misfit, float(np.sqrt(2.0 * np.mean(left[kept] ** 2)))


def _cost(
    p: FloatArray,
    poses: FloatArray,
    corners_px: FloatArray,
    whiten: FloatArray,
    units: Units,
    misfit: float,
    *,
    fixed: bool = False,
) -> tuple[float, FloatArray, float]:
    """Return the robust cost, the weights (N, 2) and the misfit: the median chi-square over its expectation."""
    left = corners_px - corners_at(p, poses, units)
    chi2 = np.sum(_whiten(whiten, left[..., None]).reshape(len(left), 2, 8) ** 2, axis=-1)
    if not np.all(np.isfinite(chi2)):
        return np.inf, np.ones_like(chi2), misfit
    if not fixed:
        # Of 16 coordinates a frame, its pose takes 3; the median of a chi-square of 6.5 is 5.9.
        misfit = max(float(np.median(chi2)) / 5.9, 1e-3)
    per_unit = chi2 / (8.0 * misfit)
    cost = float(np.sum(8.0 * 4.0 * np.log1p(per_unit / 4.0)))
    return cost, 1.0 / (1.0 + per_unit / 4.0), misfit


@dataclass(frozen=True, eq=False, slots=True)
class _Normal:
    a: FloatArray  # (21, 21)
    b: FloatArray  # (N, 21, 3)
    c: FloatArray  # (N, 3, 3)
    g: FloatArray  # (21,)
    h: FloatArray  # (N, 3)


def _normal(
    p: FloatArray, poses: FloatArray, corners_px: FloatArray, whiten: FloatArray, units: Units, misfit: float
) -> _Normal:
    seen = project_pair(p, poses, units)
    scale = 1.0 / np.sqrt(misfit)
    j_global = _whiten(whiten, seen.by_global) * scale
    j_pose = _whiten(whiten, seen.by_pose) * scale
    left = _whiten(whiten, (corners_px - seen.corners_px)[..., None])[..., 0] * scale
    return _Normal(
        np.tensordot(j_global, j_global, axes=([0, 1], [0, 1])),
        np.swapaxes(j_global, 1, 2) @ j_pose,
        np.swapaxes(j_pose, 1, 2) @ j_pose,
        np.einsum("nki,nk->i", j_global, left),
        np.einsum("nki,nk->ni", j_pose, left),
    )


def _with_prior(system: _Normal, p: FloatArray, prior: Prior) -> _Normal:
    return replace(
        system,
        a=system.a + np.diag(prior.precision),
        g=system.g + prior.precision * (prior.mean - p),
    )


def _with_cards(system: _Normal, p: FloatArray, units: Units, cards: CardSquares | None) -> _Normal:
    if cards is None:
        return system
    own = card_normal(cards, p, units)
    return replace(system, a=system.a + own.a, g=system.g + own.g)


def _card_cost(p: FloatArray, units: Units, cards: CardSquares | None) -> float:
    if cards is None:
        return 0.0
    cost = card_normal(cards, p, units).cost
    return cost if np.isfinite(cost) else np.inf


def _schur(system: _Normal, damping: float = 0.0) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the reduced matrix (21, 21), its right-hand side, and the inverted pose blocks."""
    c = system.c + damping * system.c * np.eye(3)
    c_inverse: FloatArray = np.asarray(np.linalg.inv(c), dtype=np.float64)
    lift = system.b @ c_inverse
    a = system.a + damping * np.diag(np.diag(system.a))
    reduced: FloatArray = a - np.tensordot(lift, system.b, axes=([0, 2], [0, 2]))
    right: FloatArray = system.g - np.einsum("nij,nj->i", lift, system.h)
    return reduced, right, c_inverse


def _solve(system: _Normal, damping: float) -> tuple[FloatArray, FloatArray]:
    reduced, right, c_inverse = _schur(system, damping)
    step: FloatArray = np.asarray(np.linalg.solve(reduced, right), dtype=np.float64)
    pose_steps: FloatArray = np.einsum("nij,nj->ni", c_inverse, system.h - np.einsum("nij,i->nj", system.b, step))
    return step, pose_steps


def design_effect(left: FloatArray, headings_rad: FloatArray) -> float:
    """Return by how much frames that resemble their neighbours in heading widen the covariance; at least 1.

    Kish's design effect (Survey Sampling, 1965) of the residuals' correlation within sectors of `ALIKE_RAD`: 1 if every
    frame errs in its own way, the frames in a sector if all of them err alike, as where the model does not hold.

    Parameters
    ----------
    left : ndarray, shape (N, 16)
        Whitened corner residuals.
    headings_rad : ndarray, shape (N,)
    """
    square = np.sum(left**2, axis=1)
    most = OUTLYING * float(np.median(square))
    tamed = left * np.sqrt(np.minimum(1.0, most / np.maximum(square, 1e-300)))[:, None]
    sector = np.floor(np.mod(headings_rad, 2.0 * np.pi) / ALIKE_RAD).astype(int)
    counts = np.bincount(sector)
    sums = np.zeros((len(counts), left.shape[1]))
    np.add.at(sums, sector, tamed)
    own = float(np.sum(tamed**2))
    n_pairs = float(np.sum(counts * (counts - 1)))
    if own == 0.0 or n_pairs == 0.0:
        return 1.0
    alike = (float(np.sum(sums**2)) - own) / n_pairs / (own / len(left))
    size = float(np.sum(counts**2)) / len(left)
    return max(1.0 + (size - 1.0) * alike, 1.0)


def n_sectors(headings_rad: FloatArray, width_rad: float = SECTOR_RAD) -> int:
    """Return how many sectors of a width the headings (N,) fall into.

    What coding and rendering do to the corners is much the same in neighbouring frames and headings, so a sector
    counts as one observation, however many frames it holds.
    """
    return len(np.unique(np.floor(np.mod(headings_rad, 2.0 * np.pi) / width_rad)))


def covered_rad(headings_rad: FloatArray) -> float:
    """Return the arc that headings (N,) cover: a full circle less the largest gap between neighbours."""
    if len(headings_rad) < 2:
        return 0.0
    around = np.sort(np.mod(headings_rad, 2.0 * np.pi))
    gaps = np.diff(np.append(around, around[0] + 2.0 * np.pi))
    return float(2.0 * np.pi - gaps.max())
