"""Pose track to turns and events: rest, rotation about a centre that hardly moves, rest."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from vision.budget import (
    RestHeading,
    change_uncertainty,
    errors_of,
    heading_after,
    heading_before,
    pooled_share,
    rest_variance_deg2,
)
from vision.combining import Combined
from vision.lag import Lag, catching_up_deg, coding_lag, key_place, settled
from vision.observations import CornerTrack
from vision.poses import Poses
from vision.records import Event, FloatArray, Turn
from vision.rests import (
    SHORTEST_REST_S,
    SMALLEST_TURN_DEG,
    Motion,
    Stretch,
    bridge_pauses,
    find_motion,
    stretches,
)
from vision.sparse import time_unread

LONGEST_REST_S = 2.0
"""Only this much of a rest, next to the turn, is averaged: the camera may sink over longer times."""

JITTERS = 2.0
"""A heading at rest that jumps by this much more than the noise of a frame comes from a view that is not steady."""

UNKNOWN = Combined(u=np.nan, degrees_of_freedom=1.0, coverage_factor=np.nan, expanded=np.nan, confidence=0.95)

DRIVEN_MM = 25.0
"""A motion whose centre strays by more than this, and by more than it turns, was driven or handled."""

BEYOND_BELIEF_SIDES = 0.06
"""Corners that miss the rigid pair by more than this share of a marker's side show something else than the pair."""

GAP_FRAMES = 3.5
"""A longer stretch without sight, in frame intervals, is a gap and is reported."""

MOVED_MM = 1.5
"""A change of place over a gap beyond this means that the robot was moved meanwhile."""

FASTER = 1.5
"""In a gap the robot may have turned by this much faster than anywhere in the clip."""

FRAMES_TO_BELIEVE = 3

FULL_VIEW = 0.85
"""A marker explained by less than this share of the usual is partly covered or smeared; its size then says little."""

KNOCK_S = 0.2
"""By so much a motion may reach beyond the stretch in which the view was found to move: looks are that far apart."""

LIFT_SHARE = 0.005
"""A change of apparent size beyond this, against the rests, means that the robot was lifted or tilted."""

STANDING_SCALES = 6.0
"""And beyond so many times what it changes by while the robot stands: a warped picture breathes."""

ROCKED_SHARE, ROCKED_MM = 0.025, 4.0
"""A smaller change of size, in a turn that strays less from a fixed centre, is a body that rocks: no hand is as exact.
"""

HIDDEN_LIFT_SHARE = 0.03
"""The same where a marker is partly covered or out of sight."""

STRAYED_MM = 8.0
"""A turn that strays by more from a fixed centre, and is out of sight for a while, was helped by a hand."""


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Seen:
    """The seen frames of a clip, ready to be split (N frames).

    Parameters
    ----------
    index : ndarray of int, shape (N,)
        Which frames of the clip these are.
    time_s, heading_deg, x_mm, y_mm, scale, residual_px : ndarray, shape (N,)
        Heading unwrapped.
    gap_s : ndarray, shape (N - 1,)
        Time to the next seen frame, less what was passed over undecoded.
    u_heading_deg : ndarray, shape (N,)
        Noise of the single frame.
    by_global : ndarray, shape (N, 21)
        Derivative of the heading (deg) by the calibration.
    left : ndarray, shape (N, 16)
        Whitened corner residuals, NaN for a marker not seen.
    clear, is_key : ndarray of bool, shape (N,)
        Whether both markers were in full view; whether the frame was coded without reference to others.
    reach_mm, reach_px : float
        Distance of the markers from the middle of the pair, on the deck and, usually, in the picture.
    end_s : float
        Time of the last frame of the clip, seen or not.
    frame_s : float
        Usual frame interval.
    """

    index: NDArray[np.intp]
    time_s: FloatArray
    gap_s: FloatArray
    heading_deg: FloatArray
    x_mm: FloatArray
    y_mm: FloatArray
    scale: FloatArray
    residual_px: FloatArray
    u_heading_deg: FloatArray
    by_global: FloatArray
    left: FloatArray
    clear: NDArray[np.bool_]
    is_key: NDArray[np.bool_]
    reach_mm: float
    reach_px: float
    end_s: float
    frame_s: float


