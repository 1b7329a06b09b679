import numpy as np
import pytest
from numpy.testing import assert_allclose

from vision.markers import UNIT_CORNERS
from vision.pair import body_from_corners, build_pattern, mean_side_px, pair_modules
from vision.records import MarkerSetup
from vision.rigid import project, rigid
from vision.template import Optics

SIDE_MM = 40.0
PLANE_PX = np.array([[1.05, 0.06, 700.0], [-0.08, 0.98, 420.0], [6e-5, -1.1e-4, 1.0]])


def corners(fore=(0.3, 90.0, -12.0), aft=(-1.1, -40.0, 25.0)):
    square = UNIT_CORNERS * SIDE_MM
    return np.stack([project(PLANE_PX @ rigid(*pose), square) for pose in (fore, aft)])


@pytest.mark.parametrize("aft_turn_rad", [0.0, -1.1, 1.571, 3.0])
def test_the_pair_is_found_at_any_angle(aft_turn_rad):
    seen = corners(aft=(aft_turn_rad, -40.0, 25.0))
    body = body_from_corners(seen, SIDE_MM)
    assert_allclose(body.base_mm, np.hypot(130.0, 37.0), rtol=1e-6)
    assert_allclose(project(body.plane_px, body.points_mm), seen, atol=1e-5)  # px
    # The body's x runs from the aft to the fore marker, its origin is midway.
    assert_allclose(body.points_mm.mean(axis=1), [[body.base_mm / 2, 0.0], [-body.base_mm / 2, 0.0]], atol=1e-5)
    sides = np.hypot(*np.moveaxis(np.roll(body.points_mm, -1, axis=1) - body.points_mm, -1, 0))
    assert_allclose(sides, SIDE_MM, rtol=1e-6)


def test_noise_of_the_corners_does_not_break_it():
    rng = np.random.default_rng(6)
    for _ in range(20):
        body = body_from_corners(corners() + rng.normal(0, 0.3, (2, 4, 2)), SIDE_MM)
        assert_allclose(body.base_mm, np.hypot(130.0, 37.0), rtol=0.05)


def test_what_is_no_pair_of_squares_is_refused():
    bent = corners()
    bent[1, 2] += (18.0, -9.0)
    assert body_from_corners(bent, SIDE_MM) is None
    larger = corners()
    larger[1] = larger[1].mean(axis=0) + 1.6 * (larger[1] - larger[1].mean(axis=0))
    assert body_from_corners(larger, SIDE_MM) is None
    flat = corners()
    flat[0, :, 1] = 300.0
    assert body_from_corners(flat, SIDE_MM) is None
    assert body_from_corners(np.stack([corners()[0]] * 2), SIDE_MM) is None  # both in one place


def test_patterns_of_a_pair():
    setup = MarkerSetup(dictionary="4X4_50", fore_id=3, aft_id=9, marker_side_mm=SIDE_MM)
    fore, aft = pair_modules(setup)
    assert fore.shape == aft.shape == (6, 6)
    assert not np.array_equal(fore, aft)
    pattern = build_pattern(fore, 45.0, Optics(0.85, tone=0.3, halo=0.4))
    sharp, soft = pattern.sharp.channels[..., 0], pattern.soft.channels[..., 0]
    assert np.abs(np.diff(soft)).max() < 0.7 * np.abs(np.diff(sharp)).max()


def test_mean_side():
    assert_allclose(mean_side_px(UNIT_CORNERS * 37.5 + 100.0), 37.5)
