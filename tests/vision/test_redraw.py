"""Poses drawn back into the picture, and single frames fetched without decoding a whole clip."""

import json

import av
import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import Scene
from vision.frames import Clip
from vision.plane import FORE_RAD, N_GLOBAL, Units, from_floor, to_floor, units_for
from vision.redraw import deck_px, deck_to_picture, pair_px, redraw_record, view_from

from .rendered import CAMERA, true_corners_px
from .test_frames import write_clip

SIZE_PX = (640, 480)


def view(frame=(30.0, 12.0, -7.0), **changes):
    """Return a view through a tilted camera with a lens term, markers a unit apart."""
    p = np.zeros(N_GLOBAL)
    p[:13] = [0.3, 0.02, 0.28, 0.01, -0.05, -0.08, 0.01, 1.0, 0.02, -0.01, 1.0, 0.0, 0.0]
    for place, value in changes.items():
        p[int(place[1:])] = value
    units = units_for(SIZE_PX, side_mm=40.0, length_mm=120.0)
    record = json.loads(json.dumps(redraw_record(p, units, frame)))
    return view_from(record, SIZE_PX)


def test_what_is_kept_reads_back_as_the_same_view():
    seen = view()
    again = view_from(redraw_record(seen.p, seen.units, seen.frame), SIZE_PX)
    assert_allclose(again.p, seen.p, rtol=0, atol=0)
    assert again.frame == seen.frame == (30.0, 12.0, -7.0)
    with pytest.raises(KeyError):
        view_from({}, SIZE_PX)
    with pytest.raises(ValueError, match="shape"):
        view_from({**redraw_record(seen.p, seen.units, seen.frame), "parameters": [1.0]}, SIZE_PX)


def test_from_floor_undoes_to_floor():
    units = Units(np.zeros(2), 400.0, 120.0, 40.0, np.zeros(2))
    poses = np.random.default_rng(3).normal(size=(5, 3))
    assert_allclose(from_floor(*to_floor(poses, units), units), poses, atol=1e-15)


def test_points_of_the_deck_and_the_pair_share_one_map():
    """Marker centres lie half a distance fore and aft of the middle, along the heading."""
    seen = view(p8=0.0, p9=0.0)
    heading_deg, x_mm, y_mm = np.array([0.0, 70.0, -130.0]), np.array([5.0, -20.0, 30.0]), np.array([1.0, 8.0, -9.0])
    along = np.stack([np.cos(np.deg2rad(heading_deg)), np.sin(np.deg2rad(heading_deg))], axis=1)
    across = np.stack([-along[:, 1], along[:, 0]], axis=1)
    top_left = np.stack([x_mm, y_mm], axis=1) + 60.0 * along - 20.0 * along + 20.0 * across
    assert_allclose(pair_px(seen, heading_deg, x_mm, y_mm)[:, 0, 0], deck_px(seen, top_left), atol=1e-9)


def test_the_marker_turned_on_the_deck_is_drawn_turned():
    straight, turned = view(p8=0.0), view(p8=np.deg2rad(-10.0))  # FORE_RAD, y down
    assert FORE_RAD == 8
    pose = np.zeros(1), np.zeros(1), np.zeros(1)
    left, right = pair_px(straight, *pose)[0], pair_px(turned, *pose)[0]
    assert np.abs(left[1] - right[1]).max() == 0.0
    assert np.abs(left[0] - right[0]).max() > 1.0


def test_a_homography_from_two_squares_agrees_with_opencv():
    """Reference: OpenCV's findHomography on the same eight corners."""
    scene = Scene(camera=CAMERA)
    corners = true_corners_px(scene).reshape(-1, 2)
    robot = scene.robot
    printed = np.array([[-0.5, 0.5], [0.5, 0.5], [0.5, -0.5], [-0.5, -0.5]]) * robot.marker_side_mm
    body = np.concatenate([printed + np.array([mount.x_mm, mount.y_mm]) for mount in (robot.fore, robot.aft)])
    ours = deck_to_picture(corners, body)
    theirs, _ = cv2.findHomography(body, corners, 0)
    for map_ in (ours, theirs):
        there = np.column_stack([body, np.ones(8)]) @ map_.T
        assert_allclose(there[:, :2] / there[:, 2:], corners, atol=0.05)  # px; the lens term is left out


def test_single_frames_are_those_of_a_whole_decoding(tmp_path):
    times = np.arange(60) / 30.0
    rng = np.random.default_rng(2)
    pictures = [np.kron(rng.integers(0, 256, (8, 12), dtype=np.uint8), np.ones((8, 8), np.uint8)) for _ in times]
    path = write_clip(tmp_path / "a.mp4", times, pictures=pictures)
    spans = [(0.0, 0.1), (0.45, 0.55), (0.5, 0.6), (1.2, 1.3), (1.9, 5.0), (7.0, 8.0)]
    with Clip(path) as clip:
        whole = {round(frame.time_s, 3): frame.luma.copy() for frame in clip.frames()}
    with Clip(path) as clip:
        found = list(clip.frame_in_each(spans))
    assert found[-1] is None
    for (start_s, end_s), frame in zip(spans[:-1], found[:-1], strict=True):
        assert frame is not None
        assert start_s - 1e-3 <= frame.time_s <= end_s + 1e-3
        np.testing.assert_array_equal(frame.luma, whole[round(frame.time_s, 3)])


def test_a_key_frame_in_a_stretch_is_preferred(tmp_path):
    path = tmp_path / "keys.mp4"
    with av.open(str(path), "w") as container:
        stream = container.add_stream("libx264", rate=30, options={"g": "10", "sc_threshold": "0", "bf": "0"})
        stream.width, stream.height, stream.pix_fmt = 96, 64, "yuv420p"
        for n in range(60):
            grey = np.full((64, 96), 20 + 3 * n, np.uint8)
            container.mux(stream.encode(av.VideoFrame.from_ndarray(grey, format="gray").reformat(format="yuv420p")))
        container.mux(stream.encode(None))
    with Clip(path) as clip:
        frames = list(clip.frame_in_each([(0.4, 0.9), (1.1, 1.2)]))
    assert [frame.is_key for frame in frames] == [True, False]
    assert_allclose([frame.time_s for frame in frames], [2.0 / 3.0, 1.1], atol=2e-3)


def test_the_clip_is_left_alone_where_no_frame_is_asked_for(tmp_path):
    with Clip(write_clip(tmp_path / "a.mp4", np.arange(5) / 30.0)) as clip:
        assert list(clip.frame_in_each([])) == []
