"""Calibration and headings against a camera that is OpenCV's, with markers at true heights above the floor.

Reference library: cv2.projectPoints makes every corner; nothing of `vision.plane` is used to make them.
"""

from dataclasses import replace

import cv2
import numpy as np
import pytest

from tests.vision.synthetic import IMAGE_PX, SIDE_MM, corner_track, truth
from vision import bundle
from vision.bundle import calibrate
from vision.markers import UNIT_CORNERS
from vision.pair import body_from_corners
from vision.plane import LENS, units_for
from vision.poses import solve_poses

FOCAL_PX = 1500.0
HALF_PX = units_for(IMAGE_PX, side_mm=SIDE_MM, length_mm=130.0).half_px
CENTRE_PX = 0.5 * (np.array(IMAGE_PX) - 1.0)
MATRIX = np.array([[FOCAL_PX, 0.0, CENTRE_PX[0]], [0.0, FOCAL_PX, CENTRE_PX[1]], [0.0, 0.0, 1.0]])
ROUND = np.linspace(0.0, 400.0, 161)
NOISE_PX = 0.02


def camera(tilt_deg, distance_mm=1600.0, turn_deg=20.0):
    """Return rotation and shift of a camera that looks down on the floor (z up) from above, tilted."""
    down = np.diag([1.0, -1.0, -1.0])  # camera y points down in the picture, z away from the camera
    tilt, _ = cv2.Rodrigues(np.array([np.deg2rad(tilt_deg), 0.0, 0.0]))
    turn, _ = cv2.Rodrigues(np.array([0.0, 0.0, np.deg2rad(turn_deg)]))
    return tilt @ down @ turn, np.array([0.0, 0.0, distance_mm])


def chain(*, tilt_deg=18.0, k1=-0.1, heights_mm=(80.0, 80.0), place_mm=(150.0, -60.0), noise_px=NOISE_PX, seed=0):
    """Return the corner track of a pair that spins at a place on a deck, and nothing else known about it."""
    rotation, shift = camera(tilt_deg)
    printed = UNIT_CORNERS * [1.0, -1.0] * SIDE_MM  # y down as printed, to the left on the robot
    pair = [printed + np.array([75.0, 2.0]), printed @ np.array([[0.0, 1.0], [-1.0, 0.0]]) + np.array([-55.0, -3.0])]
    seen = np.empty((len(ROUND), 2, 4, 2))
    for n, heading_rad in enumerate(np.deg2rad(ROUND)):
        c, s = np.cos(heading_rad), np.sin(heading_rad)
        for m, (points, height_mm) in enumerate(zip(pair, heights_mm, strict=True)):
            floor = points @ np.array([[c, s], [-s, c]]) + place_mm
            world = np.column_stack([floor, np.full(4, height_mm)])
            lens = np.array([k1, 0.0, 0.0, 0.0, 0.0])
            found, _ = cv2.projectPoints(world, cv2.Rodrigues(rotation)[0], shift, MATRIX, lens)
            seen[n, m] = found.reshape(4, 2)
    p, units = truth()
    track = corner_track(ROUND, p=p, units=units, noise_px=NOISE_PX)
    body = body_from_corners(seen[0], SIDE_MM)
    noisy = seen + np.random.default_rng(seed).normal(0.0, noise_px, seen.shape)
    return replace(track, corners_px=noisy, body=body)


def heading_errors_deg(track):
    calibration = calibrate(track)
    found = np.degrees(np.unwrap(solve_poses(track, calibration).heading_rad))
    errors = found - ROUND
    return errors - errors.mean(), calibration


@pytest.mark.parametrize("tilt_deg", [6.0, 18.0, 25.0])
@pytest.mark.parametrize("k1", [0.0, -0.15])
def test_headings_through_opencvs_camera(tilt_deg, k1):
    errors, calibration = heading_errors_deg(chain(tilt_deg=tilt_deg, k1=k1))
    # Noise of a frame is about 0.007 deg; what is left of the plane must be small beside it.
    assert np.std(errors) < 0.009
    harmonics = np.fft.rfft(errors[:145]) / 72.5  # a whole circle is 144 steps of 2.5 deg
    assert np.abs(harmonics[1:4]).max() < 0.004
    u_k1 = np.sqrt(calibration.cov[LENS.start, LENS.start])
    assert abs(calibration.p[LENS.start] - k1 * (HALF_PX / FOCAL_PX) ** 2) < 4.0 * u_k1


def test_deck_height_alone_does_not_matter():
    """Two parallel planes share directions: exact without a lens, and the lens is fitted on the deck itself."""
    for height_mm in (0.0, 150.0):
        errors, _ = heading_errors_deg(chain(heights_mm=(height_mm, height_mm), k1=0.0, noise_px=1e-5))
        assert np.abs(errors).max() < 2e-4


@pytest.mark.parametrize(("low_mm", "high_mm"), [(80.0, 100.0), (60.0, 65.0)])
def test_markers_at_different_heights_are_corrected(low_mm, high_mm, monkeypatch):
    track = chain(heights_mm=(high_mm, low_mm))
    errors, _ = heading_errors_deg(track)
    assert np.std(errors) < 0.01
    for name in ("lift_x", "lift_y", "aft_size"):
        monkeypatch.setitem(bundle.PRIOR_SD, name, 1e-7)
    ignored, _ = heading_errors_deg(track)
    # What it was before correction, standard deviation over headings: 0.46 deg for 5 mm, 1.9 deg for 20 mm.
    assert np.std(ignored) > 0.08 * (high_mm - low_mm)


def test_covariance_is_true_for_the_plane_part():
    """30 clips: the plane's part of a quarter turn's error against what is stated for it, both ways (4 sd).

    The stated part counts frames of one heading sector once, since coded frames repeat each other; white noise does
    not, so it comes out smaller than stated by the root of how many frames share a sector.
    """
    clean, ratios = chain(noise_px=0.0), []
    repeats = len(ROUND) / 60.0
    for seed in range(30):
        calibration = calibrate(chain(seed=seed))
        poses = solve_poses(clean, calibration)
        found = np.degrees(np.unwrap(poses.heading_rad))
        for a, b in ((0, 36), (30, 90)):
            error = (found[b] - found[a]) - (ROUND[b] - ROUND[a])
            lever = np.degrees(poses.by_global[b] - poses.by_global[a])
            ratios.append(error / np.sqrt(lever @ calibration.cov @ lever))
    square = np.mean(np.square(ratios)) * repeats
    assert square < 1.0 + 4.0 * np.sqrt(2.0 / 30.0)
    assert square > 0.2  # and not absurdly wide: weak priors add to it, noise alone does not fill it
