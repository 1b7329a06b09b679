"""A short rendered clip from file to turns: truth, sign by construction, and no turn lost or invented."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import Camera, Card, Drive, Light, Scene, Sensor, render_clip, spin_motion
from floorswing.pipeline import measure_clip
from vision.errors import MarkersNotFound
from vision.records import MarkerSetup

CAMERA = Camera(width_px=960, height_px=540, focal_px=900.0, distance_mm=1000.0, tilt_deg=18.0, k1=-0.08)
CARDS = tuple(Card(card_id=10 + k, x_mm=x, y_mm=y) for k, (x, y) in enumerate([(-330, -120), (330, 150), (320, -150)]))
DRIVE = Drive(rate_wheel_deg_s=420.0)
WHEEL_DEG = (190.0, -280.0, 190.0)


@pytest.fixture(scope="module")
def filmed(tmp_path_factory):
    scene = Scene(camera=CAMERA, cards=CARDS, sensor=Sensor(exposure_s=0.004), light=Light(gradient=0.2), seed=5)
    motion = spin_motion(WHEEL_DEG, drive=DRIVE, seed=5, rest_s=0.55, start_delay_s=0.4, start=(20.0, -10.0, 35.0))
    path = tmp_path_factory.mktemp("clip") / "short.mp4"
    truth = render_clip(scene, motion, path, bitrate=6_000_000)
    return path, truth, measure_clip(path, setup())


def setup(**changes):
    return MarkerSetup(**{"marker_side_mm": 40.0, "card_side_mm": 60.0} | changes)


def errors_deg(result, truth):
    return np.array(
        [
            turn.heading_change_deg - true.heading_change_deg
            for turn, true in zip(result.turns, truth.turns, strict=True)
        ]
    )


def test_every_turn_is_found_with_its_sign(filmed):
    """Positive wheel degrees turn the cart counter-clockwise seen from above, and so does the tool say."""
    _, truth, result = filmed
    assert len(result.turns) == 3
    assert [np.sign(turn.heading_change_deg) for turn in result.turns] == [1, -1, 1]
    assert not result.events
    assert_allclose([turn.heading_change_deg for turn in truth.turns], [89.0, -131.0, 89.0], rtol=0.1)


def test_turns_are_true_and_their_uncertainty_too(filmed):
    _, truth, result = filmed
    errors, us = errors_deg(result, truth), np.array([turn.u_heading_change_deg for turn in result.turns])
    assert np.sqrt(np.mean(errors**2)) < 0.03  # deg, on small coded pictures
    assert np.all(np.abs(errors) < 3.0 * us)
    assert np.all(us < 0.05)


def test_times_and_the_floor_frame(filmed):
    _, truth, result = filmed
    for turn, true in zip(result.turns, truth.turns, strict=True):
        assert_allclose([turn.start_s, turn.end_s], [true.start_s, true.end_s], atol=0.12)
    # Card 10 lies straight, so headings in its frame are those of the floor but for the deck's parallax.
    assert_allclose(result.turns[0].start_heading_deg, truth.turns[0].start_heading_deg, atol=0.5)
    centre = np.array([[turn.centre_x_mm, turn.centre_y_mm] for turn in result.turns])
    assert np.ptp(centre, axis=0).max() < 20.0
    assert all(turn.wander_mm < 5.0 for turn in result.turns)


def test_headings_of_single_frames_follow_the_truth(filmed):
    _, truth, result = filmed
    track = result.track
    assert_allclose(track.time_s, truth.frame_s, atol=1e-4)
    seen = np.isfinite(track.heading_deg)
    assert seen.mean() > 0.98
    away = track.heading_deg[seen] - truth.frame_heading_deg[seen]
    assert np.std(away) < 0.1  # deg, moving frames included
    assert {"rest", "turn"} == set(track.state)


def test_without_cards_the_turns_agree_within_their_uncertainty(filmed):
    """Cards take part in the calibration, so the two differ, by less than either is sure of itself."""
    path, truth, result = filmed
    bare = measure_clip(path, setup(card_ids=(), card_side_mm=None))
    assert_allclose(errors_deg(bare, truth), errors_deg(result, truth), atol=result.turns[0].u_heading_change_deg)
    assert result.plane["cards_and_rotation"]["heading_change_deg"] < 0.02
    assert bare.plane["cards_and_rotation"] is None


def test_swapped_markers_point_the_other_way_and_turn_the_same(filmed):
    path, _, result = filmed
    back = measure_clip(path, setup(fore_id=1, aft_id=0))
    assert_allclose(errors_deg(back, result), 0.0, atol=2e-3)
    across = np.array([turn.start_heading_deg for turn in back.turns]) - [t.start_heading_deg for t in result.turns]
    assert_allclose((across % 360.0), 180.0, atol=0.5)


def test_wrong_ids_say_what_was_looked_for(filmed):
    path, _, _ = filmed
    with pytest.raises(MarkersNotFound, match="7 and 8") as caught:
        measure_clip(path, setup(fore_id=7, aft_id=8))
    assert "\n" not in str(caught.value)
    with pytest.raises(MarkersNotFound, match="only robot marker 0"):
        measure_clip(path, setup(aft_id=8))
