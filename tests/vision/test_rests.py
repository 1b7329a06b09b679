import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from tests.vision.synthetic import profile, seen_from
from vision.plane import N_GLOBAL
from vision.rests import Stretch, bridge_pauses, find_motion, stretches
from vision.turns import split_turns

NO_COV = np.zeros((N_GLOBAL, N_GLOBAL))


def motion_of(time_s, heading_deg, *, noise_deg=0.003, noise_mm=0.01, seed=0, x_mm=0.0):
    rng = np.random.default_rng(seed)
    n = len(time_s)
    heading = heading_deg + rng.normal(0, noise_deg, n)
    x, y = x_mm + rng.normal(0, noise_mm, n), rng.normal(0, noise_mm, n)
    return find_motion(time_s, heading, x, y, reach_mm=65.0)


@pytest.mark.parametrize("noise_deg", [1e-4, 0.003, 0.05])
def test_motion_is_told_by_the_clips_own_noise(noise_deg):
    time_s, heading = profile([90.0, -45.0, 180.0])
    motion = motion_of(time_s, heading, noise_deg=noise_deg, noise_mm=3.0 * noise_deg)
    assert len(stretches(motion.moving)) == 3
    assert_allclose(motion.noise_deg, noise_deg, rtol=0.35)
    still = np.concatenate([[False], np.diff(heading) == 0]) & np.append(np.diff(heading) == 0, False)
    far = still & ~np.convolve(~still, np.ones(9), "same").astype(bool)
    assert not motion.moving[far].any()


def test_rates_of_a_steady_spin():
    time_s = np.arange(60) / 30.0
    motion = motion_of(time_s, 75.0 * time_s)
    assert_allclose(motion.rate_deg_s, 75.0, atol=0.2)
    uneven = np.sort(np.concatenate([time_s, time_s[20:30] + 0.011]))
    assert_allclose(motion_of(uneven, 75.0 * uneven).rate_deg_s, 75.0, atol=0.2)


def test_a_robot_that_never_moves():
    time_s = np.arange(90) / 30.0
    assert not motion_of(time_s, np.zeros(90)).moving.any()
    assert not motion_of(time_s[:2], np.zeros(2)).moving.any()


def test_a_slide_without_rotation_is_motion():
    time_s = np.arange(90) / 30.0
    x_mm = 40.0 * np.clip((time_s - 1.0) / 0.8, 0.0, 1.0)
    found = stretches(motion_of(time_s, np.zeros(90), x_mm=x_mm).moving)
    assert len(found) == 1
    assert abs(time_s[found[0].first] - 1.0) < 0.12
    assert abs(time_s[found[0].last] - 1.8) < 0.12


def test_stretches():
    flag = np.array([True, True, False, True, False, False, True])
    assert stretches(flag) == [Stretch(0, 1), Stretch(3, 3), Stretch(6, 6)]
    assert [stretch.n_frames for stretch in stretches(flag)] == [2, 1, 1]
    assert stretches(np.zeros(4, bool)) == []


def test_short_pauses_are_bridged_but_not_at_the_ends():
    time_s = np.arange(30) / 30.0
    moving = np.ones(30, bool)
    moving[:3] = moving[10:13] = moving[-3:] = False
    bridged = bridge_pauses(moving, time_s)
    assert_array_equal(np.flatnonzero(~bridged), [0, 1, 2, 27, 28, 29])
    moving[10:18] = False
    assert_array_equal(bridge_pauses(moving, time_s), moving)


def test_creep_after_a_turn_is_not_a_turn_of_its_own():
    """The heading creeps on by 0.3 deg over half a second: part of the turn, or of the rest; never a second turn."""
    time_s, heading = profile([90.0, 90.0], rest_s=2.0)
    for start_s in (3.15, 6.3):
        heading = heading + 0.3 * (1.0 - np.exp(-np.clip(time_s - start_s, 0.0, None) / 0.2))
    result = split_turns(seen_from(time_s, heading), NO_COV)
    assert len(result.turns) == 2
    assert_allclose([turn.heading_change_deg for turn in result.turns], 90.3, atol=0.05)


def test_fast_spins_of_many_revolutions_are_counted():
    time_s, heading = profile([1440.0, -2160.0, 720.5], rate_deg_s=375.0)
    result = split_turns(seen_from(time_s, heading), NO_COV)
    assert_allclose([turn.heading_change_deg for turn in result.turns], [1440.0, -2160.0, 720.5], atol=0.02)
    assert_allclose(result.turns[0].peak_rate_deg_s, 375.0, rtol=0.12)


@pytest.mark.parametrize("push_s", [0.05, 0.3])
def test_a_small_push_is_a_nudge_and_no_turn(push_s):
    time_s, heading = profile([90.0, 90.0], rate_deg_s=60.0, rest_s=2.0)
    heading = heading + 0.4 * np.clip((time_s - 4.7) / push_s, 0.0, 1.0)
    result = split_turns(seen_from(time_s, heading, noise_deg=0.001), NO_COV)
    assert_allclose([turn.heading_change_deg for turn in result.turns], [90.0, 90.0], atol=0.02)
    assert [event.kind for event in result.events] == ["nudge"]
    assert result.turns[1].flags == ("handled_before",)
