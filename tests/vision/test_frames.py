from fractions import Fraction

import av
import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from vision.errors import ClipError
from vision.frames import Clip, upright_from_matrix

SIZE = (96, 64)


def write_clip(path, times_s, *, codec="libx264", pix_fmt="yuv420p", pictures=None):
    """Write a small clip whose picture n has the grey 20 + 8 n, at given times."""
    with av.open(str(path), "w") as container:
        stream = container.add_stream(codec, rate=30, options={"crf": "1"} if codec == "libx264" else {})
        stream.width, stream.height, stream.pix_fmt = *SIZE, pix_fmt
        stream.codec_context.time_base = Fraction(1, 90000)
        for n, time_s in enumerate(times_s):
            picture = pictures[n] if pictures is not None else np.full(SIZE[::-1], 20 + 8 * n, np.uint8)
            frame = av.VideoFrame.from_ndarray(picture, format="gray").reformat(format=pix_fmt)
            frame.time_base, frame.pts = Fraction(1, 90000), round(time_s * 90000)
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    return path


def read(path):
    with Clip(path) as clip:
        return list(clip.frames()), clip


def test_times_are_those_of_presentation_and_start_at_the_first_frame(tmp_path):
    times = [1.5, 1.53, 1.6, 1.61, 1.9]
    frames, _ = read(write_clip(tmp_path / "vfr.mp4", times))
    assert_allclose([frame.time_s for frame in frames], np.array(times) - 1.5, atol=1e-4)
    assert [frame.index for frame in frames] == [0, 1, 2, 3, 4]
    assert frames[0].is_key


@pytest.mark.parametrize(("codec", "name"), [("ffv1", "a.mkv"), ("mjpeg", "a.avi"), ("libvpx-vp9", "a.webm")])
def test_other_codecs_are_read(tmp_path, codec, name):
    pix_fmt = "yuvj420p" if codec == "mjpeg" else "yuv420p"
    frames, _ = read(write_clip(tmp_path / name, np.arange(5) / 30, codec=codec, pix_fmt=pix_fmt))
    means = [float(frame.luma.mean()) for frame in frames]
    assert len(frames) == 5
    assert np.all(np.diff(means) > 4)
    assert frames[0].luma.shape == (SIZE[1], SIZE[0])


def test_ten_bits_stay_ten_bits(tmp_path):
    frames, clip = read(write_clip(tmp_path / "deep.mkv", np.arange(3) / 30, codec="ffv1", pix_fmt="yuv420p10le"))
    assert frames[0].luma.dtype == np.uint16
    assert 70 < frames[0].luma.mean() < 200
    assert clip.info.pixel_format == "yuv420p10le"


def test_a_file_cut_off_in_the_middle_is_read_as_far_as_it_goes(tmp_path):
    rng = np.random.default_rng(1)
    pictures = [rng.integers(0, 255, (SIZE[1], SIZE[0]), dtype=np.uint8) for _ in range(30)]
    whole = write_clip(tmp_path / "whole.mkv", np.arange(30) / 30, pictures=pictures)
    cut = tmp_path / "cut.mkv"
    cut.write_bytes(whole.read_bytes()[: int(whole.stat().st_size * 0.6)])
    frames, clip = read(cut)
    assert 5 < len(frames) < 30
    assert_allclose(np.diff([frame.time_s for frame in frames]), 1 / 30, atol=2e-3)
    assert not read(whole)[1].problems
    if clip.problems:  # what FFmpeg reports depends on where the cut falls; a problem names the file in one line
        assert all(problem.startswith("cut.mkv: ") and "\n" not in problem for problem in clip.problems)


def test_damaged_packets_are_stepped_over_and_said(tmp_path):
    rng = np.random.default_rng(2)
    pictures = [rng.integers(0, 255, (SIZE[1], SIZE[0]), dtype=np.uint8) for _ in range(40)]
    whole = write_clip(tmp_path / "whole.mp4", np.arange(40) / 30, pictures=pictures)
    with av.open(str(whole)) as container:
        spots = [(packet.pos, packet.size) for packet in container.demux(video=0) if packet.size]
    content = bytearray(whole.read_bytes())
    for pos, size in spots[15:18]:
        content[pos : pos + size] = bytes(size)
    (tmp_path / "hurt.mp4").write_bytes(content)
    frames, clip = read(tmp_path / "hurt.mp4")
    assert 30 <= len(frames) <= 40
    assert np.all(np.diff([frame.time_s for frame in frames]) > 0)
    assert len(clip.problems) == 1
    assert "3 damaged packets" in clip.problems[0]