def usable_frames(corners: CornerTrack, poses: Poses, passed_over: Sequence[tuple[float, float]] = ()) -> Seen:
    """Return the frames with a believable pose, heading unwrapped along them.

    Parameters
    ----------
    corners : CornerTrack
    poses : Poses
    passed_over : sequence of (start_s, end_s)
        Still stretches that were not decoded: no gaps in sight.
    """
    steps = np.diff(corners.time_s)
    frame_s = float(np.median(steps[steps > 0])) if np.any(steps > 0) else 1.0 / 30.0
    known = np.isfinite(poses.heading_rad) & np.isfinite(poses.residual_px)
    if known.any():
        usual = float(np.median(poses.residual_px[known]))
        known &= poses.residual_px < max(12.0 * usual, BEYOND_BELIEF_SIDES * _side_px(corners))
    heading_rad = np.unwrap(poses.heading_rad[known])
    return Seen(
        index=np.flatnonzero(known),
        time_s=corners.time_s[known],
        gap_s=np.diff(corners.time_s[known]) - time_unread(passed_over, corners.time_s[known]),
        heading_deg=np.degrees(heading_rad),
        x_mm=poses.x_mm[known],
        y_mm=poses.y_mm[known],
        scale=poses.scale[known],
        residual_px=poses.residual_px[known],
        u_heading_deg=np.degrees(poses.u_heading_rad[known]),
        by_global=np.degrees(poses.by_global[known]),
        left=poses.left[known],
        clear=_clear(corners)[known],
        is_key=corners.is_key[known],
        reach_mm=0.5 * corners.body.base_mm,
        reach_px=_reach_px(corners),
        end_s=float(corners.time_s[-1]),
        frame_s=frame_s,
    )


def _reach_px(corners: CornerTrack) -> float:
    apart = corners.corners_px[:, 0].mean(axis=1) - corners.corners_px[:, 1].mean(axis=1)
    return 0.5 * float(np.nanmedian(np.hypot(apart[:, 0], apart[:, 1])))


def _clear(corners: CornerTrack) -> NDArray[np.bool_]:
    worse = np.min(np.nan_to_num(corners.explained, nan=0.0), axis=1)
    clear: NDArray[np.bool_] = worse > FULL_VIEW * float(np.nanmedian(corners.explained))
    return clear


def _side_px(corners: CornerTrack) -> float:
    edges = np.roll(corners.corners_px, -1, axis=2) - corners.corners_px
    return float(np.nanmedian(np.hypot(edges[..., 0], edges[..., 1])))


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Split:
    """The turns and events of a clip, and a state for each seen frame."""

    turns: tuple[Turn, ...]
    events: tuple[Event, ...]
    states: tuple[str, ...]
    rests: tuple[RestHeading, ...]
    motion: Motion
    lag: Lag


@dataclass(frozen=True, eq=False, slots=True)
class _Swell:
    """How much larger or smaller than usual the pair appears, and from when on that means that it was lifted."""

    change: FloatArray
    limit: float
    limit_hidden: float
    """The same where a marker is partly covered or out of sight."""

    def lifted(self, part: slice, clear: NDArray[np.bool_]) -> float:
        """Return by how much the apparent size changed over a motion; 0 if by no more than the markers' own noise."""
        change = self.change[part]
        for values, limit in ((change[clear], self.limit), (change, self.limit_hidden)):
            if len(values) >= FRAMES_TO_BELIEVE:
                lifted = float(np.sort(values)[-FRAMES_TO_BELIEVE])
                if lifted > limit:
                    return lifted
        return 0.0


def _swell(seen: Seen, motion: Motion) -> _Swell:
    change = np.abs(seen.scale / np.nanmedian(seen.scale) - 1.0) if len(seen.scale) else seen.scale
    still = change[~motion.moving & seen.clear]
    standing = STANDING_SCALES * float(np.nanquantile(still, 0.9)) if len(still) else 0.0
    return _Swell(
        change,
        limit=max(LIFT_SHARE, 8.0 * _scale_noise(seen), standing),
        limit_hidden=max(HIDDEN_LIFT_SHARE, standing),
    )


