"""Whether the camera stood still, from the floor alone: textures moved by known shifts and turns."""

import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from vision.frames import Frame
from vision.ground import STILL_PX, GroundWatcher

SIZE = (640, 360)
MIDDLE = (np.array(SIZE) - 1.0) / 2.0
REACH_PX = 0.25 * np.hypot(*SIZE)


def texture(seed=1, contrast=18.0):
    rng = np.random.default_rng(seed)
    rough = cv2.GaussianBlur(rng.normal(size=(SIZE[1] + 200, SIZE[0] + 200)), (0, 0), 2.5)
    return 128.0 + contrast * rough / rough.std()


def view(floor, *, shift=(0.0, 0.0), turn_deg=0.0, gain=1.0, rng=None, disc=None):
    """Return the picture of a floor after a turn about the picture's middle and a shift, with fresh noise."""
    c, s = np.cos(np.deg2rad(turn_deg)), np.sin(np.deg2rad(turn_deg))
    turn = np.array([[c, -s], [s, c]])
    part = np.column_stack([turn, MIDDLE + shift - turn @ (MIDDLE + 100.0)])
    picture = gain * cv2.warpAffine(floor, part, SIZE, flags=cv2.INTER_CUBIC)
    if disc is not None:
        cv2.circle(picture, disc, 60, 30.0, -1)
        cv2.circle(picture, (disc[0] + 20, disc[1]), 15, 220.0, -1)
    picture += rng.normal(scale=2.0, size=picture.shape) if rng is not None else 0.0
    return np.clip(picture, 0, 255).astype(np.uint8)


def watched(pictures, step_s=0.25):
    watcher = GroundWatcher()
    frames = [Frame(k, k * step_s, picture, False) for k, picture in enumerate(pictures)]
    assert list(watcher.passing(iter(frames))) == frames
    return watcher.path()


def test_a_still_camera_is_still_though_something_turns_in_the_middle_and_the_light_fades():
    rng, floor = np.random.default_rng(3), texture()
    discs = [(320 + round(40 * np.cos(k)), 180 + round(40 * np.sin(k))) for k in range(12)]
    path = watched([view(floor, gain=1.0 - 0.03 * k, rng=rng, disc=d) for k, d in enumerate(discs)])
    assert path.known
    assert path.stills() == [(0.0, 2.75)]
    assert path.moved_px(0.0, 2.75) == 0.0
    assert np.abs(path.shift_px).max() < 0.1  # px


@pytest.mark.parametrize(("shift", "turn_deg"), [((1.3, -0.8), 0.0), ((0.0, 0.0), 0.25), ((12.0, 7.0), -0.8)])
def test_a_knock_is_found_with_its_size(shift, turn_deg):
    rng, floor = np.random.default_rng(4), texture()
    path = watched([view(floor, rng=rng) for _ in range(6)] + [
        view(floor, shift=shift, turn_deg=turn_deg, rng=rng) for _ in range(6)
    ])  # fmt: skip
    assert len(path.stills()) == 2
    assert path.stills()[0] == (0.0, 1.25)
    assert path.moved_px(1.0, 2.0) > STILL_PX
    asked = [*shift, np.deg2rad(turn_deg) * REACH_PX]
    assert_allclose(path.shift_px[-1, :3], asked, atol=0.1)  # px


def test_a_swaying_camera_never_stands():
    rng, floor = np.random.default_rng(5), texture()
    path = watched([view(floor, shift=(6.0 * np.sin(k), 2.0 * np.cos(1.7 * k)), rng=rng) for k in range(12)])
    assert path.known
    assert path.stills() == []


def test_a_bare_floor_says_nothing():
    rng = np.random.default_rng(6)
    bare = np.full((SIZE[1] + 200, SIZE[0] + 200), 120.0)
    path = watched([view(bare, rng=rng) for _ in range(6)])
    assert not path.known
    assert np.isnan(path.moved_px(0.0, 1.0))


def test_a_robot_that_turns_on_a_bare_floor_is_not_taken_for_the_floor():
    rng = np.random.default_rng(8)
    bare, marks = np.full((SIZE[1] + 200, SIZE[0] + 200), 120.0), texture(9, contrast=60.0)
    deck = np.hypot(*(np.indices((SIZE[1], SIZE[0]))[::-1] - MIDDLE[:, None, None])) < 110.0

    def picture(turn_deg):
        return np.where(deck, view(marks, turn_deg=turn_deg), view(bare, rng=rng)).astype(np.uint8)

    corners = MIDDLE + 90.0 * np.array([[1.0, 0.0], [0.0, 1.0], [-1.0, 0.0], [0.0, -1.0]])

    def path(robot_px):
        watcher = GroundWatcher()
        for k, turn_deg in enumerate((0.0, 0.0, 0.0, 1.0, 2.0, 3.0, 3.0, 3.0)):
            watcher.see(Frame(k, 0.25 * k, picture(turn_deg), False), robot_px)
        return watcher.path()

    assert path(None).moved_px(0.0, 1.75) > 1.0  # px: without that knowledge the deck is all that can be compared
    assert not path(corners).known


def test_a_view_that_is_lost_altogether_does_not_compare():
    rng = np.random.default_rng(7)
    path = watched([view(texture(1), rng=rng) for _ in range(4)] + [view(texture(2), rng=rng) for _ in range(9)])
    assert path.moved_px(0.0, 3.0) == np.inf
    assert [round(still[0], 2) for still in path.stills()] == [0.0, 2.0]


def test_a_damaged_clip_may_change_its_size():
    rng, floor = np.random.default_rng(8), texture()
    whole = [view(floor, rng=rng) for _ in range(3)]
    path = watched([*whole, *(picture[:128, :200] for picture in whole), *whole, whole[0][:5, :7]])
    assert len(path.time_s) == 10
    assert path.moved_px(0.0, 1.0) == np.inf
