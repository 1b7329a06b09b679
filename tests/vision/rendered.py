"""Small rendered scenes with true corners, and frames of them that were never coded."""

import numpy as np

from demo_videos.render import Camera, Renderer, Scene, project, spin_motion
from vision.frames import Frame
from vision.markers import UNIT_CORNERS
from vision.records import MarkerSetup

CAMERA = Camera(width_px=640, height_px=480, focal_px=900.0, distance_mm=900.0, tilt_deg=15.0, k1=-0.08)
PLACE = (5.0, -8.0, 33.0)
SETUP = MarkerSetup(marker_side_mm=40.0, card_ids=())


def true_corners_px(scene, place=PLACE):
    """Return the corners of the fore and the aft marker in the picture, shape (2, 4, 2), in the printed order."""
    robot = scene.robot
    c, s = np.cos(np.deg2rad(place[2])), np.sin(np.deg2rad(place[2]))
    printed = UNIT_CORNERS * [1.0, -1.0] * robot.marker_side_mm  # y down as printed, y left on the robot
    corners = []
    for mount in (robot.fore, robot.aft):
        floor = (printed + np.array([mount.x_mm, mount.y_mm])) @ np.array([[c, s], [-s, c]]) + place[:2]
        corners.append(project(scene.camera, np.column_stack([floor, np.full(4, robot.deck_height_mm)])))
    return np.array(corners)


def resting_frames(n, *, sensor, camera=CAMERA, place=PLACE):
    """Return the scene and n noisy frames of the cart at rest."""
    scene = Scene(camera=camera, sensor=sensor)
    motion, renderer = spin_motion([], start=place, start_delay_s=n / 30.0), Renderer(scene)
    return scene, [Frame(k, k / 30.0, renderer.frame(k / 30.0, motion), True) for k in range(n)]
