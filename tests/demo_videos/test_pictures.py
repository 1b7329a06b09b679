"""What the sensor records: blur, noise, tone, sharpening, shutter, light, and things in the way."""

from dataclasses import replace

import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from demo_videos.render import (
    Camera,
    Card,
    CardShift,
    Drive,
    ExposureStep,
    Floor,
    Glint,
    HandHeld,
    Light,
    Mount,
    Nudge,
    Occluder,
    Robot,
    Scene,
    Sensor,
    ShadowEdge,
    project,
    render_frames,
    spin_motion,
)
from demo_videos.render.camera import view_at
from demo_videos.render.frames import Renderer
from demo_videos.render.sensor import Development, blur

CAMERA = Camera(width_px=480, height_px=320, focal_px=700, distance_mm=1200, tilt_deg=12, k1=-0.08)
QUIET = Sensor(noise_grey=0.0, exposure_s=0.0)
PLAIN = Floor(kind="plain")
STILL = spin_motion([])


def found_markers(image, dictionary="APRILTAG_36h11"):
    """Return {id: corners (4, 2)} by OpenCV's detector, refined within two pixels of each corner."""
    table = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, f"DICT_{dictionary}"))
    corners, ids, _ = cv2.aruco.ArucoDetector(table).detectMarkers(image)
    if ids is None:
        return {}
    stop = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 50, 1e-4)
    refined = cv2.cornerSubPix(image, np.concatenate(corners).reshape(-1, 1, 2), (2, 2), (-1, -1), stop)
    return dict(zip(ids.ravel().tolist(), refined.reshape(-1, 4, 2), strict=True))


@pytest.mark.parametrize("dictionary", ["APRILTAG_36h11", "ARUCO_MIP_36h12", "4X4_50"])
def test_opencv_reads_the_markers_where_they_were_put(dictionary):
    """Reference library: OpenCV's detector. Its corners start at the print's top left and go round clockwise."""
    robot = Robot(dictionary=dictionary, fore=Mount(marker_id=3, x_mm=50, y_mm=10, angle_deg=30))
    cards = (Card(card_id=12, x_mm=-260, y_mm=90, angle_deg=70, side_mm=70),)
    scene = Scene(camera=CAMERA, robot=robot, cards=cards, floor=PLAIN, sensor=QUIET)
    image = Renderer(scene).frame(0.0, spin_motion([], start=(20, -10, 50)))
    found = found_markers(image, dictionary)
    assert set(found) == {3, 1, 12}
    turn, heading = np.deg2rad(80.0), np.deg2rad(50.0)
    centre = np.array([20, -10]) + rotated(heading) @ [50, 10]
    square = np.array([[-20, 20], [20, 20], [20, -20], [-20, -20]])
    expected = project(CAMERA, np.column_stack([square @ rotated(turn).T + centre, np.full(4, 80.0)]))
    assert_allclose(found[3], expected, atol=0.5)  # px; the detector's own error
    flat = np.array([[-35, 35], [35, 35], [35, -35], [-35, -35]])
    on_floor = np.column_stack([flat @ rotated(np.deg2rad(70)).T + [-260, 90], np.zeros(4)])
    assert_allclose(found[12], project(CAMERA, on_floor), atol=0.5)


def rotated(turn_rad):
    return np.array([[np.cos(turn_rad), -np.sin(turn_rad)], [np.sin(turn_rad), np.cos(turn_rad)]])


def test_positive_wheel_degrees_turn_counter_clockwise_in_the_picture():
    """Picture y points down, so counter-clockwise from heading 0 moves the fore marker up: to smaller y."""
    scene = Scene(camera=CAMERA, floor=PLAIN, sensor=QUIET)
    motion = spin_motion([100.0], seed=1)
    renderer = Renderer(scene)
    before, after = (found_markers(renderer.frame(t, motion)) for t in (0.1, motion.duration_s))
    ahead = [(found[0] - found[1]).mean(axis=0) for found in (before, after)]
    bearing = [np.degrees(np.arctan2(-y, x)) for x, y in ahead]
    assert abs(bearing[0]) < 2.0
    assert bearing[1] == pytest.approx(motion.turns[0].heading_change_deg, abs=3.0)  # perspective alone bends it


def test_a_mirrored_print_cannot_be_read():
    scene = Scene(
        camera=CAMERA, robot=Robot(fore=Mount(marker_id=0, x_mm=50, mirrored=True)), floor=PLAIN, sensor=QUIET
    )
    assert set(found_markers(Renderer(scene).frame(0.0, STILL))) == {1}