def split_turns(
    seen: Seen, cov: FloatArray, *, camera_still: bool = True, knocks: Sequence[tuple[float, float]] = ()
) -> Split:
    """Split seen frames into turns and events.

    Parameters
    ----------
    seen : Seen
    cov : ndarray, shape (21, 21)
        Covariance of the calibration.
    camera_still : bool
        Whether the camera stood still all the time.
    knocks : sequence of (start_s, end_s)
        Stretches in which the view moved and was not held steady: what seems to move then is not the robot.
    """
    motion = find_motion(seen.time_s, seen.heading_deg, seen.x_mm, seen.y_mm, reach_mm=seen.reach_mm)
    moving = bridge_pauses(motion.moving | _jumped(seen, motion), seen.time_s)
    moves = stretches(moving)
    swell = _swell(seen, motion)
    rests = _rests_around(seen, moves, jitters=not camera_still and _jitters(seen, moving))
    lag = lag_of(seen, [rest for rest in rests[1:] if rest is not None])
    errors = errors_of(seen, [rest for rest in rests if rest is not None], cov, lag, camera_still=camera_still)

    def uncertainty(before: RestHeading, after: RestHeading) -> Combined:
        return change_uncertainty(seen, before, after, errors)

    turns: list[Turn] = []
    events: list[Event] = []
    states = np.where(moving, "move", "rest").astype("<U7")
    for number, move in enumerate(moves):
        before, after = rests[number], rests[number + 1]
        kind, detail = _judge(seen, motion, swell, move, before, after)
        if kind == "turn" and _knocked(seen, move, knocks):
            continue
        if kind == "turn":
            part = slice(move.first, move.last + 1)
            rocked = swell.lifted(part, seen.clear[part]) > 0.0
            turns.append(_turn(seen, motion, move, before, after, uncertainty, rocked=rocked))
            states[move.first : move.last + 1] = "turn"
        elif not _knocked(seen, move, knocks):
            events.append(_event(seen, move, kind, detail))
    events.extend(_gap_events(seen))
    turns = _flag_handled(turns, events)
    kept = tuple(rest for rest in rests if rest is not None)
    return Split(
        turns=tuple(turns),
        events=tuple(sorted(events, key=lambda event: event.start_s)),
        states=tuple(str(state) for state in states),
        rests=kept,
        motion=motion,
        lag=lag,
    )


def moving_frames(split: Split, seen: Seen, n_frames: int) -> NDArray[np.bool_]:
    """Return which frames of the clip show the robot in motion, shape (n_frames,)."""
    moving = np.zeros(n_frames, dtype=bool)
    moving[seen.index] = split.motion.moving
    return moving


def with_moving_part(split: Split, again: Split) -> Split:
    """Return a split whose turns take from another, of the same clip, what happened between their rests.

    Angles from rest to rest, their uncertainty, times and flags stay; the peak rate, overshoot, settling, and the
    centre and wander of the rotation come from the other.
    """
    turns = []
    for turn in split.turns:
        same = [other for other in again.turns if other.start_s < turn.end_s and other.end_s > turn.start_s]
        if len(same) == 1:
            names = ("peak_rate_deg_s", "overshoot_deg", "settle_s", "centre_x_mm", "centre_y_mm", "wander_mm")
            turn = replace(turn, **{name: getattr(same[0], name) for name in names})
        turns.append(turn)
    return replace(split, turns=tuple(turns))


def _knocked(seen: Seen, move: Stretch, knocks: Sequence[tuple[float, float]]) -> bool:
    """Return whether a motion is no more than the picture's own."""
    first_s, last_s = float(seen.time_s[move.first]), float(seen.time_s[move.last])
    return any(first_s > start_s - KNOCK_S and last_s < end_s + KNOCK_S for start_s, end_s in knocks)


def lag_of(seen: Seen, rests: list[RestHeading]) -> Lag:
    """Return the coding lag of a clip from its rests that follow a motion."""
    stills = [np.arange(rest.still.first, rest.still.last + 1) for rest in rests]
    share = pooled_share(seen.left, rests)
    residue = [rest_variance_deg2(seen, frames, share) for frames in stills]
    return coding_lag(seen, stills, 2.0 * float(np.mean(residue)) if np.isfinite(share) and residue else 0.0)


def _jumped(seen: Seen, motion: Motion) -> NDArray[np.bool_]:
    """Return the frames on both sides of a gap in sight over which the robot turned or went somewhere."""
    jumped = np.zeros(len(seen.time_s), dtype=bool)
    for k in np.flatnonzero(seen.gap_s > GAP_FRAMES * seen.frame_s):
        turned_deg = abs(seen.heading_deg[k + 1] - seen.heading_deg[k])
        went_mm = np.hypot(seen.x_mm[k + 1] - seen.x_mm[k], seen.y_mm[k + 1] - seen.y_mm[k])
        if turned_deg > max(SMALLEST_TURN_DEG, 12.0 * motion.noise_deg) or went_mm > MOVED_MM:
            jumped[k : k + 2] = True
    return jumped


