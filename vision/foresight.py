"""The uncertainty to expect of a turn, before any is filmed: a clip is imagined and measured.

What the first seconds of a clip, or one still, show of the pair (where it stands, how sharply its corners are known,
which part of their error stays the same from frame to frame) is enough to draw the corners of a whole clip of turns:
projected by the plane that was found, with errors of that size and kind. These corners then go through calibration,
poses, rests and budget, the very functions that a real clip goes through, and out comes the uncertainty that they
would state. No picture is drawn.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from vision.budget import REDUNDANCY, budget_of
from vision.bundle import calibrate, n_sectors
from vision.errors import PlaneError
from vision.ground import GroundPath
from vision.observations import CornerTrack
from vision.pair import Body, thin_for
from vision.plane import Units, corners_at
from vision.poses import solve_poses
from vision.records import Contribution, FloatArray
from vision.steady import CameraPath, calibrate_steadied, camera_path
from vision.template import Optics
from vision.track import IN_MOTION_PX
from vision.turns import split_turns, usable_frames

STANDS_PX = 0.25
"""A pair whose markers move by less than this from frame to frame stands."""

UNSEEN_EXPOSURE = 0.25
"""Exposure time, as a share of the frame interval, that is supposed while nothing moved fast (about 1/120 s)."""

FEWEST_MOVING = 5
"""So many moving frames tell how well corners are known while the pair turns."""

VIEW_S = 0.3
"""The slow part of the error of a view that cards hold steady keeps its direction for about so long."""

ONE_VIEW = 8.0
"""Parameters of plane and pair that one view of sixteen corner coordinates settles besides its pose."""

USUAL_MISFIT, USUAL_FROZEN, USUAL_COUNTS = 3.0, 1.0, 3.0
"""What corners usually miss the pair by, and what coding usually freezes, both squared and in units of the corners' own
noise, and how many degrees of freedom that expectation counts for: one view alone has five."""

START_UP_S = 0.12
"""Time in which the imagined robot gathers speed, and loses it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """The turns that are imagined.

    Parameters
    ----------
    turns_deg : tuple of float
        Heading changes, counter-clockwise positive.
    rest_s : float
        Time at rest before, between and after.
    rate_deg_s : float
    """

    turns_deg: tuple[float, ...] = (90.0, 90.0, 90.0, 90.0, -90.0, -90.0, -90.0, -90.0)
    rest_s: float = 1.0
    rate_deg_s: float = 90.0


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Prospect:
    """What a view promises: all that the imagined clip is made of.

    Parameters
    ----------
    p : ndarray, shape (21,)
        Plane, lens and pair as in `vision.plane`.
    units : Units
    pose : ndarray, shape (3,)
        Where the pair stands.
    information : ndarray, shape (2, 8, 8)
        Fisher's information (1/px^2) of each marker's corners in one frame at rest there.
    fresh, frozen : float
        Variances of the corners' errors against that information: the part that is drawn anew in every frame, and the
        part that stays over a rest.
    moving : float
        Variance of the corners' errors against their own, lesser information while the pair turns.
    moving_kept : float or None
        Share of the information that is left while the pair turns; None where no turn was seen.
    view_fresh_deg, view_deg : float
        Scatter of the heading from a moving camera that cards hold steady, from frame to frame and slow; both 0 for one
        that stands.
    frame_s, key_s : float
        Intervals of frames and of key frames.
    exposure_s, side_px, explained : float
    """

    p: FloatArray
    units: Units
    pose: FloatArray
    information: FloatArray
    fresh: float
    frozen: float
    moving: float
    moving_kept: float | None
    view_fresh_deg: float
    view_deg: float
    frame_s: float
    key_s: float
    exposure_s: float
    side_px: float
    explained: float
    body: Body
    optics: Optics
    image_px: tuple[int, int]


@dataclass(frozen=True, slots=True, kw_only=True)
class Foresight:
    """What measuring the imagined clip states.

    Parameters
    ----------
    u_deg : float
        Standard uncertainty of a heading change, root mean square over the turns; infinite where no turn could be
        measured.
    expanded_deg : float
        Expanded uncertainty (about 95 %), likewise; each turn has its own coverage factor.
    n_turns : int
        Turns found, of those imagined.
    budget : tuple of Contribution
    """

    u_deg: float
    expanded_deg: float
    n_turns: int
    budget: tuple[Contribution, ...]


