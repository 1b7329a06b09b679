"""Corners from the edges of the squares: against known squares, as a cross-check, and in the alignment's place."""

from dataclasses import replace
from itertools import islice

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.special import ndtr

from demo_videos.render import render_frames, spin_motion
from demo_videos.render.scenes import plain_scene
from vision.cross_check import CrossCheck, cross_check
from vision.edges import edge_corners
from vision.frames import Frame
from vision.markers import UNIT_CORNERS
from vision.poses import solve_poses
from vision.records import MarkerSetup
from vision.steady import calibrate_steadied, camera_path
from vision.track import PairTracker, find_pair, track_pair
from vision.turns import split_turns, usable_frames

SETUP = MarkerSetup(marker_side_mm=40.0, card_side_mm=60.0)


def square_picture(turn_deg, *, side_px=44.0, blur_px=1.0, noise=0.0, bent=0.0, rng=None):
    """Return a black square frame on paper, seen blurred, and its corners (shape (4, 2))."""
    c, s = np.cos(np.deg2rad(turn_deg)), np.sin(np.deg2rad(turn_deg))
    turn, middle = np.array([[c, -s], [s, c]]), np.array([50.3, 48.8])
    y, x = np.mgrid[0:100, 0:100]
    own = (np.stack([x, y], axis=-1) - middle) @ turn
    inside = np.prod([ndtr((0.5 * side_px - own[..., k]) / blur_px) * ndtr((0.5 * side_px + own[..., k]) / blur_px)
                      for k in range(2)], axis=0)  # fmt: skip
    core = np.prod([ndtr((0.375 * side_px - np.abs(own[..., k])) / blur_px) for k in range(2)], axis=0)
    white = 1.0 - inside + 0.5 * core
    white = white + bent * white * (1.0 - np.clip(white, 0.0, 1.0))
    picture = 30.0 + 170.0 * white + (rng.normal(scale=noise, size=white.shape) if noise else 0.0)
    corners = UNIT_CORNERS * side_px @ turn.T + middle
    return np.clip(picture, 0, 255).astype(np.uint8), corners


@pytest.mark.parametrize("turn_deg", [0.0, 7.0, 31.0, 45.0, 80.0])
def test_corners_of_a_known_square(turn_deg):
    picture, corners = square_picture(turn_deg)
    found = edge_corners(picture, corners + 0.4, 8)
    assert_allclose(found.corners_px, corners, atol=0.06)  # px


def turn_of(points):
    apart = points - points.mean(axis=0)
    along = UNIT_CORNERS
    return np.arctan2(
        np.sum(along[:, 0] * apart[:, 1] - along[:, 1] * apart[:, 0]), np.sum(along * apart)
    )  # rad


def test_a_tone_curve_moves_all_sides_alike_and_turns_nothing():
    picture, corners = square_picture(20.0, bent=0.8)
    found = edge_corners(picture, corners, 8)
    outwards = corners - corners.mean(axis=0)
    grown = np.sum((found.corners_px - corners) * outwards, axis=1) / np.hypot(*outwards.T)
    assert np.ptp(grown) < 0.06
    assert abs(turn_of(found.corners_px) - turn_of(corners)) < 1e-3


def test_the_covariance_is_that_of_the_scatter():
    rng = np.random.default_rng(2)
    errors, stated = [], []
    for _ in range(60):
        picture, corners = square_picture(13.0, noise=4.0, rng=rng)
        found = edge_corners(picture, corners, 8)
        errors.append((found.corners_px - corners).ravel())
        stated.append(np.diag(found.cov_px2))
    scatter = np.var(np.array(errors) - np.mean(errors, axis=0))
    assert 0.5 < scatter / np.mean(stated) < 2.0


def test_no_step_and_no_room_are_told():
    flat = np.full((100, 100), 120, np.uint8)
    _, corners = square_picture(0.0)
    assert edge_corners(flat, corners, 8) is None
    picture, _ = square_picture(0.0)
    assert edge_corners(picture, corners - 40.0, 8) is None
    assert edge_corners(picture, np.full((4, 2), np.nan), 8) is None


@pytest.fixture(scope="module")
def frames():
    motion = spin_motion([190.0, -190.0], start_delay_s=0.7, rest_s=0.7, start=(10.0, 15.0, 35.0))
    scene = replace(plain_scene(), timing=replace(plain_scene().timing, fps=15.0))
    return [Frame(k, time_s, luma, k % 15 == 0) for k, (time_s, luma) in enumerate(render_frames(scene, motion))]


def test_edges_and_patterns_agree_on_heading_changes(frames):
    track = track_pair(frames, SETUP)
    assert len(track.edge_looks) >= 3
    assert not any(look.alone for look in track.edge_looks)
    corners, calibration = calibrate_steadied(track, camera_path(track))
    seen = usable_frames(corners, solve_poses(corners, calibration))
    split = split_turns(seen, calibration.cov, camera_still=True, knocks=())
    found = cross_check(corners, calibration, seen, split.rests)
    assert found.n_changes == len(split.turns) == 2
    assert found.largest_deg < 0.05
    assert found.agree
    off = replace(corners, edge_looks=tuple(
        replace(look, apart_px=look.apart_px + turned_by(look, track, 0.004 * (look.time_s > 2.0)))
        for look in corners.edge_looks))  # fmt: skip
    assert cross_check(off, calibration, seen, split.rests).largest_deg > 0.15


def turned_by(look, track, turn_rad):
    """Return the displacement (px) of the corners by a small turn about their middle."""
    points = track.corners_px[np.argmin(np.abs(track.time_s - look.time_s))]
    apart = points - points.reshape(-1, 2).mean(axis=0)
    return turn_rad * np.stack([-apart[..., 1], apart[..., 0]], axis=-1)


@pytest.mark.parametrize(("mean", "gain", "agree"), [(0.0, 0.0, True), (0.02, 0.0, False), (0.0, 2e-3, False)])
def test_a_disagreement_beyond_chance_is_told(mean, gain, agree):
    found = CrossCheck(
        mean_deg=mean, spread_deg=0.01, largest_deg=0.03, gain_share=gain, u_gain_share=1e-4, n_changes=16, n_looks=40
    )
    assert found.agree == agree


def test_edges_stand_in_where_the_alignment_finds_no_hold(frames, monkeypatch):
    corners_px, _ = find_pair(frames[0].luma, SETUP)
    tracker = PairTracker(SETUP, frames[0].luma, corners_px)
    for frame in islice(frames, 3):
        before = tracker.see(frame)
    monkeypatch.setattr(tracker, "_hold", lambda frame: None)
    monkeypatch.setattr(tracker, "_repeated", lambda image: None)
    monkeypatch.setattr(tracker, "_settle", lambda *args: None)
    sight = tracker.see(frames[3])
    assert sight.by_edges
    assert tracker.edge_looks[-1].alone
    assert_allclose(sight.corners_px, before.corners_px, atol=0.25)  # px
    assert np.all(np.linalg.eigvalsh(sight.information.astype(float)) > 0.0)
