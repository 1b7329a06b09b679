"""Encoded clips: what is read back is what was rendered, at the true times, the right way up."""

import csv
import json

import av
import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from demo_videos.render import Camera, Floor, Scene, Sensor, Timing, render_clip, render_frames, spin_motion

CAMERA = Camera(width_px=320, height_px=192, focal_px=300)
SCENE = Scene(camera=CAMERA, floor=Floor(kind="plain"), timing=Timing(duration_s=0.5))
MOTION = spin_motion([60.0], seed=1, start_delay_s=0.2)


def stored(path):
    """Return (time in s, luma plane, rotation) of every frame."""
    with av.open(str(path)) as container:
        out = []
        for frame in container.decode(video=0):
            plane = frame.planes[0]
            kind = np.uint16 if "10le" in frame.format.name else np.uint8
            lines = np.frombuffer(plane, kind).reshape(plane.height, -1)
            out.append((float(frame.pts * frame.time_base), lines[:, : plane.width].copy(), frame.rotation))
        return out


@pytest.mark.parametrize(
    ("name", "storage", "bits"),
    [
        ("lossless.mkv", {"codec": "ffv1"}, 8),
        ("raw.avi", {"codec": "raw"}, 8),
        ("coded.mp4", {"codec": "h264", "crf": 0}, 8),
        ("ten.mkv", {"codec": "ffv1"}, 10),
    ],
)
def test_lossless_clips_hold_exactly_the_rendered_code_values(tmp_path, name, storage, bits):
    scene = Scene(camera=CAMERA, floor=Floor(kind="plain"), timing=Timing(duration_s=0.2), sensor=Sensor(bits=bits))
    render_clip(scene, MOTION, tmp_path / name, **storage)
    rendered = list(render_frames(scene, MOTION))
    back = stored(tmp_path / name)
    assert len(back) == len(rendered) == 7
    for (time_s, luma), (stamp_s, plane, _) in zip(rendered, back, strict=True):
        assert stamp_s == pytest.approx(time_s, abs=0.0006)  # Matroska keeps milliseconds
        assert_array_equal(plane, luma)


@pytest.mark.parametrize(("rotation_deg", "mirrored"), [(90, False), (180, False), (270, False), (0, True), (90, True)])
def test_the_display_matrix_shows_the_stored_picture_upright(tmp_path, rotation_deg, mirrored):
    """ISO/IEC 14496-12, 6.2.2: a stored point (p, q) appears at (a p + c q + x, b p + d q + y).

    Reference library for the rotation: OpenCV's reader turns pictures by itself.
    """
    path = tmp_path / "clip.mp4"
    render_clip(SCENE, MOTION, path, crf=0, rotation_deg=rotation_deg, mirrored=mirrored)
    _, upright = next(iter(render_frames(SCENE, MOTION)))
    with av.open(str(path)) as container:
        frame = next(container.decode(video=0))
        matrix = np.frombuffer(bytes(frame.side_data["DISPLAYMATRIX"]), np.int32).reshape(3, 3)[:2, :2] / 65536.0
    picture = stored(path)[0][1]
    rows, cols = np.indices(picture.shape)
    shown_x, shown_y = np.tensordot(matrix.T, np.stack([cols, rows]), 1).astype(int)
    out = np.zeros_like(upright)
    out[shown_y - shown_y.min(), shown_x - shown_x.min()] = picture
    assert_array_equal(out, upright)
    if not mirrored:
        assert stored(path)[0][2] % 360 == rotation_deg
        reader = cv2.VideoCapture(str(path))
        grey = cv2.cvtColor(reader.read()[1], cv2.COLOR_BGR2GRAY).astype(float)
        reader.release()
        assert np.corrcoef(grey.ravel(), upright.ravel())[0, 1] > 0.99


