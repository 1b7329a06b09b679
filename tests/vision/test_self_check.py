"""The check over the rotation: a plane that is right says nothing, one that is wrong bounds the error it makes."""

from dataclasses import replace

import numpy as np
import pytest

from demo_videos.render import render_frames, spin_motion
from demo_videos.render.scenes import plain_scene
from vision.bundle import calibrate
from vision.foresight import Plan, imagined, prospect_of
from vision.frames import Frame
from vision.glimpse import glimpse_of
from vision.plane import SHAPE
from vision.poses import solve_poses
from vision.records import Contribution, MarkerSetup
from vision.result import _unlike
from vision.self_check import check_rotation

PLAN = Plan(turns_deg=(120.0, 120.0, 120.0, -90.0), rest_s=0.7)


@pytest.fixture(scope="module")
def prospect():
    motion = spin_motion([190.0], start_delay_s=1.0, rest_s=0.5, start=(10.0, 15.0, 35.0))
    pairs = zip(range(4), render_frames(plain_scene(), motion), strict=False)
    frames = [Frame(k, time_s, luma, k == 0) for k, (time_s, luma) in pairs]
    track = glimpse_of(frames, MarkerSetup(marker_side_mm=40.0, card_side_mm=60.0)).track
    return replace(prospect_of(track, key_s=1.0), fresh=0.5, frozen=0.5, moving=1.0)


def budget(u_deg):
    return (Contribution(name="all", u_deg=u_deg, evaluation="A", degrees_of_freedom=np.inf, basis="made up"),)


def test_a_plane_that_is_right_passes(prospect):
    beyond = 0
    for seed in range(10):
        track = imagined(prospect, PLAN, np.random.default_rng(seed))
        calibration = calibrate(track)
        check = check_rotation(track, calibration, solve_poses(track, calibration))
        assert check.bound_deg < 0.02
        assert check.n_sectors >= 55
        beyond += check.beyond_chance
    assert beyond <= 2  # of ten, at a level of 1 %


@pytest.mark.parametrize(
    "change", [(0.002, 0.0, 0.0, 0.0, 0.0), (0.0, 0.002, 0.0, 0.0, 0.0), (0.0, 0.0, 0.0, 0.02, 0.0)]
)
def test_a_plane_that_is_wrong_is_bounded(prospect, change):
    track = imagined(replace(prospect, fresh=0.02, frozen=0.02), PLAN, np.random.default_rng(1))
    calibration = calibrate(track)
    p = calibration.p.copy()
    p[SHAPE] += np.array(change)
    wrong = replace(calibration, p=p)
    poses, right = solve_poses(track, wrong), solve_poses(track, calibration)
    check = check_rotation(track, wrong, poses)
    off = np.degrees(np.unwrap(poses.heading_rad) - np.unwrap(right.heading_rad))
    worst_deg = float(np.ptp(off))  # the largest error of any heading change
    assert worst_deg > 0.02
    assert check.beyond_chance
    assert 0.8 * worst_deg < check.bound_deg < 2.5 * worst_deg
    assert _unlike(check, budget(0.1 * worst_deg))
    assert not _unlike(check, budget(10.0 * worst_deg))


def test_too_little_rotation_is_not_judged(prospect):
    track = imagined(prospect, Plan(turns_deg=(60.0, -60.0)), np.random.default_rng(1))
    calibration = calibrate(track)
    assert check_rotation(track, calibration, solve_poses(track, calibration)) is None