NOTHING = Foresight(u_deg=np.inf, expanded_deg=np.inf, n_turns=0, budget=())


def prospect_of(track: CornerTrack, ground: GroundPath | None = None, *, key_s: float | None = None) -> Prospect:
    """Return what a stretch of clip promises.

    Parameters
    ----------
    track : CornerTrack
        Of a few seconds, or of one frame.
    ground : GroundPath, optional
    key_s : float, optional
        Interval of key frames, if it is known otherwise.

    Raises
    ------
    PlaneError
        If no frame shows both markers.
    """
    track = _thrice(track)
    path = camera_path(track, ground)
    corners, calibration = calibrate_steadied(track, path)
    poses = solve_poses(corners, calibration)
    still = _standing(corners)
    if not len(still):
        raise PlaneError("no frame shows both robot markers")
    information = np.median(corners.information[still].astype(np.float64), axis=0)
    n_views = n_sectors(calibration.headings_rad)
    fresh, frozen = _shares(poses.left[still], n_views)
    frozen = max(frozen, _whole_misfit(calibration.misfit, n_views) - fresh)
    moving = _moving(corners)
    turned = len(moving) >= FEWEST_MOVING
    middle = still[len(still) // 2]
    pose = np.array([
        -poses.heading_rad[middle],
        poses.x_mm[middle] / calibration.units.length_mm,
        -poses.y_mm[middle] / calibration.units.length_mm,
    ])  # fmt: skip
    frame_s = _frame_s(corners.time_s)
    view_fresh_deg, view_deg = _view_scatter_deg(poses.heading_rad[still], path)
    return Prospect(
        p=calibration.p,
        units=calibration.units,
        pose=pose,
        information=information,
        fresh=fresh,
        frozen=frozen,
        moving=_moving_share(poses.left[moving], n_views) if turned else fresh + frozen,
        moving_kept=_kept(corners, moving, still) if turned else None,
        view_fresh_deg=view_fresh_deg,
        view_deg=view_deg,
        frame_s=frame_s,
        key_s=key_s if key_s is not None else _key_s(corners),
        exposure_s=corners.exposure_s or UNSEEN_EXPOSURE * frame_s,
        side_px=_side_px(corners.corners_px[still]),
        explained=float(np.median(corners.explained[still])),
        body=corners.body,
        optics=corners.optics,
        image_px=corners.image_px,
    )


def _thrice(track: CornerTrack) -> CornerTrack:
    """Return a track of one frame, or of one picture over and over, as three frames: the least that can be solved."""
    both = np.flatnonzero(np.all(np.isfinite(track.corners_px), axis=(1, 2, 3)))
    fresh = both[~track.repeat[both]]
    if len(fresh) >= 3 or not len(both):
        return track
    rows = np.concatenate([both, np.full(max(3 - len(both), 0), both[0])])
    step_s = _frame_s(track.time_s)
    return replace(
        track,
        time_s=track.time_s[both[0]] + step_s * np.arange(len(rows)),
        is_key=np.arange(len(rows)) == 0,
        corners_px=track.corners_px[rows],
        information=track.information[rows],
        noise_var=track.noise_var[rows],
        explained=track.explained[rows],
        smear_px=track.smear_px[rows],
        repeat=np.zeros(len(rows), dtype=bool),
    )


def _frame_s(time_s: FloatArray) -> float:
    steps = np.diff(time_s)
    return float(np.median(steps[steps > 0.0])) if np.any(steps > 0.0) else 1.0 / 30.0


def _key_s(track: CornerTrack) -> float:
    """Return the interval of key frames; infinite where only one was seen."""
    keys_s = track.time_s[track.is_key]
    return float(np.median(np.diff(keys_s))) if len(keys_s) > 1 else np.inf


def _standing(track: CornerTrack) -> NDArray[np.intp]:
    """Return the frames of the longest stretch in which the pair stands; the sharpest frame if it never does."""
    both = np.all(np.isfinite(track.corners_px), axis=(1, 2, 3))
    if not both.any():
        return np.zeros(0, dtype=np.intp)
    steps = np.abs(np.diff(track.corners_px.mean(axis=2), axis=0)).max(axis=(1, 2))
    calm = np.concatenate([[False], np.nan_to_num(steps, nan=np.inf) < STANDS_PX])
    borders = np.flatnonzero(~calm)
    runs = np.split(np.arange(len(calm)), borders)
    longest = max(runs, key=len)
    standing: NDArray[np.intp] = longest[both[longest]]
    if len(standing) >= 2:
        return standing
    weight = np.where(both, np.trace(track.information[:, 0], axis1=1, axis2=2), -1.0)
    return np.array([int(np.argmax(weight))], dtype=np.intp)


def _moving(track: CornerTrack) -> NDArray[np.intp]:
    """Return the frames in which the pair is seen to move."""
    both = np.all(np.isfinite(track.corners_px), axis=(1, 2, 3))
    steps = np.abs(np.diff(track.corners_px.mean(axis=2), axis=0)).max(axis=(1, 2))
    far = np.concatenate([[False], np.nan_to_num(steps) > IN_MOTION_PX])
    moving: NDArray[np.intp] = np.flatnonzero(both & far)
    return moving


def _kept(track: CornerTrack, moving: NDArray[np.intp], still: NDArray[np.intp]) -> float:
    """Return the information of moving frames against that of still ones."""
    size = np.trace(track.information.astype(np.float64), axis1=2, axis2=3).sum(axis=1)
    return float(min(np.median(size[moving]) / np.median(size[still]), 1.0))


def _moving_share(left: FloatArray, n_views: int) -> float:
    """Return the variance of corner errors of moving frames against their information, from residuals (N, 16)."""
    known = left[np.all(np.isfinite(left), axis=1)]
    if len(known) == 0:
        return USUAL_MISFIT
    freedom = REDUNDANCY - _settled(n_views) / n_views
    return float(np.median(np.sum(known**2, axis=1))) / freedom


def _shares(left: FloatArray, n_views: int) -> tuple[float, float]:
    """Return the variances of corner errors that change from frame to frame, and that stay, against their noise.

    Parameters
    ----------
    left : ndarray, shape (N, 16)
        Whitened residuals of frames at one rest, poses and all else fitted.
    n_views : int
        Different headings that entered the fit: it takes up most of what stays if there is only one.
    """
    known = left[np.all(np.isfinite(left), axis=1)]
    n_frames = len(known)
    if n_frames == 0:
        return 0.0, USUAL_FROZEN
    mean = known.mean(axis=0)
    fresh = float(np.sum((known - mean) ** 2)) / (REDUNDANCY * (n_frames - 1)) if n_frames > 2 else 0.0
    freedom = REDUNDANCY - _settled(n_views) / n_views
    square = max(float(np.sum(mean**2)) - freedom * fresh / n_frames, 0.0)
    return fresh, (square + USUAL_FROZEN * USUAL_COUNTS) / (freedom + USUAL_COUNTS)


def _whole_misfit(misfit: float, n_views: int) -> float:
    """Return the squared error of corners against their noise, of which a fit to few views shows only a part."""
    freedom = REDUNDANCY * n_views - _settled(n_views)
    return (misfit * REDUNDANCY * n_views + USUAL_MISFIT * USUAL_COUNTS) / (freedom + USUAL_COUNTS)


def _settled(n_views: int) -> float:
    """Return how many parameters so many views settle beside their poses."""
    return ONE_VIEW + min(2.0 * (n_views - 1), 4.0)


def _view_scatter_deg(heading_rad: FloatArray, path: CameraPath) -> tuple[float, float]:
    """Return the scatter of the heading at rest, from frame to frame and slow, told apart as `view_noise` does."""
    if not path.held or len(heading_rad) < 3:
        return 0.0, 0.0
    heading_deg = np.degrees(np.unwrap(heading_rad))
    fresh = 0.5 * float(np.mean(np.diff(heading_deg) ** 2))
    slow = max(float(np.var(heading_deg, ddof=1)) - fresh, 0.0)
    return float(np.sqrt(fresh)), float(np.sqrt(slow))


def _side_px(corners_px: FloatArray) -> float:
    edges = np.roll(corners_px, -1, axis=2) - corners_px
    return float(np.median(np.hypot(edges[..., 0], edges[..., 1])))


def foresee(prospect: Prospect, plan: Plan | None = None, *, seed: int = 0) -> Foresight:
    """Return the uncertainty that measuring turns would state under a prospect.

    Parameters
    ----------
    prospect : Prospect
    plan : Plan, optional
    seed : int
        Of the drawn errors.
    """
    plan = plan or Plan()
    track = imagined(prospect, plan, np.random.default_rng([seed, 31]))
    still = prospect.view_deg == prospect.view_fresh_deg == 0.0
    try:
        calibration = calibrate(track)
        seen = usable_frames(track, solve_poses(track, calibration))
    except (PlaneError, np.linalg.LinAlgError):
        return NOTHING
    if len(seen.index) < 3:
        return NOTHING
    split = split_turns(seen, calibration.cov, camera_still=still, knocks=())
    known = [turn for turn in split.turns if np.isfinite(turn.u_heading_change_deg)]
    if len(known) < 0.5 * len(plan.turns_deg):
        return replace(NOTHING, n_turns=len(known))
    return Foresight(
        u_deg=float(np.sqrt(np.mean([turn.u_heading_change_deg**2 for turn in known]))),
        expanded_deg=float(np.sqrt(np.mean([turn.expanded_deg**2 for turn in known]))),
        n_turns=len(known),
        budget=budget_of(seen, split, calibration, calibration.cov, camera_still=still),
    )


def imagined(prospect: Prospect, plan: Plan, rng: np.random.Generator) -> CornerTrack:
    """Return the corners that a clip of the planned turns would give."""
    time_s, heading_deg, rest = _motion(plan, prospect.frame_s)
    n_frames = len(time_s)
    is_key = _keys(time_s, prospect.key_s)
    shown_deg = heading_deg + prospect.view_deg * _slow_noise(n_frames, VIEW_S / prospect.frame_s, rng)
    if prospect.view_fresh_deg:
        shown_deg += prospect.view_fresh_deg * rng.normal(size=n_frames)
    poses = np.repeat(prospect.pose[None], n_frames, axis=0)
    poses[:, 0] -= np.deg2rad(shown_deg)
    corners_px = corners_at(prospect.p, poses, prospect.units)
    step_px = np.abs(np.diff(corners_px, axis=0, prepend=corners_px[:1])).max(axis=1)
    smear_px = step_px * prospect.exposure_s / prospect.frame_s
    information = _turned_information(prospect, corners_px.reshape(n_frames, 2, 4, 2))
    moving = step_px > IN_MOTION_PX
    information *= _sharpness_left(prospect, moving, smear_px)[:, None, None, None]
    errors = _errors(prospect, information, moving, _frozen_groups(rest, is_key), rng)
    return CornerTrack(
        time_s=time_s,
        is_key=is_key,
        corners_px=corners_px.reshape(n_frames, 2, 4, 2) + errors,
        information=information.astype(np.float32),
        noise_var=np.full((n_frames, 2), np.nan),
        explained=np.full((n_frames, 2), prospect.explained),
        smear_px=smear_px,
        repeat=np.zeros(n_frames, dtype=bool),
        body=prospect.body,
        optics=prospect.optics,
        exposure_s=prospect.exposure_s,
        image_px=prospect.image_px,
    )


def _motion(plan: Plan, frame_s: float) -> tuple[FloatArray, FloatArray, NDArray[np.intp]]:
    """Return times, headings (deg) from the start on, and the number of the rest at each frame (-1 in motion)."""
    knots_s, knots_deg = [0.0, plan.rest_s], [0.0, 0.0]
    for turn_deg in plan.turns_deg:
        knots_s += [knots_s[-1] + abs(turn_deg) / plan.rate_deg_s]
        knots_deg += [knots_deg[-1] + turn_deg]
        knots_s += [knots_s[-1] + plan.rest_s]
        knots_deg += [knots_deg[-1]]
    time_s = np.arange(0.0, knots_s[-1], frame_s)
    ramp = np.linspace(-0.5, 0.5, 9) * START_UP_S
    heading_deg = np.mean([np.interp(time_s + part, knots_s, knots_deg) for part in ramp], axis=0)
    moving = np.abs(np.diff(heading_deg, prepend=heading_deg[0])) > 1e-9
    rest = np.cumsum(np.diff(moving.astype(int), prepend=0) == -1)
    return time_s, heading_deg, np.where(moving, -1, rest).astype(np.intp)


def _keys(time_s: FloatArray, key_s: float) -> NDArray[np.bool_]:
    if not np.isfinite(key_s):
        only: NDArray[np.bool_] = np.arange(len(time_s)) == 0
        return only
    groups = np.floor(time_s / max(key_s, 1e-3) + 1e-9)
    keys: NDArray[np.bool_] = np.diff(groups, prepend=-1.0) > 0
    return keys


def _frozen_groups(rest: NDArray[np.intp], is_key: NDArray[np.bool_]) -> NDArray[np.intp]:
    """Return a number for each frame; frames with one number share what a coded picture repeats."""
    fresh = (rest < 0) | is_key | (np.diff(rest, prepend=-2) != 0)
    groups: NDArray[np.intp] = np.cumsum(fresh).astype(np.intp) - 1
    return groups


def _slow_noise(n_frames: int, length: float, rng: np.random.Generator) -> FloatArray:
    """Return noise of unit scatter that keeps its direction for about so many frames."""
    keep = float(np.exp(-1.0 / max(length, 0.1)))
    drawn = rng.normal(size=n_frames) * np.sqrt(1.0 - keep**2)
    out = np.empty(n_frames)
    value = float(rng.normal())
    for k in range(n_frames):
        value = keep * value + drawn[k]
        out[k] = value
    return out


def _turned_information(prospect: Prospect, corners_px: FloatArray) -> FloatArray:
    """Return the information turned with the markers in the picture, shape (N, 2, 8, 8)."""
    home = corners_at(prospect.p, prospect.pose[None], prospect.units).reshape(2, 4, 2)
    a = home - home.mean(axis=1, keepdims=True)
    b = corners_px - corners_px.mean(axis=2, keepdims=True)
    cross = np.sum(a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0], axis=-1)
    turn = np.arctan2(cross, np.sum(a * b, axis=(-1, -2)))
    c, s = np.cos(turn), np.sin(turn)
    rotate = np.stack([np.stack([c, -s], axis=-1), np.stack([s, c], axis=-1)], axis=-2)
    split = prospect.information.reshape(2, 4, 2, 4, 2)
    turned = np.einsum("nmab,mibjd,nmcd->nmiajc", rotate, split, rotate)
    out: FloatArray = turned.reshape(len(corners_px), 2, 8, 8)
    return out