def test_motion_blur_is_the_mean_of_many_moments():
    motion = spin_motion([400.0], drive=Drive(rate_wheel_deg_s=500, acceleration_wheel_deg_s2=3000), seed=1)
    at_s, exposure_s = motion.turns[0].start_s + 0.3, 0.02
    scene = Scene(camera=CAMERA, floor=PLAIN, sensor=QUIET)
    sharp = Renderer(scene)
    moments = at_s + exposure_s * ((np.arange(120) + 0.5) / 120 - 0.5)
    mean = np.mean([sharp.exposed(t, motion) for t in moments], axis=0)
    blurred = Renderer(replace(scene, sensor=replace(QUIET, exposure_s=exposure_s))).exposed(at_s, motion)
    plates = markers_mask(motion, at_s)
    assert np.abs(mean - blurred)[plates].max() < 0.012  # of full scale
    assert np.abs(mean - blurred)[plates].mean() < 0.0012
    assert np.abs(mean - sharp.exposed(at_s, motion))[plates].max() > 0.2  # there is blur to speak of


def markers_mask(motion, time_s, scale=1.0):
    """Return where the two black squares are at a time."""
    mask = np.zeros((CAMERA.height_px, CAMERA.width_px), dtype=np.uint8)
    pose = motion.at(time_s)
    turn = rotated(float(pose.heading_rad[0]))
    for x_mm in (48.0, -84.0):
        square = np.array([[-20, -20], [20, -20], [20, 20], [-20, 20]]) * scale + [x_mm, 0.0]
        floor = square @ turn.T + [pose.x_mm[0], pose.y_mm[0]]
        px = project(CAMERA, np.column_stack([floor, np.full(4, 80.0)]))
        cv2.fillPoly(mask, [np.round(px).astype(np.int32)], 1)
    return mask.astype(bool)


def test_rolling_shutter_shows_each_row_at_its_own_time():
    """A row of a rolling picture equals the same row of a still picture taken when that row was."""
    motion = spin_motion([400.0], seed=1)
    at_s, delay_s = motion.turns[0].start_s + 0.8, 1e-4
    rolling = Renderer(Scene(camera=CAMERA, floor=PLAIN, sensor=replace(QUIET, line_delay_s=delay_s, psf_px=0.0)))
    still = Renderer(Scene(camera=CAMERA, floor=PLAIN, sensor=replace(QUIET, psf_px=0.0)))
    picture = rolling.exposed(at_s, motion)
    plates = markers_mask(motion, at_s, 0.8)
    for row in np.flatnonzero(plates.any(axis=1))[::7]:
        own = still.exposed(at_s + delay_s * (row - (CAMERA.height_px - 1) / 2), motion)
        assert_allclose(picture[row, plates[row]], own[row, plates[row]], atol=0.003)


def test_a_moving_camera_sees_the_floor_and_cards_move_as_projected():
    moves = (HandHeld(seed=2), Nudge(time_s=0.5))
    camera = replace(CAMERA, moves=moves)
    scene = Scene(
        camera=camera,
        floor=PLAIN,
        sensor=replace(QUIET, exposure_s=0.004),
        cards=(Card(card_id=11, x_mm=-230, y_mm=90),),
    )
    renderer = Renderer(scene)
    for time_s in (0.0, 0.9):
        found = found_markers(renderer.frame(time_s, STILL))
        square = np.add([[-30, 30, 0], [30, 30, 0], [30, -30, 0], [-30, -30, 0]], [-230, 90, 0])
        assert_allclose(found[11], project(camera, square, time_s), atol=0.4)  # px; the detector's own error
        top = np.add([[-20, 20, 80], [20, 20, 80], [20, -20, 80], [-20, -20, 80]], [48, 0, 0])
        assert_allclose(found[0], project(camera, top, time_s), atol=0.4)
    assert np.abs(project(camera, square, 0.9) - project(camera, square, 0.0)).max() > 5.0


def test_hand_held_shake_has_the_stated_size():
    times = np.arange(0.0, 600.0, 0.05)
    shake = HandHeld(shift_mm=6.0, angle_deg=0.4, seed=3).at(times)
    assert_allclose(shake[:, :3].std(axis=0), 6.0, rtol=0.1)
    assert_allclose(np.rad2deg(shake[:, 3:6]).std(axis=0), 0.4, rtol=0.1)
    assert len(view_at(replace(CAMERA, moves=(HandHeld(),)), times[:5]).zoom) == 5


def test_a_point_of_light_spreads_as_stated():
    picture = np.zeros((41, 41), dtype=np.float32)
    picture[20, 20] = 1.0
    for sigma_px in (0.2, 0.5, 0.8, 1.5):
        spread = blur(picture, sigma_px).sum(axis=0)
        offset = np.arange(41) - 20
        assert spread.sum() == pytest.approx(1.0, abs=1e-6)
        assert np.sqrt((spread * offset**2).sum()) == pytest.approx(sigma_px, rel=1e-4)