def _jitters(seen: Seen, moving: NDArray[np.bool_]) -> bool:
    """Return whether the heading at rest jumps from frame to frame by more than the pictures' own noise."""
    still = ~(moving[1:] | moving[:-1])
    if not still.any():
        return False
    step_deg = float(np.sqrt(0.5 * np.mean(np.diff(seen.heading_deg)[still] ** 2)))
    return step_deg > JITTERS * float(np.median(seen.u_heading_deg))


def _rests_around(seen: Seen, moves: list[Stretch], *, jitters: bool) -> list[RestHeading | None]:
    """Return the rest before each move and the one after the last; None where there is none."""
    n_frames = len(seen.time_s)
    borders = [-1, *(x for move in moves for x in (move.first, move.last)), n_frames]
    gaps = [(borders[2 * k] + 1, borders[2 * k + 1] - 1) for k in range(len(moves) + 1)]
    last_gap = len(moves)
    return [
        _rest(seen, first, last, from_start=k == 0, to_end=k == last_gap, jitters=jitters)
        for k, (first, last) in enumerate(gaps)
    ]


def _rest(seen: Seen, first: int, last: int, *, from_start: bool, to_end: bool, jitters: bool) -> RestHeading | None:
    # The frames next to a motion belong to it: smoothing has a reach, and coding lags behind.
    if not from_start:
        first += 1
    if not to_end:
        last -= 1
    if last - first < 1:
        return None
    still = Stretch(first, last)
    if seen.time_s[last] - seen.time_s[first] < 0.5 * SHORTEST_REST_S:
        return None
    frames = np.arange(first, last + 1)
    lags = not from_start and key_place(seen, frames) is None
    return RestHeading(
        still=still,
        lags=lags,
        before=_side(seen, still, late=False, whole=from_start or jitters),
        after=_side(seen, still, late=True, whole=from_start or jitters),
        behind_deg=catching_up_deg(seen, frames) if lags and not jitters else 0.0,
    )


def _side(seen: Seen, still: Stretch, *, late: bool, whole: bool) -> NDArray[np.intp]:
    """Return the frames of a rest to average for the turn before it (early) or after it (late).

    A picture that jitters more than it lags is averaged over the `whole` rest.
    """
    frames = np.arange(still.first, still.last + 1)
    if not whole:
        place = key_place(seen, frames)
        frames = settled(seen, frames) if place is None else frames[place:]
    times = seen.time_s[frames]
    near = times >= times[-1] - LONGEST_REST_S if late else times <= times[0] + LONGEST_REST_S
    chosen: NDArray[np.intp] = frames[near]
    return chosen


def _judge(
    seen: Seen,
    motion: Motion,
    swell: _Swell,
    move: Stretch,
    before: RestHeading | None,
    after: RestHeading | None,
) -> tuple[str, str]:
    """Return what a motion was: ``turn``, or the kind of an event with a detail."""
    change = _change_deg(seen, move, before, after)
    part = slice(move.first, move.last + 1)
    path_mm = float(np.hypot(np.diff(seen.x_mm[part]), np.diff(seen.y_mm[part])).sum())
    _, _, wander_mm = _centre(seen, move)
    lifted = swell.lifted(part, seen.clear[part])
    if lifted > 0.0 and not _rocks(lifted, wander_mm, change):
        return (
            "handled",
            f"apparent size changed by {100.0 * lifted:.1f} %; heading changed by {change:.2f} deg",
        )
    hidden_s = _hidden_s(seen, move)
    if hidden_s * FASTER * _top_rate(motion) > 180.0 and hidden_s > GAP_FRAMES * seen.frame_s:
        return "handled", (
            f"out of sight for {hidden_s:.2f} s while it moved; heading changed by {change:.2f} deg, or by whole "
            "revolutions more or less"
        )
    if wander_mm > STRAYED_MM and hidden_s > GAP_FRAMES * seen.frame_s:
        return "handled", (
            f"strayed by {wander_mm:.0f} mm from a turn on the spot, partly out of sight; heading changed by "
            f"{change:.2f} deg"
        )
    if wander_mm > DRIVEN_MM and path_mm > np.deg2rad(abs(change)) * 4.0 * DRIVEN_MM:
        return "driven", f"{path_mm:.0f} mm of path, heading changed by {change:.2f} deg"
    if abs(change) < max(SMALLEST_TURN_DEG, 12.0 * motion.noise_deg):
        away = float(np.abs(seen.heading_deg[part] - seen.heading_deg[move.first]).max())
        if away > max(SMALLEST_TURN_DEG, 4.0 * abs(change)):
            return "nudge", (
                f"heading went {away:.1f} deg away and came back to {change:.3f} deg without a rest of "
                f"{SHORTEST_REST_S:g} s in between"
            )
        return "nudge", f"heading changed by {change:.3f} deg and came to rest"
    return "turn", ""