def _sharpness_left(prospect: Prospect, moving: NDArray[np.bool_], smear_px: FloatArray) -> FloatArray:
    """Return the share of the information left while the pair moves: as seen, or for fewer and smeared pixels."""
    if prospect.moving_kept is not None:
        return np.where(moving, prospect.moving_kept, 1.0)
    down, across = thin_for(prospect.side_px)
    smeared = 1.0 / (1.0 + smear_px**2 / (12.0 * prospect.optics.blur_px**2))
    return np.where(moving, 1.0 / (down * across), 1.0) * smeared


def _errors(
    prospect: Prospect,
    information: FloatArray,
    moving: NDArray[np.bool_],
    groups: NDArray[np.intp],
    rng: np.random.Generator,
) -> FloatArray:
    """Return drawn errors of the corners, shape (N, 2, 4, 2)."""
    n_frames = len(information)
    lower = np.linalg.cholesky(np.linalg.inv(information))
    drawn = np.sqrt(prospect.fresh) * rng.normal(size=(n_frames, 2, 8))
    drawn += np.sqrt(prospect.frozen) * rng.normal(size=(int(groups.max()) + 1, 2, 8))[groups]
    drawn[moving] = np.sqrt(prospect.moving) * rng.normal(size=(int(moving.sum()), 2, 8))
    errors: FloatArray = np.einsum("nmij,nmj->nmi", lower, drawn).reshape(n_frames, 2, 4, 2)
    return errors


def with_sharper_corners(prospect: Prospect, factor: float) -> Prospect:
    """Return the prospect with corners known so many times better (standard uncertainty)."""
    return replace(prospect, information=prospect.information * factor**2)


def free_of_coding(prospect: Prospect) -> Prospect:
    """Return the prospect without what a coder freezes: errors are then drawn anew in every frame."""
    return replace(
        prospect, fresh=max(prospect.fresh, 1.0), frozen=min(prospect.frozen, 0.5), moving=min(prospect.moving, 1.5)
    )

