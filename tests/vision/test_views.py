"""A knocked camera without cards: each stretch is measured by a calibration of its own."""

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
from vision.plane import N_GLOBAL, SHAPE
from vision.records import MarkerSetup
from vision.steady import CameraPath, calibrate_steadied
from vision.turns import split_turns, usable_frames
from vision.views import further_views, in_first_view, solve_views

PLAN = Plan(turns_deg=(90.0, 90.0, -90.0), rest_s=0.8)


@pytest.fixture(scope="module")
def prospect():
    motion = spin_motion([190.0], start_delay_s=1.0, rest_s=0.5, start=(10.0, 15.0, 35.0))
    pairs = zip(range(4), render_frames(plain_scene(), motion), strict=False)
    frames = [Frame(k, time_s, luma, k == 0) for k, (time_s, luma) in pairs]
    track = glimpse_of(frames, MarkerSetup(marker_side_mm=40.0, card_side_mm=60.0)).track
    return replace(prospect_of(track, key_s=1.0), fresh=0.5, frozen=0.5)


def knocked(prospect, plan=PLAN):
    """Return a track whose camera is tilted and shifted half way, and what is known of its path."""
    rng = np.random.default_rng(5)
    before = imagined(prospect, plan, rng)
    p = prospect.p.copy()
    p[SHAPE] += np.array([0.002, 0.0005, -0.001, 0.004, -0.003])
    turned = prospect.pose + np.array([np.deg2rad(-sum(plan.turns_deg)) - 0.02, 0.05, -0.03])
    after = imagined(replace(prospect, p=p, pose=turned), plan, rng)
    middle_s = float(before.time_s[-1]) + prospect.frame_s
    both = {
        name: np.concatenate([getattr(before, name), getattr(after, name)])
        for name in ("is_key", "corners_px", "information", "noise_var", "explained", "smear_px", "repeat")
    }
    track = replace(before, time_s=np.concatenate([before.time_s, after.time_s + middle_s]), **both)
    end_s = float(track.time_s[-1])
    stills = ((0.0, middle_s - 0.5 * prospect.frame_s), (middle_s - 0.5 * prospect.frame_s, end_s))
    path = CameraPath(
        still=False, shift_px=9.0, spans=((middle_s - 0.1, middle_s + 0.1),), strays=(), n_cards=0, best=stills[0],
        stills=stills,
    )  # fmt: skip
    return track, path


def test_both_parts_of_a_knocked_clip_are_measured(prospect):
    track, path = knocked(prospect)
    corners, first = calibrate_steadied(track, path)
    views = further_views(corners, path)
    assert len(views) == 1
    poses, cov = solve_views(corners, first, views)
    assert poses.by_global.shape[1] == len(cov) == 2 * N_GLOBAL
    seen = usable_frames(corners, poses)
    split = split_turns(seen, cov, camera_still=True, knocks=path.spans)
    asked = [*PLAN.turns_deg, *PLAN.turns_deg]
    errors = [turn.heading_change_deg - angle for turn, angle in zip(split.turns, asked, strict=True)]
    us = [turn.u_heading_change_deg for turn in split.turns]
    assert np.all(np.abs(errors) < 3.5 * np.array(us))
    assert max(us) < 0.05  # deg
    alone = np.sqrt(np.mean(np.square(errors)))
    wrong = usable_frames(corners, solve_views(corners, first, ())[0])
    by_one = split_turns(wrong, first.cov, camera_still=True, knocks=path.spans)
    worse = [turn.heading_change_deg - angle for turn, angle in zip(by_one.turns[3:], asked[3:], strict=True)]
    assert np.sqrt(np.mean(np.square(worse))) > 3.0 * alone


def test_the_track_does_not_jump_between_views(prospect):
    track, path = knocked(prospect)
    corners, first = calibrate_steadied(track, path)
    poses, _ = solve_views(corners, first, further_views(corners, path))
    edge = int(np.searchsorted(corners.time_s, path.stills[1][0]))
    around = slice(edge - 5, edge + 5)
    assert np.ptp(np.unwrap(poses.heading_rad[around])) < np.deg2rad(0.1)
    assert np.ptp(poses.x_mm[around]) < 0.2
    assert np.ptp(poses.y_mm[around]) < 0.2


def test_moments_outside_all_still_stretches_go_to_the_nearest(prospect):
    track, path = knocked(prospect)
    (_, middle_s), (_, end_s) = path.stills
    short = ((0.2, middle_s - 0.2), (middle_s + 0.1, end_s - 0.3))
    (view,) = further_views(track, replace(path, best=short[0], stills=short))
    assert_allclose((view.from_s, view.until_s), (middle_s - 0.05, np.inf))
    first = in_first_view(track.time_s, (view,))
    assert_array_equal(first, track.time_s < view.from_s)
    assert 0 < np.count_nonzero(first) < len(first)
    assert_array_equal(view.holds(track.time_s), ~first)


def test_a_part_that_turns_too_little_gets_no_map(prospect):
    track, path = knocked(prospect, Plan(turns_deg=(30.0, -30.0), rest_s=0.8))
    assert further_views(track, path) == ()


def test_a_camera_that_stands_has_one_view(prospect):
    track = imagined(prospect, PLAN, np.random.default_rng(1))
    still = CameraPath(still=True, shift_px=0.0, spans=(), strays=(), n_cards=0)
    calibration = calibrate(track)
    assert further_views(track, still) == ()
    poses, cov = solve_views(track, calibration, ())
    assert cov is calibration.cov
    assert in_first_view(track.time_s, ()).all()
    assert_allclose(np.isfinite(poses.heading_rad), 1.0)
