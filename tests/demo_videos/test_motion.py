"""The slip model: known limits in closed form, and the truth it hands out."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import (
    Drive,
    Lift,
    Missed,
    Push,
    Spin,
    Straight,
    TwoPushes,
    Wait,
    play,
    spin_motion,
)

IDEAL = Drive(
    contact_fraction=0.25,
    contact_difference=0.0,
    contact_scatter=0.0,
    contact_wander=0.0,
    drag_creep=0.0,
    drag_scatter=0.0,
)
TRACK_MM = 118.0 + 2 * 0.25 * 20.0


def changes(motion):
    return np.array([turn.heading_change_deg for turn in motion.turns])


def test_without_slip_a_turn_is_wheel_diameter_times_wheel_degrees_over_the_track():
    """Rolling without slip: both wheels on a circle whose diameter is the distance of the contact lines."""
    wheel_deg = np.array([190.0, -95.0, 760.0])
    assert_allclose(changes(spin_motion(wheel_deg, drive=IDEAL)), wheel_deg * 64.0 / TRACK_MM, rtol=1e-9)


def test_without_slip_the_cart_spins_on_the_spot():
    motion = spin_motion([700.0], drive=IDEAL, start=(12.0, -5.0, 30.0))
    assert_allclose(motion.state[:2] - [[12.0], [-5.0]], 0.0, atol=1e-9)


def test_unequal_contact_lines_move_the_spin_centre():
    """With equal and opposite rim speeds the centre lies midway between the two contact points."""
    drive = Drive(
        contact_fraction=0.25, contact_difference=0.2, contact_scatter=0, contact_wander=0, drag_creep=0, drag_scatter=0
    )
    motion = spin_motion([760.0], drive=drive)
    left_mm, right_mm = 59.0 + 20.0 * 0.35, 59.0 + 20.0 * 0.15
    offset_mm = abs(left_mm - right_mm) / 2.0
    spread = np.ptp(motion.state[:2], axis=1)
    assert_allclose(spread, 2.0 * offset_mm, rtol=1e-4)  # a whole circle is swept


def test_reversal_loses_the_dead_band_and_going_on_does_not():
    drive = Drive(
        contact_fraction=0.25,
        contact_difference=0,
        contact_scatter=0,
        contact_wander=0,
        drag_creep=0,
        drag_scatter=0,
        backlash_wheel_deg=7.0,
        backlash_scatter=0.0,
    )
    turned = changes(spin_motion([190.0, 190.0, -190.0, -190.0, 190.0], drive=drive)) * TRACK_MM / 64.0
    assert 183.0 - 1e-6 < turned[0] <= 190.0  # slack unknown at the start
    assert_allclose(turned[1:], [190.0, -183.0, -190.0, 183.0], atol=1e-9)


def test_dragged_wheels_take_their_share():
    drive = Drive(
        contact_fraction=0.25,
        contact_difference=0,
        contact_scatter=0,
        contact_wander=0,
        drag_creep=0.05,
        drag_scatter=0,
    )
    motion = spin_motion([190.0], drive=drive)
    assert_allclose(changes(motion), [190.0 * 64.0 / TRACK_MM * 0.95], rtol=1e-9)
    assert np.ptp(motion.state[:2]) > 1.0  # mm; the spin centre moves back, so the axle swings


def test_grain_acts_with_two_cycles_a_revolution():
    """d(heading)/d(ideal) = 1 + g cos 2(heading - axis); to first order a turn from a to b gains
    g sin(b - a) cos(a + b - 2 axis), from the product-to-sum identity."""
    grain, axis_deg = 0.01, 25.0
    drive = Drive(
        contact_fraction=0.25,
        contact_difference=0,
        contact_scatter=0,
        contact_wander=0,
        drag_creep=0,
        drag_scatter=0,
        grain=grain,
        grain_axis_deg=axis_deg,
    )
    motion = spin_motion([194.0] * 8, drive=drive)
    start, end = (
        np.deg2rad([getattr(turn, name) for turn in motion.turns]) for name in ("start_heading_deg", "end_heading_deg")
    )
    predicted = grain * np.sin(end - start) * np.cos(start + end - 2 * np.deg2rad(axis_deg))
    gained = np.deg2rad(changes(motion) - 194.0 * 64.0 / TRACK_MM)
    assert_allclose(gained, predicted, atol=2e-4)  # rad; second order in the grain


def test_scatter_comes_from_the_contact_lines():
    """Spread of repeated turns: gain scatter = tyre width x fraction scatter of two wheels over the track."""
    drive = Drive(
        contact_fraction=0.5,
        contact_difference=0,
        contact_scatter=0.03,
        contact_wander=0,
        drag_creep=0,
        drag_scatter=0,
        rate_wheel_deg_s=900.0,
        acceleration_wheel_deg_s2=9000.0,
    )
    turned = changes(spin_motion([95.0] * 400, drive=drive, rest_s=0.01, seed=3))
    expected = 20.0 * 0.03 * np.sqrt(2.0) / 138.0
    assert turned.std() / turned.mean() == pytest.approx(expected, rel=4 / np.sqrt(2 * 400))  # four standard errors


def test_rate_and_acceleration_keep_their_limits():
    drive = Drive(rate_wheel_deg_s=160.0, acceleration_wheel_deg_s2=600.0)
    wheel = spin_motion([190.0], drive=drive).state[7]
    assert wheel[-1] == pytest.approx(190.0)
    rate = np.diff(wheel) / 0.001
    assert rate.max() == pytest.approx(160.0, rel=1e-3)
    assert np.abs(np.diff(rate)).max() / 0.001 < 600.0 * 1.05


def test_an_overshoot_comes_back():
    drive = Drive(overshoot_wheel_deg=5.0)
    motion = spin_motion([190.0], drive=drive, seed=2)
    wheel = motion.state[7]
    assert wheel.max() == pytest.approx(195.0, abs=0.05)
    assert wheel[-1] == pytest.approx(190.0)


def test_same_seed_same_motion():
    one, two = (spin_motion([190.0, -190.0], seed=5) for _ in range(2))
    assert np.array_equal(one.state, two.state)
    assert not np.array_equal(one.state, spin_motion([190.0, -190.0], seed=6).state)


def test_a_script_is_told_as_turns_events_and_commands():
    motion = play(
        [
            Spin(wheel_deg=190.0),
            Missed(wheel_deg=95.0),
            Push(heading_deg=-33.0),
            Straight(distance_mm=100.0),
            Lift(dx_mm=40.0, heading_deg=15.0),
            TwoPushes(wheel_deg=-190.0),
            Wait(duration_s=0.5),
        ],
        drive=IDEAL,
        rest_s=0.8,
    )
    assert motion.commands == (190.0, 95.0, -190.0)
    assert [turn.commanded_wheel_deg for turn in motion.turns] == [190.0, None, -190.0]
    assert [event.kind for event in motion.events] == [
        "missing turn",
        "uncommanded turn",
        "driven",
        "handled",
        "two pushes",
    ]
    assert_allclose(changes(motion), [95.0, -33.0, -95.0], atol=1e-6)
    driven, handled = motion.events[2:4]
    before, after = motion.at(driven.start_s), motion.at(driven.end_s + 0.4)
    assert np.hypot(after.x_mm - before.x_mm, after.y_mm - before.y_mm)[0] == pytest.approx(100.0, rel=1e-3)
    assert motion.at(0.5 * (handled.start_s + handled.end_s)).lift_mm[0] == pytest.approx(90.0)
    assert motion.at(handled.end_s + 0.1).lift_mm[0] == 0.0


def test_truth_headings_are_those_of_the_rests():
    motion = spin_motion([190.0, -95.0], seed=8, rest_s=0.7)
    for turn in motion.turns:
        assert motion.heading_deg(turn.start_s - 0.3)[0] == pytest.approx(turn.start_heading_deg, abs=1e-9)
        assert motion.heading_deg(turn.end_s + 0.3)[0] == pytest.approx(turn.end_heading_deg, abs=1e-9)
    assert motion.turns[1].start_s - motion.turns[0].end_s == pytest.approx(0.7)
