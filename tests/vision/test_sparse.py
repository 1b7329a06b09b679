"""Still stretches passed over: what is read is what a full reading gives, and nothing that moves is left out."""

from fractions import Fraction

import av
import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from vision.frames import Clip
from vision.sparse import picture_moved, time_unread

HEIGHT, WIDTH, RATE = 180, 320, 30


def picture(place_px, rng, noise):
    """Return a textured floor with a dark square at `place_px` whose pattern is another at every place."""
    y, x = np.mgrid[:HEIGHT, :WIDTH]
    grey = 120 + 20 * np.sin(x / 9.0) * np.cos(y / 7.0)
    left = round(place_px)
    grey[70:110, left : left + 40] = 30
    grey[80:100, left + 10 : left + 30] = np.random.default_rng(left).integers(0, 255, (5, 5)).repeat(4, 0).repeat(4, 1)
    return np.clip(grey + rng.normal(0, noise, grey.shape), 0, 255).astype(np.uint8)


def write(path, places_px, *, gop=15, noise=2.0, codec="libx264", **options):
    rng = np.random.default_rng(3)
    with av.open(str(path), "w") as container:
        stream = container.add_stream(
            codec, rate=RATE, options={"g": str(gop), "sc_threshold": "0", "crf": "20", "preset": "veryfast", **options}
        )
        stream.width, stream.height, stream.pix_fmt = WIDTH, HEIGHT, "yuv420p"
        stream.codec_context.time_base = Fraction(1, 90000)
        for n, place_px in enumerate(places_px):
            frame = av.VideoFrame.from_ndarray(picture(place_px, rng, noise), format="gray").reformat(format="yuv420p")
            frame.time_base, frame.pts = Fraction(1, 90000), n * 90000 // RATE
            container.mux(stream.encode(frame))
        container.mux(stream.encode(None))
    return path


def read(path, *, sparse):
    with Clip(path) as clip:
        return [(frame.time_s, frame.is_key, frame.luma.copy()) for frame in clip.frames(sparse=sparse)], clip


def drive(*stretches):
    """Return places of rests (number of frames) and drives (number of frames, px a frame)."""
    places = [20.0]
    for n_frames, step_px in stretches:
        places += [places[-1] + step_px * (k + 1) for k in range(n_frames)]
    return places


@pytest.mark.parametrize("options", [{}, {"bf": "0"}, {"bf": "3", "b-pyramid": "normal"}], ids=str)
def test_what_is_read_is_bit_by_bit_what_a_full_reading_gives(tmp_path, options):
    path = write(tmp_path / "a.mp4", drive((100, 0), (40, 2.5), (120, 0), (30, -3), (80, 0)), **options)
    whole, _ = read(path, sparse=False)
    few, clip = read(path, sparse=True)
    assert len(few) < 0.7 * len(whole)
    by_time = {round(time_s, 4): luma for time_s, _, luma in whole}
    times_s = [time_s for time_s, _, _ in few]
    assert np.all(np.diff(times_s) > 0)
    for time_s, _, luma in few:
        assert_array_equal(luma, by_time[round(time_s, 4)])
    missing = np.array(sorted(set(by_time) - {round(time_s, 4) for time_s in times_s}))
    assert len(missing) == len(whole) - len(few)
    for time_s in missing:
        assert any(start_s < time_s < end_s for start_s, end_s in clip.passed_over), time_s
    for first, last in ((101, 141), (261, 291)):  # frames in which it moves
        assert not np.any((missing > (first - 1) / RATE) & (missing < (last + 1) / RATE))
    assert not clip.problems


def test_every_key_frame_of_a_rest_is_read(tmp_path):
    path = write(tmp_path / "a.mp4", drive((30, 1), (150, 0)))
    keys = [time_s for time_s, is_key, _ in read(path, sparse=False)[0] if is_key]
    assert_allclose([time_s for time_s, is_key, _ in read(path, sparse=True)[0] if is_key], keys)
    assert len(keys) == 13


def test_a_clip_that_always_moves_is_read_whole(tmp_path):
    path = write(tmp_path / "a.mp4", [20 + 100 * np.sin(k / 20.0) ** 2 for k in range(120)])
    few, clip = read(path, sparse=True)
    assert len(few) == 120
    assert clip.passed_over == []


def test_out_and_back_between_two_key_frames_is_seen_by_what_it_cost(tmp_path):
    places = [20.0] * 200
    places[95:105] = [20 + 4 * min(k, 10 - k) for k in range(10)]
    path = write(tmp_path / "a.mp4", places, gop=30, noise=0.0)
    times_s = np.array([time_s for time_s, _, _ in read(path, sparse=True)[0]])
    assert len(times_s) < 150
    seen = np.round(times_s * RATE).astype(int)
    assert set(range(95, 105)) <= set(seen.tolist())


def test_long_stretches_without_a_key_frame_are_never_passed_over(tmp_path):
    path = write(tmp_path / "a.mp4", [20.0] * 200, gop=100)
    assert len(read(path, sparse=True)[0]) == 200


@pytest.mark.parametrize("way", ["open-gop=1", "open-gop=0"])
def test_another_codec_and_groups_that_lean_on_others(tmp_path, way):
    options = {"x265-params": f"keyint=15:log-level=none:{way}", "preset": "ultrafast"}
    path = write(tmp_path / "a.mkv", drive((60, 0), (20, 2), (60, 0)), codec="libx265", **options)
    whole = {round(time_s, 3): luma for time_s, _, luma in read(path, sparse=False)[0]}
    few, _ = read(path, sparse=True)
    assert len(whole) == 141
    assert set(range(61, 81)) <= {round(time_s * RATE) for time_s, _, _ in few}
    for time_s, _, luma in few:
        assert_array_equal(luma, whole[round(time_s, 3)])


def test_a_file_cut_off_is_read_as_far_as_it_goes_and_said(tmp_path):
    whole = write(tmp_path / "a.mkv", drive((100, 0), (40, 2), (100, 0)))
    cut = tmp_path / "cut.mkv"
    cut.write_bytes(whole.read_bytes()[: int(0.6 * whole.stat().st_size)])
    full, clip = read(cut, sparse=False)
    few, sparse_clip = read(cut, sparse=True)
    assert few[-1][0] == pytest.approx(full[-1][0], abs=0.5)
    assert len(sparse_clip.problems) == len(clip.problems)


def test_noise_is_no_motion_and_a_small_shift_is():
    rng = np.random.default_rng(1)
    for noise in (0.5, 3.0):
        still = [picture(50.0, rng, noise) for _ in range(2)]
        assert not picture_moved(*still)
        assert picture_moved(still[0], picture(52.0, rng, noise))


def test_time_that_was_passed_over_is_no_gap():
    """By hand: of the second between 1 and 2, 0.7 s were passed over."""
    unread = time_unread([(1.2, 1.9), (5.0, 6.0)], np.array([0.0, 1.0, 2.0, 5.5, 7.0]))
    assert_allclose(unread, [0.0, 0.7, 0.5, 0.5], atol=1e-12)
