"""The renderer's geometry against OpenCV and against exact edges."""

import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import Camera, Floor, Light, Mount, Robot, Scene, Sensor, project, spin_motion
from demo_videos.render.camera import distort, resting_pose, undistort
from demo_videos.render.frames import Renderer

CAMERA = Camera(width_px=640, height_px=400, focal_px=1100, distance_mm=1400, tilt_deg=22, k1=-0.12, k2=0.02)
EVEN = Light(gradient=0.0, vignette=0.0)
BARE = Robot(
    marker_side_mm=110.0,
    quiet_modules=1.5,
    fore=Mount(marker_id=0, x_mm=70.0, ink=0.0, paper=1.0),
    aft=Mount(marker_id=1, x_mm=-90.0, ink=0.0, paper=1.0),
)


@pytest.mark.parametrize(("tilt", "azimuth", "roll"), [(0, 0, 0), (15, -90, 0), (25, 40, 130), (8, 170, -75)])
def test_projection_agrees_with_opencv(tilt, azimuth, roll):
    """Reference library: cv2.projectPoints, with the pose written as rotation vector and translation."""
    camera = Camera(tilt_deg=tilt, tilt_azimuth_deg=azimuth, roll_deg=roll, k1=-0.13, k2=0.03, look_at_mm=(30, -20))
    points_mm = np.random.default_rng(5).uniform([-500, -300, 0], [500, 300, 150], (200, 3))
    rotation, centre_mm = resting_pose(camera)
    matrix = np.array([[camera.focal_px, 0, 959.5], [0, camera.focal_px, 539.5], [0, 0, 1]])
    expected, _ = cv2.projectPoints(
        points_mm, cv2.Rodrigues(rotation)[0], -rotation @ centre_mm, matrix, np.array([-0.13, 0.03, 0, 0])
    )
    assert_allclose(project(camera, points_mm), expected[:, 0], rtol=0, atol=1e-8)  # px, rounding


def test_the_look_at_point_is_in_the_middle_and_tilt_leans_towards_the_azimuth():
    camera = Camera(tilt_deg=20, tilt_azimuth_deg=-90)
    assert_allclose(project(camera, [[0, 0, 0]]), [[959.5, 539.5]], atol=1e-9)
    _, centre_mm = resting_pose(camera)
    assert_allclose(centre_mm, [0, -1600 * np.sin(np.deg2rad(20)), 1600 * np.cos(np.deg2rad(20))], atol=1e-9)


def test_seen_from_above_without_mirroring():
    """Floor x is to the right, floor y upwards (smaller image y), and nearer things look larger."""
    camera = Camera(tilt_deg=0)
    right, up, raised = project(camera, [[100, 0, 0], [0, 100, 0], [100, 0, 100]])
    assert right[0] > 959.5
    assert right[1] == pytest.approx(539.5)
    assert up[1] < 539.5
    assert raised[0] > right[0]


@pytest.mark.parametrize(("k1", "k2"), [(-0.15, 0.0), (-0.1, 0.05), (0.08, -0.01)])
def test_undistort_inverts_distort(k1, k2):
    camera = Camera(k1=k1, k2=k2)
    x, y = np.random.default_rng(1).uniform(-0.7, 0.7, (2, 500))
    back = undistort(camera, *distort(camera, x, y))
    assert_allclose(back, [x, y], atol=1e-9)  # 1e-9 x 1500 px


def outer_edges(motion_xy_mm, heading_deg):
    """Yield the projected outer edges of both black squares, as points in px along each."""
    turn = np.deg2rad(heading_deg)
    axes = np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]])
    for mount in (BARE.fore, BARE.aft):
        for start, end in (((-1, -1), (-1, 1)), ((1, -1), (1, 1)), ((-1, -1), (1, -1)), ((-1, 1), (1, 1))):
            along = np.linspace(start, end, 41) * BARE.marker_side_mm / 2 + [mount.x_mm, mount.y_mm]
            on_deck = np.column_stack([along @ axes.T + motion_xy_mm, np.full(41, BARE.deck_height_mm)])
            yield project(CAMERA, on_deck)


def crossing_errors(picture, edge_px):
    """Return found less true crossing, in px, for each row (or column) that the edge crosses steeply.

    The crossing is found by adding up the light across the edge, ink 0 and paper 1: exact for a straight edge under
    any symmetric blur, and free of any model of the blur.
    """
    if np.ptp(edge_px[:, 0]) > np.ptp(edge_px[:, 1]):  # nearly level: look at the transposed picture
        edge_px, picture = edge_px[:, ::-1], picture.T
    if np.ptp(edge_px[:, 0]) > 0.4 * np.ptp(edge_px[:, 1]):
        return []  # too slanted to stay within the border and the quiet zone
    edge_px = edge_px[np.argsort(edge_px[:, 1])]
    rows = np.arange(int(np.ceil(edge_px[0, 1] + 9)), int(edge_px[-1, 1] - 9))
    errors = []
    for row, true in zip(rows, np.interp(rows, edge_px[:, 1], edge_px[:, 0]), strict=True):
        low, high = round(true) - 6, round(true) + 7
        values = picture[row, low:high].astype(float)
        paper = values.sum()
        errors.append((high - 0.5 - paper if values[-1] > values[0] else low - 0.5 + paper) - true)
    return errors


@pytest.mark.parametrize("heading_deg", [0.0, -11.0, 20.3, 90.0, 187.0])
def test_marker_edges_lie_where_projection_puts_them(heading_deg):
    """Edges along the pixel grid are the hardest case for sampling: 0 and 90 degrees."""
    xy_mm = (13.3, -7.7)
    sensor = Sensor(psf_px=0.6, exposure_s=0.0, noise_grey=0.0)
    scene = Scene(camera=CAMERA, robot=BARE, light=EVEN, sensor=sensor, floor=Floor(kind="plain"))
    light = Renderer(scene).exposed(0.0, spin_motion([], start=(*xy_mm, heading_deg)))
    errors = np.concatenate([crossing_errors(light, edge) for edge in outer_edges(xy_mm, heading_deg)])
    assert len(errors) > 200
    assert abs(errors.mean()) < 0.0003  # px; measured up to 0.0001
    assert np.abs(errors).max() < 0.005  # px; measured up to 0.0023
