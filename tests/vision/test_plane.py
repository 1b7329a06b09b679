import cv2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from tests.reference import columns, numbers
from vision.markers import UNIT_CORNERS
from vision.plane import (
    AFT_SIZE,
    N_GLOBAL,
    SHAPE,
    distort,
    plane_map,
    project_pair,
    shape_from_homography,
    to_floor,
    to_plane,
    undistort,
    units_for,
)
from vision.rigid import fit_homography, project, rigid, rigid_between

IMAGE_PX = (1920, 1080)
FOCAL_PX, K1, K2 = 1500.0, -0.12, 0.03


def camera(tilt_deg=18.0, turn_deg=25.0, distance_mm=1500.0):
    """Return a pinhole camera (K, R, t) that looks at a plane whose y points down in the picture."""
    centre = 0.5 * (np.array(IMAGE_PX) - 1.0)
    matrix = np.array([[FOCAL_PX, 0, centre[0]], [0, FOCAL_PX, centre[1]], [0, 0, 1]])
    tilt, _ = cv2.Rodrigues(np.array([np.deg2rad(tilt_deg), 0.1, 0.0]))
    turn, _ = cv2.Rodrigues(np.array([0, 0, np.deg2rad(turn_deg)]))
    return matrix, tilt @ turn, np.array([30.0, -20.0, distance_mm])


def cv_project(points, lens=(K1, K2)):
    matrix, rotation, shift = camera()
    flat = np.column_stack([points, np.zeros(len(points))])
    found, _ = cv2.projectPoints(flat, cv2.Rodrigues(rotation)[0], shift, matrix, np.array([*lens, 0, 0, 0]))
    return found.reshape(-1, 2)


def ours_for_camera(units):
    """Return our shape and lens for that camera: our lens term counts in half diagonals, OpenCV's in focal lengths."""
    matrix, rotation, shift = camera()
    world = matrix @ np.column_stack([rotation[:, :2], shift])
    to_units = np.diag([1 / units.half_px, 1 / units.half_px, 1.0])
    to_units[:2, 2] = -units.centre_px / units.half_px
    shape, place = shape_from_homography(to_units @ world @ np.diag([units.length_mm, units.length_mm, 1.0]))
    ratio = (units.half_px / FOCAL_PX) ** 2
    p = np.zeros(N_GLOBAL)
    p[SHAPE], p[5], p[6] = shape, K1 * ratio, K2 * ratio**2
    p[7], p[8], p[9], p[AFT_SIZE] = 1.0, 0.3, -0.2, 1.0
    return p, place


UNITS = units_for(IMAGE_PX, side_mm=40.0, length_mm=130.0)


def test_projection_against_opencv():
    """Reference library: cv2.projectPoints with the same plane and lens."""
    p, place = ours_for_camera(UNITS)
    pose = np.array([[0.4, 0.2, -0.3]])
    ours = project_pair(p, pose, UNITS).corners_px.reshape(8, 2)
    square = UNIT_CORNERS * 40.0 / 130.0
    body = np.concatenate([project(rigid(0.3, 0.5, 0.0), square), project(rigid(-0.2, -0.5, 0.0), square)])
    world = project(place @ rigid(*pose[0]), body) * UNITS.length_mm
    assert_allclose(ours, cv_project(world), rtol=0, atol=1e-8)  # px
    back = to_plane(ours, p, UNITS)
    assert_allclose(back, project(rigid(*pose[0]), body), rtol=0, atol=1e-7)


def test_derivatives_against_differences():
    rng = np.random.default_rng(5)
    p, _ = ours_for_camera(UNITS)
    p[10:13] = 1.02, 0.05, -0.03
    p[13:] = rng.normal(0, 0.01, 8)
    poses = rng.normal(0, 1, (4, 3)) * [2, 0.5, 0.5]
    found = project_pair(p, poses, UNITS)

    def change(dp, dposes):
        plus, minus = project_pair(p + dp, poses + dposes, UNITS), project_pair(p - dp, poses - dposes, UNITS)
        return (plus.corners_px - minus.corners_px) / 2e-6

    for k, step in enumerate(np.eye(N_GLOBAL) * 1e-6):
        assert_allclose(found.by_global[..., k], change(step, 0.0), rtol=1e-5, atol=1e-3)
    for k, step in enumerate(np.eye(3) * 1e-6):
        assert_allclose(found.by_pose[..., k], change(0.0, step), rtol=1e-5, atol=1e-3)