def test_sound_without_a_picture_is_not_a_clip(tmp_path):
    path = tmp_path / "hum.mp4"
    with av.open(str(path), "w") as container:
        stream = container.add_stream("aac", rate=48000, layout="mono")
        frame = av.AudioFrame.from_ndarray(np.zeros((1, 4096), np.float32), format="fltp", layout="mono")
        frame.sample_rate, frame.pts = 48000, 0
        container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    with pytest.raises(ClipError, match="holds no video"):
        read(path)


@pytest.mark.parametrize("rotation_deg", [0, 90, 180, 270])
def test_a_clip_stored_lying_is_read_upright(tmp_path, rotation_deg):
    """The renderer stores clips turned, with the flag that phones write."""
    from demo_videos.render import Camera, Scene, Sensor, render_clip, spin_motion

    camera = Camera(width_px=96, height_px=64, focal_px=90.0)
    scene = Scene(camera=camera, sensor=Sensor(noise_grey=0.0))
    motion = spin_motion([], start=(60.0, 30.0, 20.0), start_delay_s=0.1)
    path = tmp_path / "lying.mp4"
    render_clip(scene, motion, path, crf=0, rotation_deg=rotation_deg)
    frames, clip = read(path)
    render_clip(scene, motion, tmp_path / "upright.mp4", crf=0)
    assert (clip.info.width_px, clip.info.height_px) == (96, 64)
    assert_array_equal(frames[0].luma, read(tmp_path / "upright.mp4")[0][0].luma)


@pytest.mark.parametrize(
    ("content", "name", "says"),
    [
        (None, "missing.mp4", "no such file"),
        (b"", "empty.mp4", "cannot be read as a clip"),
        (b"not a clip at all" * 50, "text.mp4", "cannot be read as a clip"),
        ("folder", "folder", "is a folder"),
    ],
)
def test_what_is_not_a_clip_gets_one_line(tmp_path, content, name, says):
    path = tmp_path / name
    if content == "folder":
        path.mkdir()
    elif content is not None:
        path.write_bytes(content)
    with pytest.raises(ClipError, match=says) as caught:
        read(path)
    assert "\n" not in str(caught.value)
    assert name in str(caught.value)


def test_a_still_picture_is_not_a_clip(tmp_path):
    import cv2

    cv2.imwrite(str(tmp_path / "still.png"), np.zeros((40, 40), np.uint8))
    with pytest.raises(ClipError, match="still picture"):
        read(tmp_path / "still.png")


def test_leaving_early_stops_the_decoder(tmp_path):
    path = write_clip(tmp_path / "long.mp4", np.arange(25) / 30)
    with Clip(path) as clip:
        first = next(iter(clip.frames()))
    assert first.index == 0


PICTURE = np.arange(6, dtype=np.uint8).reshape(2, 3)


@pytest.mark.parametrize(
    ("matrix", "upright"),
    [
        ([[1, 0], [0, 1]], PICTURE),
        # A stored pixel one to the right is shown one down: a quarter turn clockwise.
        ([[0, 1], [-1, 0]], np.rot90(PICTURE, -1)),
        ([[-1, 0], [0, -1]], np.rot90(PICTURE, 2)),
        ([[0, -1], [1, 0]], np.rot90(PICTURE, 1)),
        ([[-1, 0], [0, 1]], PICTURE[:, ::-1]),
        ([[1, 0], [0, -1]], PICTURE[::-1]),
    ],
)
def test_display_matrix(matrix, upright):
    """The matrix is that of ISO/IEC 14496-12, 6.2.2 (p' = p M, x right, y down)."""
    assert_array_equal(upright_from_matrix(np.array(matrix, float)).apply(PICTURE), upright)
