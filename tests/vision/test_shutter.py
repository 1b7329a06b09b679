"""Rolling shutter: the line delay is found from the moving frames, which are put right, and rests are left alone."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from demo_videos.render import render_frames, spin_motion
from demo_videos.render.scenes import plain_scene
from vision.bundle import calibrate
from vision.foresight import Plan, imagined, prospect_of
from vision.frames import Frame
from vision.glimpse import glimpse_of
from vision.plane import corners_at
from vision.poses import solve_poses
from vision.records import MarkerSetup
from vision.shutter import at_one_moment, find_line_delay, line_delay, scan_axis
from vision.turns import moving_frames, split_turns, usable_frames, with_moving_part

DELAY_S = 30e-6
PLAN = Plan(turns_deg=(90.0, 90.0, -90.0, -90.0), rest_s=0.7, rate_deg_s=110.0)


@pytest.fixture(scope="module")
def prospect():
    motion = spin_motion([190.0], start_delay_s=1.0, rest_s=0.5, start=(10.0, 15.0, 35.0))
    pairs = zip(range(4), render_frames(plain_scene(), motion), strict=False)
    frames = [Frame(k, time_s, luma, k == 0) for k, (time_s, luma) in pairs]
    track = glimpse_of(frames, MarkerSetup(marker_side_mm=40.0, card_side_mm=60.0)).track
    return replace(prospect_of(track, key_s=1.0), fresh=0.5, frozen=0.5)


def rolled(prospect, delay_s, axis=(1, 1.0)):
    """Return the track of a rolling shutter and the true turn (rad) of each frame at the middle row's moment."""
    track = imagined(prospect, PLAN, np.random.default_rng(4))
    exact = imagined(replace(prospect, fresh=0.0, frozen=0.0), PLAN, np.random.default_rng(4))
    turn_rad = np.unwrap(-solve_poses(exact, plane_of(prospect)).heading_rad)
    middle = 0.5 * (prospect.image_px[axis[0]] - 1.0)
    late_s = delay_s * axis[1] * (exact.corners_px[..., axis[0]] - middle).reshape(-1, 8)
    moved = np.empty_like(exact.corners_px.reshape(-1, 16))
    for corner in range(8):
        poses = np.repeat(prospect.pose[None], len(turn_rad), axis=0)
        poses[:, 0] = np.interp(exact.time_s + late_s[:, corner], exact.time_s, turn_rad)
        here = slice(2 * corner, 2 * corner + 2)
        moved[:, here] = corners_at(prospect.p, poses, prospect.units)[:, here]
    corners_px = track.corners_px + (moved.reshape(exact.corners_px.shape) - exact.corners_px)
    return replace(track, corners_px=corners_px), turn_rad


def plane_of(prospect):
    class Plane:
        p, units = prospect.p, prospect.units

    return Plane


def worked_up(track):
    calibration = calibrate(track)
    poses = solve_poses(track, calibration)
    seen = usable_frames(track, poses)
    split = split_turns(seen, calibration.cov, camera_still=True, knocks=())
    return calibration, poses, seen, split, moving_frames(split, seen, len(track.time_s))


@pytest.mark.parametrize("axis", [(1, 1.0), (0, -1.0)])
def test_the_line_delay_is_found(prospect, axis):
    track, _ = rolled(prospect, DELAY_S, axis)
    calibration, poses, _, _, moving = worked_up(track)
    found = find_line_delay(track, calibration, poses, moving, axis)
    assert found.how == "estimated"
    assert found.n_motions == 4
    assert abs(found.delay_s - DELAY_S) < 4.0 * found.u_s + 1.5e-6
    assert found.u_s < 4e-6


def test_a_global_shutter_is_left_alone(prospect):
    track, _ = rolled(prospect, 0.0)
    calibration, poses, _, _, moving = worked_up(track)
    found = find_line_delay(track, calibration, poses, moving, (1, 1.0))
    assert (found.how, found.delay_s) == ("not found", 0.0)


def test_moving_frames_are_put_right_and_rests_are_untouched(prospect):
    track, turn_rad = rolled(prospect, DELAY_S)
    calibration, poses, seen, split, moving = worked_up(track)
    straight = at_one_moment(track, calibration, poses, moving, (1, 1.0), DELAY_S)
    assert_array_equal(straight.corners_px[~moving], track.corners_px[~moving])
    again = solve_poses(straight, calibration)

    def error_deg(heading_rad):
        apart = np.degrees(np.unwrap(heading_rad) + turn_rad)
        return np.abs(apart - np.median(apart[~moving]))[moving]

    before, after = error_deg(poses.heading_rad), error_deg(again.heading_rad)
    assert before.max() > 0.05  # deg
    assert np.sqrt(np.mean(after**2)) < 0.6 * np.sqrt(np.mean(before**2))
    split_again = split_turns(usable_frames(straight, again), calibration.cov, camera_still=True, knocks=())
    merged = with_moving_part(split, split_again)
    assert len(merged.turns) == len(PLAN.turns_deg)
    for turn, old in zip(merged.turns, split.turns, strict=True):
        assert turn.heading_change_deg == old.heading_change_deg
        assert turn.u_heading_change_deg == old.u_heading_change_deg
    peaks = [abs(turn.peak_rate_deg_s) for turn in merged.turns]
    assert_allclose(peaks, PLAN.rate_deg_s, rtol=0.02)
    assert len(seen.time_s) == len(track.time_s)


def test_a_delay_that_is_given_is_believed(prospect):
    track, _ = rolled(prospect, 0.0)
    calibration, poses, _, _, moving = worked_up(track)
    assert line_delay(track, calibration, poses, moving, (1, 1.0), 12e-6).delay_s == 12e-6
    assert line_delay(track, calibration, poses, moving, (1, 1.0), 0.0).how == "given"


def test_the_scan_axis_follows_the_rotation_flag():
    """A stored picture whose rows grow brighter downwards, turned upright as the decoder does it."""
    rows = np.repeat(np.arange(6.0)[:, None], 4, axis=1)
    for quarter in range(4):
        axis, direction = scan_axis(90 * quarter)
        slope = np.gradient(np.rot90(rows, quarter), axis=0 if axis == 1 else 1)
        assert_array_equal(slope, np.full(slope.shape, direction))
