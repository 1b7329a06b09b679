"""``floorswing preview``: every piece of advice is given where its fault is, and not where it is not."""

import json
from dataclasses import replace

import cv2
import numpy as np
import pytest
from click.testing import CliRunner

import floorswing
from demo_videos.render import (
    Card,
    Floor,
    HandHeld,
    Light,
    Mount,
    Robot,
    Sensor,
    render_clip,
    render_frames,
    spin_motion,
)
from demo_videos.render.motion import Drive
from demo_videos.render.scene import Timing
from demo_videos.render.scenes import plain_scene
from floorswing import previewing
from floorswing.cli import cli
from floorswing.previewing import preview
from vision.errors import PlaneError

GOOD = plain_scene(camera=replace(plain_scene().camera, distance_mm=950.0))
STANDING = spin_motion([190.0], start_delay_s=1.5, rest_s=0.5, start=(0.0, 0.0, 35.0))
TURNING = spin_motion(
    [190.0], drive=Drive(rate_wheel_deg_s=200.0), start_delay_s=0.4, rest_s=0.3, start=(0.0, 0.0, 35.0)
)
ALONG = spin_motion([190.0], start_delay_s=1.5, rest_s=0.5)


def photo(path, scene, motion=STANDING):
    _, luma = next(render_frames(scene, motion))
    assert cv2.imwrite(str(path), luma)
    return path


def clip(path, scene, motion=STANDING, *, n_frames=16, **storage):
    fps = scene.timing.fps
    short = replace(scene, timing=replace(scene.timing, duration_s=n_frames / fps))
    render_clip(short, motion, path, **{"bitrate": 10_000_000, **storage})
    return path


def kinds(found):
    return {item.kind for item in found.advice}


@pytest.fixture(scope="module")
def good_clip(tmp_path_factory):
    return clip(tmp_path_factory.mktemp("good") / "good.mp4", GOOD, TURNING, n_frames=40)


@pytest.fixture(scope="module")
def good_photo(tmp_path_factory):
    return photo(tmp_path_factory.mktemp("good") / "good.png", GOOD)


def test_a_good_set_up_is_told_that_nothing_needs_changing(good_clip, good_photo):
    for path in (good_clip, good_photo):
        found = preview(path, want_deg=0.2)
        assert kinds(found) == set()
        assert found.verdict == "will do"
        assert 0.0005 < found.u_deg < 0.02


def two_marks(**changes):
    robot = Robot()
    return replace(robot, fore=replace(robot.fore, **changes), aft=replace(robot.aft, **changes))


ROBOT = Robot()
STILL_FAULTS = {
    "closer": replace(GOOD, camera=replace(GOOD.camera, distance_mm=2200.0)),
    "contrast": replace(GOOD, robot=two_marks(ink=0.6)),
    "noise": replace(GOOD, sensor=Sensor(noise_grey=16.0)),
    "too bright": replace(GOOD, light=Light(level=1.9)),
    "focus": replace(GOOD, sensor=Sensor(psf_px=2.8)),
    "tilt": replace(GOOD, camera=replace(GOOD.camera, tilt_deg=45.0)),
    "apart": replace(GOOD, robot=replace(
        ROBOT, fore=Mount(marker_id=0, x_mm=27.0), aft=Mount(marker_id=1, x_mm=-29.0))),
    "edge": replace(GOOD, camera=replace(GOOD.camera, look_at_mm=(0.0, 228.0))),
    "twice": replace(GOOD, cards=(*GOOD.cards, Card(card_id=10, x_mm=150.0, y_mm=190.0))),
    "strangers": replace(GOOD, cards=(*GOOD.cards, Card(card_id=77, x_mm=150.0, y_mm=190.0))),
}  # fmt: skip


@pytest.mark.parametrize("kind", STILL_FAULTS)
def test_a_photo_with_a_fault_is_told_so(tmp_path, kind):
    motion = ALONG if kind == "edge" else STANDING
    found = preview(photo(tmp_path / "still.png", STILL_FAULTS[kind], motion))
    assert found.glimpse is not None, found.complaint
    assert kind in kinds(found)


def test_codes_that_are_alike_are_told(tmp_path, good_photo):
    alike = int(np.argmin(_distances("4X4_1000", 0)[1:])) + 1
    robot = replace(ROBOT, dictionary="4X4_1000", aft=replace(ROBOT.aft, marker_id=alike))
    few = replace(GOOD, cards=(), robot=robot)
    trial = trial_file(tmp_path, f'[markers]\ndictionary = "4X4_1000"\nfore = 0\naft = {alike}\n')
    found = preview(photo(tmp_path / "still.png", few), trial)
    assert "alike" in kinds(found)
    assert "alike" not in kinds(preview(good_photo))


def _distances(name, marker_id):
    source = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, f"DICT_{name}"))
    bits = source.getBitsFromByteList(source.bytesList[marker_id : marker_id + 1], source.markerSize)
    return [source.getDistanceToId(bits, other) for other in range(200)]


