"""Pairing turns with commands: simulated runs whose true pairing is known."""

from __future__ import annotations

import time

import numpy as np
import pytest

from calib.errors import CalibError
from calib.match import P_MISSING, P_NOT_FILMED, match_turns

MIXED = [100.0, 190.0, 380.0, -100.0, -190.0, -380.0]


def drive(rng, wheel_deg, *, gain=0.47, dead_band_wheel_deg=7.0, spread=0.02, dropped=()):
    """Turns of a robot with a dead band, some of them lost; returns headings and the true commands."""
    wheel = np.asarray(wheel_deg, dtype=float)
    sign = np.sign(wheel)
    back = np.r_[False, sign[1:] != sign[:-1]]
    heading = gain * (wheel - sign * dead_band_wheel_deg * back)
    heading *= 1 + rng.normal(0, spread, heading.size)
    kept = [i for i in range(wheel.size) if i not in dropped]
    return heading[kept], kept


def matched(heading, wheel, **more):
    return match_turns(heading, np.full(len(heading), 0.03), wheel, **more)


def test_complete_run_pairs_one_to_one():
    wheel = [190, 190, -190, -190] * 5
    heading, kept = drive(np.random.default_rng(1), wheel)
    match = matched(heading, wheel)
    assert list(match.command_index) == kept
    assert match.missing == ()
    assert match.extra == ()
    assert match.probability.min() > 0.99
    assert match.gain_deg_per_wheel_deg == pytest.approx(0.47, rel=0.02)


@pytest.mark.parametrize("gain", [0.12, 0.3, 0.8, 1.7])
def test_gain_is_found_not_assumed(gain):
    rng = np.random.default_rng(2)
    wheel = rng.choice(MIXED, 40)
    heading, kept = drive(rng, wheel, gain=gain, dropped=(3, 20))
    match = matched(heading, wheel)
    assert sum(a != b for a, b in zip(match.command_index, kept, strict=True)) <= 1
    assert match.gain_deg_per_wheel_deg == pytest.approx(gain, rel=0.03)


@pytest.mark.parametrize("seed", range(5))
def test_missing_turns_in_a_mixed_order(seed):
    rng = np.random.default_rng(seed)
    wheel = rng.choice(MIXED, 60)
    heading, kept = drive(rng, wheel, dropped=(10, 31, 32, 50))
    match = matched(heading, wheel)
    wrong = [a != b for a, b in zip(match.command_index, kept, strict=True)]
    # where two equal commands follow each other, which of them was lost cannot be known: then it is said
    assert all(match.probability[i] < 0.9 for i in np.flatnonzero(wrong))
    assert all(wheel[match.command_index[i]] == wheel[kept[i]] for i in np.flatnonzero(wrong))


def test_extra_turn_is_left_without_a_command():
    wheel = [190, 210, -190, -170] * 5
    heading, _ = drive(np.random.default_rng(4), wheel)
    match = matched(np.insert(heading, 7, -33.0), wheel)
    assert match.extra == (7,)
    assert match.missing == ()


def test_equal_commands_with_one_missing_say_that_the_place_is_unknown():
    match = matched(np.full(9, 90.0), [190.0] * 10)
    # turn i is command i if the missing one comes later, command i + 1 if it came before; the ends weigh more
    place = np.array([P_NOT_FILMED, *[P_MISSING] * 8, P_NOT_FILMED])
    first = np.array([place[i + 1 :].sum() / place.sum() for i in range(9)])
    np.testing.assert_allclose(match.probability, np.maximum(first, 1 - first), atol=0.02)
    assert len(match.missing) == 1


def test_a_stray_keeps_its_command():
    wheel = [190, 190, -190, -190] * 4
    heading, kept = drive(np.random.default_rng(5), wheel)
    heading[6] *= 0.75
    assert list(matched(heading, wheel).command_index) == kept


def test_reversal_with_a_large_dead_band():
    wheel = [100, -100, 60, -60, 60, 60, -60, 100] * 4
    heading, kept = drive(np.random.default_rng(6), wheel, dead_band_wheel_deg=20)
    assert list(matched(heading, wheel).command_index) == kept


def test_unusable_turn_keeps_its_place():
    wheel = [190, 380, -190, -380]
    heading = np.array([89.0, 12.0, -90.0, -179.0])
    match = matched(heading, wheel, usable=[True, False, True, True])
    assert match.command_index == (0, 1, 2, 3)
    heading[1] = np.nan
    assert matched(heading, wheel).command_index == (0, 1, 2, 3)


def test_sign_mistake_is_noticed():
    wheel = [190, 200, -190, -170] * 4
    heading, _ = drive(np.random.default_rng(7), wheel)
    assert matched(-heading, wheel).mirrored
    assert not matched(heading, wheel).mirrored


def test_no_turns_no_commands_and_one_turn():
    assert matched([], [190.0, 200.0]).missing == (0, 1)
    assert matched([90.0], []).extra == (0,)
    one = matched([90.0], [190.0])
    assert one.command_index == (0,)
    assert one.probability[0] > 0.99


def test_one_turn_of_two_possible_commands_stays_open():
    match = matched([90.0], [190.0, 380.0])
    assert 0.5 < match.probability[0] < 0.9


def test_probability_is_honest():
    """Pairings said to hold with probability p hold in a fraction p of simulated runs (sampling noise)."""
    rng = np.random.default_rng(8)
    said, right = [], []
    for _ in range(60):
        wheel = rng.choice([150.0, 170.0, -150.0], 12)
        lost = tuple(np.flatnonzero(rng.random(12) < 0.1))
        heading, kept = drive(rng, wheel, spread=0.03, dropped=lost)
        match = matched(heading, wheel)
        said.extend(match.probability)
        right.extend(a == b for a, b in zip(match.command_index, kept, strict=True))
    # errors within one run come together, so the spread is that of about 60 runs rather than 600 turns
    assert abs(np.mean(right) - np.mean(said)) < 0.06


@pytest.mark.parametrize("bad", [[190.0, 0.0], [190.0, np.nan]])
def test_impossible_command_is_refused(bad):
    with pytest.raises(CalibError, match="command 2"):
        matched([90.0, 90.0], bad)


def test_lengths_must_agree():
    with pytest.raises(CalibError, match="uncertainties"):
        match_turns([90.0, 91.0], [0.1], [190.0, 190.0])


def test_five_hundred_turns_are_quick():
    rng = np.random.default_rng(9)
    wheel = rng.choice(MIXED, 500)
    heading, _ = drive(rng, wheel, dropped=(3, 77, 200))
    start = time.process_time()
    match = matched(heading, wheel)
    assert time.process_time() - start < 6.0  # about 1 s on an idle core; room for a busy one
    assert len(match.missing) == 3
