"""The bundled clips are those that the script makes: same trial files, same truth, same pictures."""

import av
import numpy as np
import pytest

from demo_videos.make_demo import DEMOS, HERE, REST_S, trial_text, write_truth_table
from demo_videos.render import Renderer, spin_motion
from demo_videos.render.clip import truth_of


def motion_of(demo):
    return spin_motion(demo.wheel_deg, drive=demo.drive, seed=demo.seed, rest_s=REST_S, start=(15.0, -10.0, 20.0))


@pytest.mark.parametrize("demo", DEMOS, ids=lambda demo: demo.name)
def test_files_beside_a_bundled_clip_are_what_the_script_writes(demo, tmp_path):
    assert (HERE / f"{demo.name}.toml").read_text(encoding="utf-8") == trial_text(demo)
    write_truth_table(tmp_path / "truth.csv", truth_of(demo.scene, motion_of(demo)))
    bundled = np.genfromtxt(HERE / f"{demo.name}.truth.csv", delimiter=",", skip_header=1)
    made = np.genfromtxt(tmp_path / "truth.csv", delimiter=",", skip_header=1)
    np.testing.assert_allclose(bundled, made, rtol=0, atol=2e-6)  # the last printed digit


@pytest.mark.parametrize("demo", DEMOS, ids=lambda demo: demo.name)
def test_a_bundled_clip_is_small_and_shows_what_the_renderer_draws(demo):
    path = HERE / f"{demo.name}.mp4"
    assert path.stat().st_size < 3_000_000
    motion = motion_of(demo)
    with av.open(str(path)) as container:
        stream = container.streams.video[0]
        assert (stream.width, stream.height, stream.average_rate) == (1920, 1080, 30)
        assert stream.codec_context.name == "h264"
        assert stream.frames == len(truth_of(demo.scene, motion).frame_s)
        frame = next(container.decode(stream))
        luma = np.frombuffer(frame.planes[0], np.uint8).reshape(1080, -1)[:, :1920].astype(float)
    drawn = Renderer(demo.scene).frame(0.0, motion)
    assert np.sqrt(np.mean((luma - drawn) ** 2)) < 4.0  # grey levels; noise of 1 and what coding smooths away


def test_bundled_trials_cover_both_directions_and_the_asked_sizes():
    by_name = {demo.name: np.array(demo.wheel_deg) for demo in DEMOS}
    for wheel_deg in by_name.values():
        assert (wheel_deg > 0).any()
        assert (wheel_deg < 0).any()
    turned = np.abs([turn.heading_change_deg for turn in motion_of(DEMOS[2]).turns])
    assert turned.min() == pytest.approx(45, abs=3)
    assert turned.max() == pytest.approx(360, abs=12)