def trial_file(folder, markers=""):
    path = folder / "trial.toml"
    path.write_text(
        '[robot]\nname = "cart"\nwheel_diameter_mm = 64.0\nmarker_side_mm = 40.0\n[floor]\nsurface = "lino"\n'
        f"[commands]\nwheel_deg = [190, -190]\n{markers}",
        encoding="utf-8",
    )
    return path


HELD = replace(GOOD, camera=replace(GOOD.camera, moves=(HandHeld(seed=3, shift_mm=12.0, angle_deg=1.0),)))
CLIP_FAULTS = {
    "unsteady": (HELD, STANDING, {"n_frames": 10}),
    "cards": (replace(GOOD, cards=(), floor=Floor(kind="plain", contrast=0.0)), STANDING, {}),
    "bit rate": (GOOD, STANDING, {"bitrate": 150_000}),
    "frame rate": (replace(GOOD, timing=Timing(fps=15.0)), STANDING, {}),
    "flicker": (replace(GOOD, light=Light(flicker=0.12, flicker_hz=47.0)), STANDING, {}),
    "shutter": (replace(GOOD, sensor=Sensor(exposure_s=0.03)), TURNING, {"n_frames": 30}),
}


@pytest.mark.parametrize("kind", CLIP_FAULTS)
def test_a_clip_with_a_fault_is_told_so(tmp_path, kind):
    scene, motion, storage = CLIP_FAULTS[kind]
    found = preview(clip(tmp_path / "short.mp4", scene, motion, **storage), rate_deg_s=400.0)
    assert found.glimpse is not None, found.complaint
    assert kind in kinds(found)


def test_a_camera_in_the_hand_without_cards_will_not_do(tmp_path):
    loose = replace(HELD, cards=(), floor=Floor(kind="cork", contrast=1.0))
    found = preview(clip(tmp_path / "loose.mp4", loose, n_frames=24), want_deg=5.0)
    assert found.glimpse.camera.loose
    assert "unsteady" in kinds(found)
    assert found.verdict == "will not do"


def test_the_gain_of_a_cure_is_foreseen_and_the_largest_comes_first(tmp_path):
    bad = replace(GOOD, camera=replace(GOOD.camera, distance_mm=1500.0), sensor=Sensor(noise_grey=12.0))
    found = preview(photo(tmp_path / "bad.png", bad))
    gains = [item.after_deg for item in found.advice if item.after_deg is not None]
    assert len(gains) >= 2
    assert gains == sorted(gains)
    assert max(gains) < found.expanded_deg


def test_a_robot_that_is_not_found_is_an_answer(tmp_path):
    cv2.imwrite(str(tmp_path / "empty.png"), np.full((300, 400), 128, np.uint8))
    answer = CliRunner().invoke(cli, ["preview", str(tmp_path / "empty.png"), "--want", "0.1"])
    assert answer.exit_code == 0, answer.output
    assert "not found" in answer.output
    assert "this will not do" in answer.output


def test_markers_seen_too_poorly_are_an_answer(good_photo, monkeypatch):
    def see_nothing(*_, **__):
        raise PlaneError("only 0 frames show both robot markers sharply enough; 3 are needed")

    monkeypatch.setattr(previewing, "prospect_of", see_nothing)
    found = preview(good_photo, want_deg=1.0)
    assert found.glimpse is None
    assert "sharply enough" in found.complaint
    assert found.verdict == "will not do"


def test_the_command_prints_figures_and_json(good_clip):
    plain = CliRunner().invoke(cli, ["preview", str(good_clip), "--want", "0.2"])
    assert plain.exit_code == 0, plain.output
    assert "Nothing needs changing." in plain.output
    assert "this will do" in plain.output
    document = json.loads(CliRunner().invoke(cli, ["preview", str(good_clip), "--json"]).output)
    assert document["verdict"] is None
    # Coverage factors of 95 %: 1.96 (normal) to 4.30 (two degrees of freedom), JCGM 100, table G.2.
    assert 1.95 < document["expanded_deg"] / document["u_heading_change_deg"] < 4.31
    assert [look["marker_id"] for look in document["markers"]] == [0, 1]


@pytest.mark.parametrize(
    ("name", "content"), [("none.mp4", None), ("none.png", None), ("bad.jpg", b"no picture"), ("bad.mp4", b"no clip")]
)
def test_a_file_that_cannot_be_read_is_one_line(tmp_path, name, content):
    if content is not None:
        (tmp_path / name).write_bytes(content)
    answer = CliRunner().invoke(cli, ["preview", str(tmp_path / name)])
    assert answer.exit_code == 2
    assert answer.output.startswith("Error: ")
    assert len(answer.output.splitlines()) == 1


def test_a_large_photo_is_looked_at_as_a_clip_would_show_it(tmp_path, good_photo):
    large = cv2.resize(cv2.imread(str(good_photo), cv2.IMREAD_GRAYSCALE), None, fx=3.0, fy=3.0)
    cv2.imwrite(str(tmp_path / "large.png"), large)
    found = floorswing.preview(tmp_path / "large.png")
    assert found.reduced == pytest.approx(0.5)
    assert max(found.prospect.image_px) == 1920