def test_five_numbers_hold_any_plane_map():
    homography = np.array([[0.9, 0.1, 0.3], [-0.2, 1.1, 0.05], [0.1, -0.07, 1.0]])
    shape, place = shape_from_homography(homography)
    again = plane_map(shape) @ np.linalg.inv(place)
    assert_allclose(again / again[2, 2], homography, atol=1e-12)
    assert_allclose(place[:2, :2] @ place[:2, :2].T, np.eye(2), atol=1e-12)


@given(k1=st.floats(-0.15, 0.1), k2=st.floats(-0.02, 0.02), x=st.floats(-0.85, 0.85), y=st.floats(-0.5, 0.5))
def test_lens_there_and_back(k1, k2, x, y):
    point, lens = np.array([[x, y]]), np.array([k1, k2])
    assert_allclose(undistort(distort(point, lens), lens), point, atol=1e-6)


def test_heading_is_counter_clockwise_seen_from_above():
    """In the picture y points down: a pose that turns clockwise there (positive) is a negative heading."""
    heading_rad, x_mm, y_mm = to_floor(np.array([[0.3, 1.0, 2.0]]), UNITS)
    assert_allclose([heading_rad[0], x_mm[0], y_mm[0]], [-0.3, 130.0, -260.0])


@pytest.fixture(scope="module")
def board():
    data = numbers("opencv-left-corners.csv")
    views = columns("opencv-left-corners.csv")["view"]
    names = sorted(set(views))
    found = np.column_stack([data["u_px"], data["v_px"]])
    seen = [found[np.array(views) == name] for name in names]
    grid = np.array([[c, r] for w, c, r in zip(views, data["col"], data["row"], strict=True) if w == names[0]])
    return grid * 25.0, seen


def test_published_board_calibration(board):
    """Source: OpenCV's left01 to left14 and left_intrinsics.yml: f 535.916, centre (342.283, 235.571), k1 -0.266."""
    grid, seen = board
    flat = np.column_stack([grid, np.zeros(len(grid))]).astype(np.float32)
    rms, matrix, lens, _, _ = cv2.calibrateCamera(
        [flat] * len(seen), [s.astype(np.float32) for s in seen], (640, 480), None, None
    )
    assert_allclose(rms, 0.39259, atol=0.03)
    assert_allclose([matrix[0, 0], matrix[1, 1]], 535.916, atol=0.5)
    assert_allclose(matrix[:2, 2], [342.283, 235.571], atol=0.5)
    assert_allclose(lens.ravel()[0], -0.266373, atol=0.005)


def test_plane_maps_of_the_board_against_opencv(board):
    """Reference library: cv2.findHomography on the published corners."""
    grid, seen = board
    for view in seen:
        ours, (theirs, _) = fit_homography(grid, view), cv2.findHomography(grid, view, 0)
        assert_allclose(ours, theirs, rtol=1e-9, atol=1e-12)
        assert np.sqrt(np.mean((project(ours, grid) - view) ** 2)) < 3.0  # px; the lens is not corrected here


def test_headings_of_markers_in_a_photograph():
    """Source: OpenCV's marker page and photograph of it. Each marker's heading from its corners, homography without it.

    Errors under one degree (the markers are 40 px wide); pair directions under half a degree RMS.
    """
    data = numbers("marker-photo-corners.csv")
    ids = np.array(data["id"])
    page = np.column_stack([data["page_x_px"], data["page_y_px"]])
    photo = np.column_stack([data["photo_u_px"], data["photo_v_px"]])
    for number in np.unique(ids):
        own = ids == number
        back = fit_homography(photo[~own], page[~own])
        turn_rad, _, _ = rigid_between(page[own], project(back, photo[own]))
        assert abs(np.degrees(turn_rad)) < 1.0
    misses = []
    for a in np.unique(ids):
        for b in np.unique(ids):
            if a < b:
                rest = ~np.isin(ids, [a, b])
                back = fit_homography(photo[rest], page[rest])
                ends = [page[ids == n].mean(axis=0) for n in (a, b)]
                seen = [project(back, photo[ids == n]).mean(axis=0) for n in (a, b)]
                d, e = ends[1] - ends[0], seen[1] - seen[0]
                misses.append(np.degrees(np.arctan2(d[0] * e[1] - d[1] * e[0], d @ e)))
    assert np.sqrt(np.mean(np.square(misses))) < 0.5
