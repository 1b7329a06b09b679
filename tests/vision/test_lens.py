"""The radial lens term under published intrinsics, against OpenCV.

Source: OpenCV's left01.jpg to left14.jpg and left_intrinsics.yml (640 x 480): f 535.91573, centre (342.28315,
235.57083), k1 -0.266373, k2 -0.038589. Its tangential terms and k3 have no counterpart in our lens and are left out.
"""

import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.reference import columns, numbers
from vision.plane import distort, undistort
from vision.rigid import fit_homography, project

FOCAL_PX, CENTRE_PX, K1, K2 = 535.91573, np.array([342.28315, 235.57083]), -0.266373, -0.038589
HALF_PX = 0.5 * np.hypot(640.0, 480.0)
RATIO = (HALF_PX / FOCAL_PX) ** 2
LENS = np.array([K1 * RATIO, K2 * RATIO**2])
"""Our terms count in half diagonals, OpenCV's in focal lengths."""

MATRIX = np.array([[FOCAL_PX, 0.0, CENTRE_PX[0]], [0.0, FOCAL_PX, CENTRE_PX[1]], [0.0, 0.0, 1.0]])
CV_LENS = np.array([K1, K2, 0.0, 0.0, 0.0])


def picture_points():
    x, y = np.meshgrid(np.linspace(0.0, 639.0, 17), np.linspace(0.0, 479.0, 13))
    return np.column_stack([x.ravel(), y.ravel()])


def test_distortion_against_opencv():
    """Reference library: cv2.projectPoints over the whole picture."""
    straight = (picture_points() - CENTRE_PX) / FOCAL_PX
    rays = np.column_stack([straight, np.ones(len(straight))])
    theirs, _ = cv2.projectPoints(rays, np.zeros(3), np.zeros(3), MATRIX, CV_LENS)
    ours = distort(straight * (FOCAL_PX / HALF_PX), LENS) * HALF_PX + CENTRE_PX
    assert_allclose(ours, theirs.reshape(-1, 2), rtol=0, atol=1e-9)  # px


def test_straightening_against_opencv():
    """Reference library: cv2.projectPoints takes what we straightened back to where it was seen."""
    points = picture_points()
    points = points[np.hypot(*(points - CENTRE_PX).T) < 0.92 * HALF_PX]
    straight = undistort((points - CENTRE_PX) / HALF_PX, LENS) * (HALF_PX / FOCAL_PX)
    rays = np.column_stack([straight, np.ones(len(straight))])
    back, _ = cv2.projectPoints(rays, np.zeros(3), np.zeros(3), MATRIX, CV_LENS)
    assert_allclose(back.reshape(-1, 2), points, rtol=0, atol=1e-8)  # px


def test_beyond_the_fold_nothing_is_made_up():
    """Two terms of this lens reach no farther than 0.93 half diagonals; its third term is not ours."""
    radius = np.linspace(0.0, 2.0, 2001)
    farthest = distort(np.column_stack([radius, 0.0 * radius]), LENS)[:, 0].max()
    assert 0.92 < farthest < 0.94
    points = np.array([[farthest - 1e-3, 0.0], [farthest + 1e-3, 0.0], [0.0, 1.3], [0.0, 0.0]])
    straight = undistort(points, LENS)
    assert_allclose(distort(straight[[0, 3]], LENS), points[[0, 3]], atol=1e-12)
    assert np.isnan(straight[[1, 2]]).all()


@pytest.mark.parametrize("view", sorted(set(columns("opencv-left-corners.csv")["view"])))
def test_published_lens_makes_the_board_flat(view):
    """With the published lens a plane map explains the corners of each photograph far better than without it."""
    data = numbers("opencv-left-corners.csv")
    own = np.array(columns("opencv-left-corners.csv")["view"]) == view
    grid = np.column_stack([data["col"], data["row"]])[own]
    seen = np.column_stack([data["u_px"], data["v_px"]])[own]
    straight = undistort((seen - CENTRE_PX) / HALF_PX, LENS) * HALF_PX + CENTRE_PX

    def left_px(points):
        return float(np.sqrt(2.0 * np.mean((project(fit_homography(grid, points), grid) - points) ** 2)))

    assert left_px(straight) < 0.6 or view.startswith("left02")  # the published per-view misfit of that one is 1.18
    assert left_px(straight) < left_px(seen)