@pytest.mark.parametrize("psf_px", [0.0, 0.5, 0.9])
def test_edge_width_is_psf_and_pixel_together(psf_px):
    """An edge seen through a Gaussian of s px and a pixel's box has the variance s^2 + 1/12, mean over its phases."""
    robot = Robot(
        marker_side_mm=110, fore=Mount(marker_id=0, x_mm=70, ink=0, paper=1), aft=Mount(marker_id=1, x_mm=-90)
    )
    camera = replace(CAMERA, tilt_deg=0.0, k1=0.0, focal_px=900)
    sensor = replace(QUIET, psf_px=psf_px)
    scene = Scene(camera=camera, robot=robot, floor=PLAIN, light=Light(gradient=0, vignette=0), sensor=sensor)
    slope = np.tan(np.deg2rad(4.0))
    light = Renderer(scene).exposed(0.0, spin_motion([], start=(0, 0, 4.0)))
    x_px, y_px = project(camera, [[125 * np.cos(np.arctan(slope)), 125 * np.sin(np.arctan(slope)), 80.0]])[0]
    variances = []
    for up in np.arange(-28, 29):  # two pixels' worth of phases along the slanting edge
        row, col = round(y_px) - up, round(x_px - up * slope)
        profile = np.diff(light[row, col - 6 : col + 7].astype(float))
        place = np.arange(len(profile))
        mean = (profile * place).sum() / profile.sum()
        variances.append((profile * (place - mean) ** 2).sum() / profile.sum() - 1.0 / 12.0)  # the difference's own box
    assert np.mean(variances) == pytest.approx(psf_px**2 + 1.0 / 12.0, abs=0.006)  # px^2


def test_noise_has_the_stated_spread_and_is_fresh_in_each_frame():
    scene = Scene(camera=CAMERA, floor=PLAIN, sensor=Sensor(noise_grey=3.0, exposure_s=0.0))
    renderer = Renderer(scene)
    frames = np.stack([renderer.frame(0.0, STILL).astype(float) for _ in range(30)])
    spread = np.sqrt(frames.var(axis=0, ddof=1).mean())
    assert spread == pytest.approx(np.sqrt(9.0 + 1.0 / 12.0), rel=0.01)  # rounding to whole levels adds 1/12
    rest = frames - frames.mean(axis=0)
    alike = [np.mean(rest[k] * rest[k + 1]) / spread**2 for k in range(29)]
    assert abs(np.mean(alike) + 1 / 30) < 0.005  # independent but for the mean taken off


def test_shot_noise_grows_with_the_light():
    sensor = Sensor(noise_grey=4.0, shot_share=1.0)
    development = Development(sensor, 200, 200, 1)
    spread = [development.develop(np.full((200, 200), level, np.float32)).std() for level in (0.125, 0.5)]
    assert spread[1] / spread[0] == pytest.approx(2.0, rel=0.05)


def test_order_is_tone_then_sharpening():
    """An edge sharpened after the tone curve overshoots by the same amount in code values on both sides."""
    light = np.full((40, 60), 0.1, np.float32)
    light[:, 30:] = 0.7
    light = blur(light, 1.0)
    sensor = Sensor(noise_grey=0.0, gamma=2.2, sharpen=1.0, sharpen_radius_px=1.5)
    toned = Development(replace(sensor, sharpen=0.0), 40, 60, 1).develop(light)[20].astype(float)
    code = Development(sensor, 40, 60, 1).develop(light)[20].astype(float)
    assert toned[5] == pytest.approx(16 + 219 * 0.1 ** (1 / 2.2), abs=1)
    assert toned[55] == pytest.approx(16 + 219 * 0.7 ** (1 / 2.2), abs=1)
    assert code.max() > toned.max() + 5
    assert code.min() < toned.min() - 5
    soft = blur(np.tile(toned.astype(np.float32), (40, 1)), 1.5)[20]
    assert_allclose(code, np.clip(2 * toned - soft, 0, 255), atol=2.0)  # grey levels; rounding of `toned`


def test_full_range_and_ten_bits():
    white = np.ones((8, 8), np.float32)
    assert_array_equal(Development(Sensor(noise_grey=0), 8, 8, 0).develop(white), 235)
    assert_array_equal(Development(Sensor(noise_grey=0, full_range=True), 8, 8, 0).develop(white), 255)
    ten = Development(Sensor(noise_grey=0, bits=10), 8, 8, 0).develop(white * 0.5)
    assert ten.dtype == np.uint16
    assert_array_equal(ten, round(4 * (16 + 219 * 0.5)))


