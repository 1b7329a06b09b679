import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.vision.synthetic import corner_track, profile, truth
from vision.bundle import calibrate, covered_rad, design_effect, n_sectors
from vision.plane import LENS, LIFT, N_GLOBAL
from vision.poses import solve_poses

ROUND = np.linspace(0.0, 400.0, 161)


def heading_errors_deg(p, units, headings_deg, **options):
    track = corner_track(headings_deg, p=p, units=units, **options)
    calibration = calibrate(track)
    found = np.degrees(np.unwrap(solve_poses(track, calibration).heading_rad))
    return (found - found[0]) - (headings_deg - headings_deg[0]), calibration


def test_exact_corners_give_exact_headings():
    errors, calibration = heading_errors_deg(*truth(), ROUND, noise_px=1e-5)
    assert np.abs(errors).max() < 1e-4
    assert_allclose(calibration.p[LENS.start], -0.06, atol=2e-4)


@pytest.mark.parametrize("k1", [0.0, -0.08])
def test_noise_is_all_that_is_left(k1):
    errors, calibration = heading_errors_deg(*truth(k1=k1), ROUND, noise_px=0.02)
    # 16 corner coordinates of 0.02 px over arms of about 60 px: 0.006 degrees a frame.
    assert np.std(errors) < 0.012
    assert_allclose(calibration.misfit, 1.0, atol=0.15)


def test_markers_at_different_heights():
    """A lift of 0.03 marker distances is what 5 mm of height do in an ordinary view: 1.7 degrees if ignored."""
    p, units = truth(lift=(0.03, -0.01), size=1.004)
    errors, calibration = heading_errors_deg(p, units, ROUND, noise_px=0.02)
    assert np.abs(errors).max() < 0.03
    assert calibration.p[LIFT.start] > 20 * np.sqrt(calibration.cov[LIFT.start, LIFT.start])


def test_heading_uncertainty_from_the_calibration_is_true():
    """40 calibrations: the plane's part of a half-turn's error is no larger than stated (chi-square, 4 sd)."""
    p, units = truth()
    ratios = []
    for seed in range(40):
        track = corner_track(ROUND, p=p, units=units, seed=seed)
        calibration = calibrate(track)
        clean = corner_track(np.array([0.0, 180.0]), p=p, units=units, noise_px=1e-6)
        poses = solve_poses(clean, calibration)
        error = np.remainder(np.diff(poses.heading_rad)[0], 2.0 * np.pi) - np.pi
        lever = poses.by_global[1] - poses.by_global[0]
        ratios.append(error / np.sqrt(lever @ calibration.cov @ lever))
    assert np.mean(np.square(ratios)) < 1.0 + 4.0 * np.sqrt(2.0 / 40.0)


def test_little_rotation_says_how_little_it_knows():
    _, wide = heading_errors_deg(*truth(), np.linspace(0, 360, 100))
    _, narrow = heading_errors_deg(*truth(), np.linspace(0, 25, 100))
    assert narrow.turned_rad < 0.5 < wide.turned_rad
    assert np.all(np.linalg.eigvalsh(narrow.cov) > 0)
    assert narrow.cov[LIFT.start, LIFT.start] > 4.0 * wide.cov[LIFT.start, LIFT.start]
    assert narrow.p.shape == (N_GLOBAL,)


def test_one_marker_alone_still_gives_a_heading():
    p, units = truth()
    _, headings = profile([90.0, -90.0])
    track = corner_track(headings, p=p, units=units)
    track.corners_px[40:50, 1] = np.nan
    track.information[40:50, 1] = 0.0
    poses = solve_poses(track, calibrate(track))
    assert np.all(np.isfinite(poses.heading_rad))
    assert np.median(poses.u_heading_rad[40:50]) > 2.0 * np.median(poses.u_heading_rad)


def test_arcs():
    assert_allclose(np.degrees(covered_rad(np.deg2rad([10.0, 350.0]))), 20.0)
    assert_allclose(np.degrees(covered_rad(np.deg2rad(np.arange(0.0, 360.0, 10.0)))), 350.0)
    assert n_sectors(np.deg2rad([1.0, 2.0, 11.0, 361.0])) == 2


def test_frames_that_err_alike_count_as_fewer():
    """Kish (1965), Survey Sampling: the design effect of m alike in a cluster is 1 + (m - 1) rho."""
    rng = np.random.default_rng(5)
    headings = np.repeat(np.deg2rad(np.arange(15.0, 360.0, 30.0)), 10)
    own = rng.normal(0.0, 1.0, (120, 16))
    shared = np.repeat(rng.normal(0.0, 1.0, (12, 16)), 10, axis=0)
    assert_allclose(design_effect(own, headings), 1.0, atol=0.35)
    assert_allclose(design_effect(shared, headings), 10.0, rtol=1e-9)
    assert_allclose(design_effect(own + shared, headings), 1.0 + 9.0 * 0.5, rtol=0.3)
    assert design_effect(own[:1], headings[:1]) == 1.0
