"""The named scenes: within their ranges, told truthfully, and each one can be rendered."""

from dataclasses import replace

import numpy as np
import pytest

from demo_videos.render import Renderer, project, render_clip
from demo_videos.render.clip import truth_of
from demo_videos.render.scenes import accuracy_case, damage_file, robustness_rows, row

ROWS = robustness_rows()


def test_accuracy_cases_stay_in_their_ranges_and_fill_them():
    cases = [accuracy_case(seed, n_turns=1) for seed in range(40)]
    for name, low, high in (
        ("tilt_deg", 5, 25),
        ("k1", -0.15, 0),
        ("deck_height_mm", 30, 150),
        ("distance_mm", 1200, 2500),
        ("marker_side_px", 30, 60),
        ("off_centre_mm", 0, 400),
    ):
        values = np.array([case.drawn[name] for case in cases])
        assert values.min() >= low - 1e-9
        assert values.max() <= high + 1e-9
        assert np.ptp(values) > 0.75 * (high - low)
    assert sum(bool(case.drawn["phone_picture"]) for case in cases) == 20
    assert all(3 <= len(case.scene.cards) <= 6 for case in cases)


@pytest.mark.parametrize("seed", [0, 7, 19])
def test_the_cart_and_the_cards_of_an_accuracy_case_are_in_the_picture(seed):
    case = accuracy_case(seed, n_turns=4)
    camera, robot = case.scene.camera, case.scene.robot
    limits = np.array([camera.width_px - 1, camera.height_px - 1])
    pose = case.motion.at(np.linspace(0, case.motion.duration_s, 60))
    for mount in (robot.fore, robot.aft):
        x_mm = pose.x_mm + mount.x_mm * np.cos(pose.heading_rad) - mount.y_mm * np.sin(pose.heading_rad)
        y_mm = pose.y_mm + mount.x_mm * np.sin(pose.heading_rad) + mount.y_mm * np.cos(pose.heading_rad)
        px = project(camera, np.column_stack([x_mm, y_mm, np.full(60, robot.deck_height_mm)]))
        assert np.all((px > 40) & (px < limits - 40))
    cards = project(camera, [[card.x_mm, card.y_mm, 0.0] for card in case.scene.cards])
    assert np.all((cards > 20) & (cards < limits - 20))


def test_options_of_an_accuracy_case():
    bare, held, stepped = (
        accuracy_case(3, cards=False, n_turns=1),
        accuracy_case(3, hand_held=True, n_turns=1),
        accuracy_case(3, height_step_mm=20.0, n_turns=1),
    )
    assert bare.scene.cards == ()
    assert held.scene.camera.moves
    assert held.scene.cards
    assert stepped.scene.robot.fore.extra_height_mm == 20.0


def test_rows_have_names_of_their_own_and_can_be_had_by_them():
    names = [item.name for item in ROWS]
    assert len(set(names)) == len(names) > 75
    assert row("missing_turn").motion.commands[2] == 190.0
    with pytest.raises(ValueError, match="no row is named 'flood'"):
        row("flood")


@pytest.mark.parametrize("item", ROWS, ids=lambda item: item.name)
def test_the_truth_of_a_row_holds_what_is_expected(item):
    truth = truth_of(item.scene, item.motion)
    camera_or_sight = {"camera moved", "hidden"}  # these come from the scene, not from the cart's motion
    assert set(item.expected_events) - camera_or_sight <= {event.kind for event in truth.events}
    assert truth.frame_s[0] == 0.0
    assert np.all(np.diff(truth.frame_s) >= 0.0)
    assert truth.turns
    assert max(turn.start_s for turn in truth.turns) < truth.frame_s[-1]


SMALL = {"width_px": 320, "height_px": 180, "focal_px": 262.5}


@pytest.mark.parametrize("item", [item for item in ROWS if item.scene.camera.width_px == 1280], ids=lambda i: i.name)
def test_every_row_can_be_rendered(item):
    scene = replace(item.scene, camera=replace(item.scene.camera, **SMALL))
    renderer = Renderer(scene)
    first = renderer.frame(0.0, item.motion)
    middle = renderer.frame(0.5 * item.motion.duration_s, item.motion)
    assert first.shape == middle.shape == (180, 320)
    assert first.std() > 3.0
    assert not np.array_equal(first, middle)


def test_damage_cuts_or_spoils_a_file(tmp_path):
    path = tmp_path / "clip.bin"
    for name in ("cut_off", "spoilt", "plain"):
        path.write_bytes(bytes(10000))
        damage_file(path, row(name))
        data = path.read_bytes()
        if name == "cut_off":
            assert data == bytes(6000)
        elif name == "spoilt":
            assert len(data) == 10000
            assert not any(data[:4000])
            assert any(data[4000:4600])
            assert not any(data[4600:])
        else:
            assert data == bytes(10000)


def test_a_clip_that_starts_in_a_turn_says_so(tmp_path):
    item = row("starts_in_turn")
    small = replace(item.scene.camera, **SMALL)
    scene = replace(item.scene, camera=small, timing=replace(item.scene.timing, duration_s=0.2))
    truth = render_clip(scene, item.motion, tmp_path / "clip.mp4", crf=30)
    assert truth.turns[0].start_s == pytest.approx(-0.5)
    assert len(truth.turns) == 1