def _rocks(lifted: float, wander_mm: float, change_deg: float) -> bool:
    """Return whether a change of apparent size is the body's own rocking: small, in a turn that stays on the spot."""
    return lifted < ROCKED_SHARE and wander_mm < ROCKED_MM and abs(change_deg) > SMALLEST_TURN_DEG


def _top_rate(motion: Motion) -> float:
    """Return the fastest rotation of the clip, a few outliers left out (deg/s)."""
    rates = np.abs(motion.rate_deg_s[motion.moving])
    return float(np.quantile(rates, 0.95)) if len(rates) else 0.0


def _scale_noise(seen: Seen) -> float:
    """Return the noise of the apparent size from its second differences."""
    second = np.abs(np.diff(seen.scale, 2))
    return float(np.nanquantile(second, 0.25) / 0.3186 / np.sqrt(6.0)) if len(second) else 0.0


def _hidden_s(seen: Seen, move: Stretch) -> float:
    """Return the longest gap without sight in a motion, frames on both sides included."""
    return float(seen.gap_s[max(move.first - 1, 0) : move.last + 1].max(initial=0.0))


def _change_deg(seen: Seen, move: Stretch, before: RestHeading | None, after: RestHeading | None) -> float:
    start, end = _ends_deg(seen, move, before, after)
    return end - start


def _ends_deg(seen: Seen, move: Stretch, before: RestHeading | None, after: RestHeading | None) -> tuple[float, float]:
    start = heading_before(seen, before) if before else float(seen.heading_deg[move.first])
    end = heading_after(seen, after) if after else float(seen.heading_deg[move.last])
    return start, end


def _turn(
    seen: Seen,
    motion: Motion,
    move: Stretch,
    before: RestHeading | None,
    after: RestHeading | None,
    uncertainty: Callable[[RestHeading, RestHeading], Combined],
    *,
    rocked: bool,
) -> Turn:
    part = slice(move.first, move.last + 1)
    start, end = _ends_deg(seen, move, before, after)
    change = end - start
    flags = _flags(seen, motion, move, before, after, rocked=rocked)
    doubt = uncertainty(before, after) if before is not None and after is not None else UNKNOWN
    known = np.isfinite(doubt.u)
    centre_x, centre_y, wander = _centre(seen, move)
    overshoot, settle = _settling(seen, motion, part, end, np.sign(change))
    return Turn(
        start_s=float(seen.time_s[max(move.first - 1, 0)]),
        end_s=float(seen.time_s[min(move.last + 1, len(seen.time_s) - 1)]),
        heading_change_deg=change if known else np.nan,
        u_heading_change_deg=doubt.u,
        start_heading_deg=start if before is not None else np.nan,
        end_heading_deg=end if after is not None else np.nan,
        peak_rate_deg_s=float(np.abs(motion.rate_deg_s[part]).max()) * float(np.sign(change)),
        overshoot_deg=overshoot,
        settle_s=settle,
        centre_x_mm=centre_x,
        centre_y_mm=centre_y,
        wander_mm=wander,
        flags=flags,
        degrees_of_freedom=doubt.degrees_of_freedom,
        expanded_deg=doubt.expanded,
    )


def _flags(
    seen: Seen,
    motion: Motion,
    move: Stretch,
    before: RestHeading | None,
    after: RestHeading | None,
    *,
    rocked: bool,
) -> tuple[str, ...]:
    flags: list[str] = []
    if before is None or after is None:
        flags.append("clipped")
    if _hidden_s(seen, move) > GAP_FRAMES * seen.frame_s:
        flags.append("gap")
    if _pushes(seen, motion, move) > 1:
        flags.append("two_pushes")
    if rocked:
        flags.append("rocked")
    return tuple(flags)