def test_light_changes_where_and_when_told():
    edge = ShadowEdge(at_px=(240.0, 0.0), darkness=0.5, penumbra_px=4.0)
    steps = (ExposureStep(time_s=1.0, factor=0.5, ramp_s=0.1),)
    base = Scene(camera=CAMERA, floor=PLAIN, sensor=QUIET, light=Light(gradient=0, vignette=0))
    lit = Renderer(base).exposed(0.0, STILL)
    shaded = Renderer(replace(base, light=replace(base.light, shadows=(edge,)))).exposed(0.0, STILL)
    assert_allclose(shaded[:, :230], lit[:, :230], rtol=1e-5)
    assert_allclose(shaded[:, 250:], 0.5 * lit[:, 250:], rtol=1e-5)
    later = Renderer(replace(base, light=replace(base.light, exposure_steps=steps))).exposed(2.0, STILL)
    assert_allclose(later, 0.5 * lit, rtol=1e-5)
    passing = replace(edge, start_s=0.5, end_s=2.0, speed_px_s=100.0)
    moved = Renderer(replace(base, light=replace(base.light, shadows=(passing,))))
    assert_allclose(moved.exposed(0.2, STILL), lit, rtol=1e-6)
    assert_allclose(moved.exposed(1.5, STILL)[:, 350:], 0.5 * lit[:, 350:], rtol=1e-4)
    assert_allclose(moved.exposed(1.5, STILL)[:, :330], lit[:, :330], rtol=1e-4)


def test_a_glint_shows_on_paper_more_than_on_the_floor():
    spot = tuple(project(CAMERA, [[48, 0, 80]])[0])
    base = Scene(camera=CAMERA, floor=PLAIN, sensor=QUIET)
    bright = Renderer(replace(base, light=Light(glints=(Glint(at_px=spot, radius_px=8, strength=0.8),))))
    gain = bright.exposed(0.0, STILL) - Renderer(base).exposed(0.0, STILL)
    assert gain[round(spot[1]), round(spot[0])] == pytest.approx(0.8, abs=0.02)
    away = replace(base, robot=replace(Robot(), visible=False), light=bright.scene.light)
    bare = Renderer(away).exposed(0.0, STILL) - Renderer(replace(away, light=Light())).exposed(0.0, STILL)
    assert bare.max() == pytest.approx(0.8 * 0.15, abs=0.01)


def test_an_occluder_hides_what_it_covers_while_it_is_there():
    spot = project(CAMERA, [[48, 0, 80]])[0]
    cover = Occluder(
        outline_px=((-40, -40), (40, -40), (40, 40), (-40, 40)), path=((1.0, *spot), (2.0, *spot)), shade=0.4
    )
    renderer = Renderer(Scene(camera=CAMERA, floor=PLAIN, sensor=QUIET, occluders=(cover,)))
    assert set(found_markers(renderer.frame(0.5, STILL))) == {0, 1}
    assert set(found_markers(renderer.frame(1.5, STILL))) == {1}


def test_cards_shift_and_curl():
    card = Card(card_id=11, x_mm=-230, y_mm=90, shifts=(CardShift(time_s=1.0, x_mm=30, angle_deg=10),))
    base = Scene(camera=CAMERA, floor=PLAIN, sensor=QUIET, cards=(card,))
    renderer = Renderer(base)
    before, after = (found_markers(renderer.frame(t, STILL))[11].mean(axis=0) for t in (0.5, 1.5))
    expected = project(CAMERA, [[-230, 90, 0], [-200, 90, 0]])
    assert_allclose([before, after], expected, atol=0.3)  # px; perspective moves the mean of the corners a little
    curled = replace(base, cards=(replace(card, shifts=(), curl_mm=12.0),))
    corner = found_markers(Renderer(curled).frame(0.0, STILL))[11]
    half = 30.0 / 41.25  # of the sheet's half width: 60 mm black with 1.5 modules of 7.5 mm around
    rise = 12.0 * half**2
    square = np.add([[-30, 30], [30, 30], [30, -30], [-30, -30]], [-230, 90])
    assert_allclose(corner, project(CAMERA, np.column_stack([square, np.full(4, rise)])), atol=0.6)


def test_frames_repeat_for_a_seed_and_rest_frames_differ_by_noise_only():
    scene = Scene(camera=CAMERA, floor=PLAIN)
    motion = spin_motion([30.0], seed=2, start_delay_s=0.1, rest_s=0.1)
    one, two = (list(render_frames(scene, motion)) for _ in range(2))
    assert len(one) > 10
    for (time_a, a), (time_b, b) in zip(one, two, strict=True):
        assert time_a == time_b
        assert_array_equal(a, b)


def test_unknown_names_are_refused():
    with pytest.raises(ValueError, match="unknown floor 'moss'"):
        Renderer(Scene(camera=CAMERA, floor=Floor(kind="moss")))
    with pytest.raises(ValueError, match="no predefined marker dictionary"):
        Renderer(Scene(camera=CAMERA, robot=Robot(dictionary="9X9_7")))
