from dataclasses import replace

import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.vision.synthetic import BASE_MM, corner_track, truth
from vision.bundle import calibrate
from vision.card_check import check_cards
from vision.markers import UNIT_CORNERS
from vision.observations import CardLook
from vision.plane import LENS, SHAPE, distort, plane_map, project_pair, undistort
from vision.poses import solve_poses
from vision.rigid import project, rigid
from vision.steady import calibrate_steadied, camera_path, steady

ROUND = np.linspace(0.0, 380.0, 120)
CARDS = {10: (0.2, -3.0, -2.0), 11: (-0.7, 3.5, -1.6), 12: (1.3, -2.8, 1.7), 13: (2.2, 3.2, 1.5)}
CARD_SIDE = 60.0 / BASE_MM
NOISE_PX = 0.02


def card_corners_px(p, units, pose):
    """Return a card's corners through plane and lens: it lies in the deck's plane here, as a square."""
    flat = project(rigid(*pose), UNIT_CORNERS * CARD_SIDE)
    straight = project(plane_map(p[SHAPE]), flat)
    return distort(straight, p[LENS]) * units.half_px + units.centre_px


def shaken(points_px, warp, p, units):
    """Return picture points as a turned camera sees them: a homography of the straight picture, then the lens."""
    straight = undistort((points_px - units.centre_px) / units.half_px, p[LENS])
    return distort(project(warp, straight), p[LENS]) * units.half_px + units.centre_px


def warps(n, size, seed=4):
    """Return one small rotation of the camera per frame, as homographies in half diagonals (f = 1.36 of them)."""
    rng = np.random.default_rng(seed)
    drift = np.cumsum(rng.normal(0, 1, (n, 3)), axis=0)
    drift *= size / max(np.abs(drift).max(), 1e-12) if size else 0.0
    lens = np.diag([1.36, 1.36, 1.0])
    return [lens @ cv2.Rodrigues(d)[0] @ np.linalg.inv(lens) for d in drift]


def scene(size_rad=0.0, *, seed=0, stray=None):
    """Return a track with looks at four cards in every frame, and its parameters and units."""
    p, units = truth(k1=-0.05)
    track = corner_track(ROUND, p=p, units=units, noise_px=NOISE_PX, seed=seed)
    rng = np.random.default_rng(seed + 100)
    moves = warps(len(ROUND), size_rad)
    corners = np.stack([shaken(c, w, p, units) for c, w in zip(track.corners_px, moves, strict=True)])
    looks = []
    for k, (time_s, warp) in enumerate(zip(track.time_s, moves, strict=True)):
        for number, pose in CARDS.items():
            away = np.array([0.0, 0.25, 0.0]) * (number == stray and k > 60)
            exact = shaken(card_corners_px(p, units, np.add(pose, away)), warp, p, units)
            looks.append(CardLook(number, float(time_s), exact + rng.normal(0, NOISE_PX, (4, 2)), NOISE_PX))
    return replace(track, corners_px=corners, looks=tuple(looks)), p, units


def heading_errors_deg(track, calibration):
    found = np.degrees(np.unwrap(solve_poses(track, calibration).heading_rad))
    errors = found - ROUND
    return errors - errors.mean()


def test_a_camera_on_a_stand_is_told_from_noise():
    track, _, _ = scene()
    path = camera_path(track)
    assert path.still
    assert path.shift_px < 0.12
    assert path.n_cards == 4
    assert path.spans == ()
    assert path.strays == ()


def test_without_cards_the_camera_counts_as_still():
    track, _, _ = scene()
    path = camera_path(replace(track, looks=()))
    assert path.still
    assert path.n_cards == 0
    assert steady(replace(track, looks=()), path, np.zeros(2)).corners_px is not None


@pytest.mark.parametrize("size_rad", [0.002, 0.01])
def test_a_moving_camera_is_held_steady_by_its_cards(size_rad):
    track, p, _ = scene(size_rad)
    path = camera_path(track)
    assert not path.still
    assert path.shift_px > 1.0
    held, calibration = calibrate_steadied(track, path)
    errors = heading_errors_deg(held, calibration)
    loose = heading_errors_deg(track, calibrate(track))
    assert np.std(errors) < 0.03  # deg
    assert np.std(errors) < 0.2 * np.std(loose)
    assert_allclose(calibration.p[LENS.start], p[LENS.start], atol=0.03)


def test_the_steadied_corners_are_those_of_the_reference_view():
    track, p, units = scene(0.005)
    path = camera_path(track)
    poses = np.column_stack([-np.deg2rad(ROUND), np.full(len(ROUND), 1.2), np.full(len(ROUND), 0.6)])
    still = project_pair(p, poses, units).corners_px.reshape(-1, 2, 4, 2)
    first = warps(len(ROUND), 0.005)[0]  # all cards in view in every look: the reference is the first
    there = shaken(still, first, p, units)
    held = steady(track, path, p[LENS])
    apart = held.corners_px - there
    assert np.sqrt(np.mean(apart**2)) < 3.0 * NOISE_PX  # own noise and that of the map through sixteen card corners


def test_a_card_that_was_pushed_is_left_out_and_named():
    track, _, _ = scene(0.005, stray=12)
    path = camera_path(track)
    assert path.strays == (12,)
    assert path.n_cards == 3
    held, calibration = calibrate_steadied(track, path)
    assert np.std(heading_errors_deg(held, calibration)) < 0.05


def test_frames_without_a_known_view_are_blanked():
    track, _, _ = scene(0.01)
    kept = tuple(look for look in track.looks if not 1.0 < look.time_s < 2.0)
    path = camera_path(replace(track, looks=kept))
    held = steady(replace(track, looks=kept), path, np.zeros(2))
    inside = (track.time_s > 1.1) & (track.time_s < 1.9)
    assert np.isnan(held.corners_px[inside]).all()
    assert np.isfinite(held.corners_px[~((track.time_s > 0.9) & (track.time_s < 2.1))]).all()
    assert np.all(held.information[inside] == 0.0)


def test_cards_held_against_the_plane_of_the_rotation():
    track, _, _ = scene()
    calibration = calibrate(track)
    checks = check_cards(list(track.looks), calibration)
    assert [check.card_id for check in checks] == [10, 11, 12, 13]
    for check in checks:
        assert_allclose(check.side_mm, 60.0, rtol=2e-3)
        assert check.out_of_square_mm < 0.15
        assert check.spread_px < 3.5 * NOISE_PX
    # Differences of place and direction do not depend on where the plane's own origin is.
    one, two = checks[0], checks[3]
    true_mm = np.hypot(CARDS[13][1] - CARDS[10][1], CARDS[13][2] - CARDS[10][2]) * BASE_MM
    assert_allclose(np.hypot(*(two.centre_mm - one.centre_mm)), true_mm, rtol=2e-3)
    turned = np.degrees(two.turn_rad - one.turn_rad - (CARDS[13][0] - CARDS[10][0]))
    assert abs((turned + 180.0) % 360.0 - 180.0) < 0.2


def test_a_curled_card_is_no_square():
    track, _, _ = scene()
    curled = [
        replace_corners(look, look.corners_px + np.array([[0, 0], [0, 0], [5.0, 2.0], [0, 0]])) for look in track.looks
    ]
    checks = check_cards(curled, calibrate(track))
    # One corner of four, 5 px of 60 up: after the best square 3 % of the side are left; a flat card leaves 0.06 %.
    assert all(check.out_of_square_mm > 0.02 * check.side_mm for check in checks)


def replace_corners(look, corners_px):
    return CardLook(look.card_id, look.time_s, corners_px, look.u_px)