def test_variable_rates_and_late_starts_keep_true_times(tmp_path):
    timing = Timing(duration_s=0.6, jitter=0.2, dropped_share=0.1, slow_spans=((0.2, 0.4, 12.0),), first_s=1.5)
    scene = Scene(camera=CAMERA, floor=Floor(kind="plain"), timing=timing, seed=4)
    truth = render_clip(scene, MOTION, tmp_path / "clip.mp4", crf=30)
    back = np.array([time_s for time_s, _, _ in stored(tmp_path / "clip.mp4")])
    rendered = np.array([time_s for time_s, _ in render_frames(scene, MOTION)])
    assert np.ptp(np.diff(back)) > 0.03
    assert_allclose(back[0], 1.5, atol=1e-3)
    assert_allclose(back - back[0], truth.frame_s, atol=2e-5)  # ticks of 1/90000 s
    assert_allclose(rendered - rendered[0], truth.frame_s, atol=1e-12)


def test_repeated_stamps_survive_in_matroska(tmp_path):
    timing = Timing(duration_s=0.6, repeated_share=0.3)
    scene = Scene(camera=CAMERA, floor=Floor(kind="plain"), timing=timing, seed=4)
    render_clip(scene, MOTION, tmp_path / "clip.mkv", codec="ffv1")
    back = np.array([time_s for time_s, _, _ in stored(tmp_path / "clip.mkv")])
    assert (np.diff(back) == 0).sum() >= 2


def test_sound_and_other_codecs_can_be_read(tmp_path):
    for name, storage in (
        ("a.mov", {"codec": "hevc", "crf": 20, "audio": True}),
        ("b.webm", {"codec": "vp9", "bitrate": 2_000_000, "audio": True}),
        ("c.mp4", {"codec": "av1", "crf": 25}),
        ("d.avi", {"codec": "mjpeg"}),
    ):
        render_clip(SCENE, MOTION, tmp_path / name, **storage)
        back = stored(tmp_path / name)
        assert len(back) == 16
        rendered = [luma for _, luma in render_frames(SCENE, MOTION)]
        for index in (0, 15):
            error = back[index][1].astype(float) - rendered[index]
            assert np.sqrt(np.mean(error**2)) < 6.0  # grey levels; coding error about the size of the noise
        with av.open(str(tmp_path / name)) as container:
            assert len(container.streams.audio) == ("audio" in storage)


def test_colour_leaves_luma_alone(tmp_path):
    grey = Scene(camera=CAMERA, floor=Floor(kind="cork"), timing=Timing(duration_s=0.1))
    tinted = Scene(camera=CAMERA, floor=Floor(kind="cork"), timing=Timing(duration_s=0.1), tint=True)
    for name, scene in (("grey.mp4", grey), ("tinted.mp4", tinted)):
        render_clip(scene, MOTION, tmp_path / name, crf=0)
    assert_array_equal(stored(tmp_path / "grey.mp4")[2][1], stored(tmp_path / "tinted.mp4")[2][1])
    with av.open(str(tmp_path / "tinted.mp4")) as container:
        frame = next(container.decode(video=0)).to_ndarray(format="rgb24").astype(float)
    red, _, blue = frame[:20, :20].mean(axis=(0, 1))
    assert red > blue + 10  # cork is warm


def test_truth_is_written_beside_the_clip(tmp_path):
    truth = render_clip(SCENE, MOTION, tmp_path / "clip.mp4", crf=30, frames_csv=True)
    told = json.loads((tmp_path / "clip.mp4.truth.json").read_text())
    assert told["commands"] == [60.0]
    assert told["turns"][0]["heading_change_deg"] == pytest.approx(truth.turns[0].heading_change_deg)
    with open(tmp_path / "clip.mp4.frames.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 16
    assert float(rows[0]["heading_deg"]) == 0.0
    assert float(rows[-1]["heading_deg"]) > 5.0


@pytest.mark.parametrize("storage", [{"codec": "film"}, {"rotation_deg": 45}, {"codec": "vp9"}])
def test_impossible_storage_is_refused(tmp_path, storage):
    scene = Scene(camera=CAMERA, sensor=Sensor(bits=10))
    with pytest.raises(ValueError, match=r"codec|rotation|bits"):
        render_clip(scene, MOTION, tmp_path / "clip.mp4", **storage)