def _pushes(seen: Seen, motion: Motion, move: Stretch) -> int:
    """Return how many separate pushes in the main direction a turn is made of."""
    part = slice(move.first, move.last + 1)
    rate = motion.rate_deg_s[part]
    main = np.sign(seen.heading_deg[move.last] - seen.heading_deg[move.first])
    strong = rate * main > 0.25 * np.abs(rate).max()
    weak = rate * main > 0.05 * np.abs(rate).max()
    pushes = 1
    for pause in stretches(~weak):
        inner = strong[: pause.first].any() and strong[pause.last + 1 :].any()
        pushes += int(inner)
    return pushes


def _settling(seen: Seen, motion: Motion, part: slice, end_deg: float, direction: float) -> tuple[float, float]:
    """Return how far the heading went beyond its resting place, and the time from the main stop to rest."""
    along = direction * (seen.heading_deg[part] - end_deg)
    beyond = float(along.max())
    overshoot = beyond if beyond > 3.0 * max(motion.noise_deg, 1e-4) else 0.0
    fast = np.flatnonzero(np.abs(motion.rate_deg_s[part]) > 0.1 * np.abs(motion.rate_deg_s[part]).max())
    times = seen.time_s[part]
    return max(overshoot, 0.0), float(times[-1] - times[fast[-1]]) if len(fast) else 0.0


def _centre(seen: Seen, move: Stretch) -> tuple[float, float, float]:
    """Return the best fixed centre of a spin on the floor (mm) and how far the motion strays from it (RMS)."""
    part = slice(max(move.first - 1, 0), move.last + 2)
    turn = np.deg2rad(seen.heading_deg[part])
    n_frames = len(turn)
    c, s = np.cos(turn), np.sin(turn)
    design = np.zeros((2 * n_frames, 4))  # centre on the floor, and the body point that stays over it
    design[:n_frames, 0] = design[n_frames:, 1] = 1.0
    design[:n_frames, 2], design[:n_frames, 3] = c, -s
    design[n_frames:, 2], design[n_frames:, 3] = s, c
    data = np.concatenate([seen.x_mm[part], seen.y_mm[part]])
    if np.ptp(turn) < np.deg2rad(2.0):
        return np.nan, np.nan, float(np.hypot(np.ptp(seen.x_mm[part]), np.ptp(seen.y_mm[part])))
    found, *_ = np.linalg.lstsq(design, data, rcond=None)
    left = data - design @ found
    return float(found[0]), float(found[1]), float(np.sqrt(2.0 * np.mean(left**2)))


def _event(seen: Seen, move: Stretch, kind: str, detail: str) -> Event:
    return Event(start_s=float(seen.time_s[move.first]), end_s=float(seen.time_s[move.last]), kind=kind, detail=detail)


def _gap_events(seen: Seen) -> list[Event]:
    """Return stretches longer than a few frames in which neither marker was seen."""
    times = np.concatenate([[0.0], seen.time_s, [seen.end_s]])
    gaps_s = np.diff(times)
    if len(seen.gap_s):
        gaps_s[1:-1] = seen.gap_s
    events = []
    for number, (before_s, after_s) in enumerate(itertools.pairwise(times)):
        if gaps_s[number] > GAP_FRAMES * seen.frame_s:
            inner = 0 < number < len(seen.index)
            filmed = not inner or seen.index[number] - seen.index[number - 1] > 1
            what = "neither marker seen" if filmed else "the clip has no picture"
            detail = f"{what} for {after_s - before_s:.2f} s"
            events.append(Event(start_s=float(before_s), end_s=float(after_s), kind="hidden", detail=detail))
    return events


SLACK_LOST = ("handled", "driven", "nudge")


def _flag_handled(turns: list[Turn], events: list[Event]) -> list[Turn]:
    """Flag turns that follow a handling: what the wheels' slack was then is not known."""
    flagged = []
    last_s = 0.0
    for turn in turns:
        touched = any(event.kind in SLACK_LOST and last_s <= event.end_s <= turn.start_s + 0.05 for event in events)
        flagged.append(replace(turn, flags=(*turn.flags, "handled_before")) if touched else turn)
        last_s = turn.end_s
    return flagged
