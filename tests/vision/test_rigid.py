import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from vision.rigid import fit_homography, inverse, project, projected_slope, rigid, rigid_between

RNG = np.random.default_rng(11)
MAP = np.array([[1.2, 0.1, 30.0], [-0.2, 0.9, 12.0], [4e-4, -3e-4, 1.0]])
POINTS = RNG.uniform(0.0, 500.0, (40, 2))


def test_project_against_opencv():
    """Reference library: cv2.perspectiveTransform."""
    assert_allclose(project(MAP, POINTS), cv2.perspectiveTransform(POINTS[None], MAP)[0], rtol=1e-12)
    assert_allclose(project(7.0 * MAP, POINTS.reshape(8, 5, 2)), project(MAP, POINTS).reshape(8, 5, 2), rtol=1e-12)


def test_exact_points_give_the_map_back():
    found = fit_homography(POINTS, project(MAP, POINTS))
    # OpenCV rounds the points to single precision, 3e-5 px at 500 px; forty points average that.
    assert_allclose(project(found, POINTS), project(MAP, POINTS), rtol=0, atol=3e-5)  # px
    assert_allclose(found / found[2, 2], MAP, rtol=1e-6)


def test_noisy_points_against_opencv():
    """Reference library: cv2.findHomography without outlier rejection, which minimises the same distances."""
    noisy = project(MAP, POINTS) + RNG.normal(0.0, 0.3, POINTS.shape)
    ours, (theirs, _) = fit_homography(POINTS, noisy), cv2.findHomography(POINTS, noisy, 0)
    assert_allclose(project(ours, POINTS), cv2.perspectiveTransform(POINTS[None], theirs)[0], atol=1e-9)

    def cost(map_):
        return np.sum((project(map_, POINTS) - noisy) ** 2)

    for step in np.eye(8) * 1e-6:  # no neighbour is better
        nearby = ours * (1.0 + np.append(step, 0.0).reshape(3, 3))
        assert cost(nearby) >= cost(ours) * (1.0 - 1e-9)


def test_points_beyond_the_horizon_are_not_a_number():
    beyond = np.array([[-3000.0, 0.0], [10.0, 10.0]])
    mapped = project(MAP, beyond)
    assert np.isnan(mapped[0]).all()
    assert np.isfinite(mapped[1]).all()
    level = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [1.0, 0.0, 0.0]])
    assert np.isnan(project(level, np.zeros((1, 2)))).all()


def test_no_map_from_points_on_a_line():
    line = np.column_stack([np.arange(5.0), np.arange(5.0)])
    assert fit_homography(line, POINTS[:5]) is None
    assert fit_homography(line, line * 3.0) is None


def test_slopes_against_differences():
    mapped, slope = projected_slope(MAP, POINTS)
    assert_allclose(mapped, project(MAP, POINTS), rtol=1e-13)
    for axis, step in enumerate(np.eye(2) * 1e-3):
        change = (project(MAP, POINTS + step) - project(MAP, POINTS - step)) / 2e-3
        assert_allclose(slope[:, :, axis], change, rtol=1e-6, atol=1e-9)


def test_inverse_against_numpy():
    """Reference library: numpy.linalg.inv."""
    assert_allclose(inverse(MAP), np.linalg.inv(MAP), rtol=1e-12, atol=1e-15)
    assert np.isnan(inverse(np.ones((3, 3)))).all()


@pytest.mark.parametrize("turn_rad", [-3.0, -0.4, 0.0, 1.7, 3.1])
def test_rigid_motion_there_and_back(turn_rad):
    moved = project(rigid(turn_rad, 12.0, -7.0), POINTS)
    assert_allclose(rigid_between(POINTS, moved), (turn_rad, 12.0, -7.0), atol=1e-10)
    # A noisy copy: the angle that minimises the distances, by brute force around it.
    noisy = moved + RNG.normal(0, 5.0, moved.shape)
    best, _, _ = rigid_between(POINTS, noisy)

    def cost(turn):
        about = POINTS - POINTS.mean(axis=0)
        return np.sum((project(rigid(turn, 0, 0), about) - (noisy - noisy.mean(axis=0))) ** 2)

    assert cost(best) < min(cost(best - 1e-3), cost(best + 1e-3))
