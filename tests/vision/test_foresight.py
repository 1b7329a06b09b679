"""An imagined clip gives back what it was made of: errors of the stated size, and an uncertainty that is true."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import render_frames, spin_motion
from demo_videos.render.scenes import plain_scene
from vision.bundle import calibrate
from vision.foresight import Plan, foresee, free_of_coding, imagined, prospect_of, with_sharper_corners
from vision.frames import Frame
from vision.glimpse import base_sides, distance_sides, glimpse_of, swept_out_px, tilt_deg
from vision.poses import solve_poses
from vision.records import MarkerSetup
from vision.turns import split_turns, usable_frames

SCENE = plain_scene()
SETUP = MarkerSetup(marker_side_mm=SCENE.robot.marker_side_mm, card_side_mm=60.0)


@pytest.fixture(scope="module")
def glimpse():
    motion = spin_motion([190.0], start_delay_s=1.0, rest_s=0.5, start=(10.0, 15.0, 35.0))
    frames = [
        Frame(k, time_s, luma, k == 0)
        for k, (time_s, luma) in zip(range(8), render_frames(SCENE, motion), strict=False)
    ]
    return glimpse_of(frames, SETUP)


@pytest.fixture(scope="module")
def prospect(glimpse):
    return prospect_of(glimpse.track, glimpse.ground, key_s=1.0)


def test_figures_of_the_view_agree_with_the_scene(glimpse, prospect):
    camera = SCENE.camera
    away_mm = camera.distance_mm - SCENE.robot.deck_height_mm
    assert_allclose(base_sides(prospect.p, prospect.units), 132.0 / 40.0, rtol=0.01)
    assert_allclose(prospect.side_px, 40.0 * camera.focal_px / away_mm, rtol=0.05)
    seen_from = distance_sides(prospect.side_px, prospect.image_px)
    assert_allclose(seen_from, away_mm / 40.0, rtol=0.25)  # the focal length is only a usual one
    assert_allclose(tilt_deg(prospect.p, prospect.units, prospect.pose), camera.tilt_deg, atol=4.0)  # deg
    assert swept_out_px(prospect.p, prospect.units, prospect.pose, prospect.image_px) == 0.0
    assert glimpse.card_ids == (10, 11, 12, 13)
    assert glimpse.stranger_ids == glimpse.twice_ids == ()


def test_fresh_noise_of_raw_frames_is_told_from_what_stays(prospect):
    assert 0.6 < prospect.fresh < 1.5  # the frames were never coded: their noise is that of the information
    assert prospect.frozen < 2.5  # one view has five degrees of freedom to tell it by
    assert prospect.view_fresh_deg == prospect.view_deg == 0.0


def test_the_uncertainty_of_an_imagined_clip_is_true(prospect):
    coded = replace(prospect, fresh=1.0, frozen=2.0)
    plan = Plan(turns_deg=(90.0, 90.0, -90.0, -90.0), rest_s=1.0)
    errors = []
    for seed in range(25):
        track = imagined(coded, plan, np.random.default_rng(seed))
        calibration = calibrate(track)
        seen = usable_frames(track, solve_poses(track, calibration))
        split = split_turns(seen, calibration.cov, camera_still=True, knocks=())
        assert len(split.turns) == 4
        errors += [
            (turn.heading_change_deg - asked) / turn.u_heading_change_deg
            for turn, asked in zip(split.turns, plan.turns_deg, strict=True)
        ]
    assert 0.6 < np.sqrt(np.mean(np.square(errors))) < 1.15  # 100 turns; the lag that is allowed for is not drawn


def but_edges_deg(found):
    """Return the uncertainty without how the camera draws edges, which no cure of the corners or of coding lowers."""
    edges = next(line.u_deg for line in found.budget if line.name == "how the camera draws edges")
    return np.sqrt(found.u_deg**2 - edges**2)


def test_cures_lower_the_uncertainty_as_they_should(prospect):
    # No coder lags where every frame is a key frame.
    bad = replace(prospect, fresh=0.2, frozen=9.0, moving=9.0, key_s=0.01)
    now = foresee(bad).u_deg
    assert but_edges_deg(foresee(with_sharper_corners(bad, 2.0))) < 0.7 * but_edges_deg(foresee(bad))
    assert but_edges_deg(foresee(free_of_coding(bad))) < 0.6 * but_edges_deg(foresee(bad))
    assert foresee(replace(bad, view_deg=0.05)).u_deg > 1.5 * now
    # What changes from frame to frame is averaged away; what is slow is not.
    assert foresee(replace(bad, view_fresh_deg=0.05)).u_deg < 0.7 * foresee(replace(bad, view_deg=0.05)).u_deg


def test_one_frame_is_enough(glimpse):
    one = replace(
        glimpse.track,
        **{name: getattr(glimpse.track, name)[:1] for name in (
            "time_s", "is_key", "corners_px", "information", "noise_var", "explained", "smear_px", "repeat")},
    )  # fmt: skip
    alone, several = (foresee(prospect_of(track, key_s=1.0)).u_deg for track in (one, glimpse.track))
    assert 1.0 / 2.5 < alone / several < 2.5


def test_hopeless_corners_promise_nothing(prospect):
    hopeless = foresee(with_sharper_corners(prospect, 1e-3))
    assert hopeless.u_deg > 1.0
