"""The renderer's geometry against OpenCV and against exact edges."""

import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import Camera, Light, Mount, Robot, Scene, Sensor, project, spin_motion
from demo_videos.render.camera import distort, resting_pose, undistort
from demo_videos.render.frames import Renderer

CAMERA = Camera(width_px=640, height_px=400, focal_px=1100, distance_mm=1400, tilt_deg=22, k1=-0.12, k2=0.02)
SHARP = Sensor(psf_px=0.7, exposure_s=0.0, noise_grey=0.0)
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


def edge_positions(light, camera, row_range, col_range, sign):
    """Return where a near-vertical edge crosses each row: exact for any symmetric blur of a straight edge."""
    block = light[slice(*row_range), slice(*col_range)].astype(float)
    white = block.sum(axis=1)  # ink is 0 and paper is 1
    return col_range[1] - 0.5 - white if sign > 0 else col_range[0] - 0.5 + white


@pytest.mark.parametrize("heading_deg", [0.0, 3.7, -11.0, 20.3, 90.0, 187.0])
@pytest.mark.parametrize("psf_px", [0.5, 0.8])
def test_marker_edges_lie_where_projection_puts_them(heading_deg, psf_px):
    """The outer edges of the black square, located by integrating across them, against projected straight lines."""
    scene = Scene(camera=CAMERA, robot=BARE, light=EVEN, sensor=Sensor(psf_px=psf_px, exposure_s=0, noise_grey=0))
    motion = spin_motion([], start=(13.3, -7.7, heading_deg))
    light = Renderer(scene).exposed(0.0, motion)
    worst = []
    turn = np.deg2rad(heading_deg)
    axes = np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]])
    for mount in (BARE.fore, BARE.aft):
        for corner_a, corner_b in (((-1, -1), (-1, 1)), ((1, -1), (1, 1)), ((-1, -1), (1, -1)), ((-1, 1), (1, 1))):
            ends = np.linspace(corner_a, corner_b, 41) * BARE.marker_side_mm / 2 + [mount.x_mm, mount.y_mm]
            floor = np.column_stack([ends @ axes.T + [13.3, -7.7], np.full(41, BARE.deck_height_mm)])
            px = project(CAMERA, floor)
            span = np.abs(px[-1] - px[0])
            picture = light
            if span[0] > span[1]:  # a near-horizontal edge: look at the transposed picture
                px, picture = px[:, ::-1], light.T
            px = px[np.argsort(px[:, 1])]
            rows = np.arange(int(np.ceil(px[0, 1] + 9)), int(px[-1, 1] - 9))
            edge = np.interp(rows, px[:, 1], px[:, 0])
            if abs(px[-1, 0] - px[0, 0]) > 0.4 * (px[-1, 1] - px[0, 1]):
                continue  # too slanted to integrate inside the border
            for row, x in zip(rows, edge, strict=True):
                lo, hi = round(x) - 6, round(x) + 7
                values = picture[row, lo:hi].astype(float)
                white = values.sum()
                found = hi - 0.5 - white if values[-1] > values[0] else lo - 0.5 + white
                worst.append(found - x)
    worst = np.array(worst)
    assert len(worst) > 200
    print(heading_deg, psf_px, len(worst), worst.mean(), worst.std(), np.abs(worst).max())
