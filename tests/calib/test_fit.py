import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from calib.command import command_for
from calib.errors import CalibError, NotEnoughTurns, NotIdentified
from calib.fit import direction_difference, fit_turns
from calib.geometry import Robot, contact_fraction, effective_track_mm
from calib.intervals import Estimate
from calib.models import Model
from calib.turns import Turns, reversals
from tests.reference import numbers


def turns(wheel_deg, heading_deg, u_deg=0.0, reversed_=np.nan):
    n = len(wheel_deg)
    return Turns(
        wheel_deg=wheel_deg,
        heading_deg=heading_deg,
        u_deg=np.broadcast_to(u_deg, n),
        reversed_=np.broadcast_to(reversed_, n),
    )


def simulated(seed, *, gains=(0.48, 0.48), dead_band=0.0, scatter=0.3, u=0.01, sizes=(190.0,), n=24):
    rng = np.random.default_rng(seed)
    wheel = rng.choice(sizes, n) * rng.choice([1.0, -1.0], n)
    back = reversals(wheel, slack_known=np.arange(n) > 0)
    gain = np.where(wheel > 0, gains[0], gains[1])
    heading = np.sign(wheel) * gain * (np.abs(wheel) - dead_band * np.nan_to_num(back, nan=0.0))
    heading = heading + rng.normal(0.0, scatter, n) + rng.normal(0.0, u, n)
    return turns(wheel, heading, u, back)


def test_gain_reproduces_a_certified_line_through_the_origin():
    """Source: NIST StRD, NoInt1; commands in place of x, heading changes in place of y."""
    data = numbers("strd-noint1.csv")
    fit = fit_turns(turns(np.array(data["x"]), np.array(data["y"])))
    assert fit.model == Model(separate_gains=False, dead_band=False, law="constant")
    assert_allclose(fit.gain().value, 2.07438016528926, rtol=1e-10)
    assert_allclose(fit.gain().u, 0.0165289256198347, rtol=1e-10)
    assert_allclose(fit.scatter_deg, 3.56753034006338, rtol=1e-10)


WHEEL_MM, INNER_MM, TYRE_MM = 56.0, 92.0, 28.0


def exactly(gain):
    return Estimate(value=gain, u=0.0, low=gain, high=gain, confidence=0.95)


def full_spin(wheel_deg):
    robot = Robot(wheel_diameter_mm=WHEEL_MM, inner_track_mm=INNER_MM, tyre_width_mm=TYRE_MM)
    track = effective_track_mm(exactly(360.0 / wheel_deg), robot, 10)
    return track, contact_fraction(track, robot)


def test_rolling_of_a_full_spin():
    """Common practice, no source; the arithmetic is checked: 673 wheel degrees on 56 mm wheels for a full spin."""
    track, contact = full_spin(673.0)
    assert_allclose(np.pi * WHEEL_MM * 673.0 / 360.0, 328.9, atol=0.05)
    assert_allclose(track.value, 104.69, atol=0.005)
    assert_allclose(contact.value, 0.227, atol=0.0005)


def test_contact_between_the_tyres_edges():
    """Common practice, no source: contact radii of 46 and 74 mm are full spins of 591 and 951 wheel degrees."""
    assert_allclose(full_spin(2 * 46.0 / WHEEL_MM * 360.0)[1].value, 0.0, atol=1e-12)
    assert_allclose(full_spin(2 * 74.0 / WHEEL_MM * 360.0)[1].value, 1.0, atol=1e-12)
    assert_allclose([2 * r / WHEEL_MM * 360.0 for r in (46.0, 74.0)], [591, 951], atol=0.5)


def test_dragged_rear_wheels():
    """Common practice, no source: 175 wheel degrees for 90 on a smooth floor; 700 against 673 for a full spin."""
    robot = Robot(wheel_diameter_mm=WHEEL_MM)
    assert_allclose(effective_track_mm(exactly(90.0 / 175.0), robot, 10).value, 108.9, atol=0.05)
    assert_allclose(700.0 / 673.0 - 1.0, 0.04, atol=0.0015)


def test_backlash_in_heading():
    """Common practice, no source: 7 degrees of backlash at the wheel are up to 3.7 degrees of heading."""
    assert_allclose(7.0 * 360.0 / 673.0, 3.7, atol=0.05)


def test_dead_band_and_gains_come_back():
    found = [fit_turns(simulated(seed, dead_band=7.0, sizes=(95.0, 190.0, 380.0), n=40)) for seed in range(12)]
    assert all(fit.model.dead_band for fit in found)
    bands = np.array([fit.dead_band_wheel_deg().value for fit in found])
    us = np.array([fit.dead_band_wheel_deg().u for fit in found])
    assert abs(np.mean(bands) - 7.0) < 4.0 * np.mean(us) / np.sqrt(12)


def test_a_difference_between_directions_is_seen():
    fit = fit_turns(simulated(3, gains=(0.48, 0.47), scatter=0.2, n=40))
    assert fit.model.separate_gains
    apart, p_value = direction_difference(fit)
    assert apart.low < 0.01 / 0.475 < apart.high
    assert p_value < 1e-6


@pytest.mark.parametrize("law", ["constant", "proportional"])
def test_gain_intervals_cover(law):
    """2 x 150 fits: 95 % intervals cover the truth within four standard deviations of that count."""
    hits = 0
    for seed in range(150):
        rng = np.random.default_rng([seed, 5])
        wheel = np.tile([95.0, -190.0, 190.0, -380.0], 4)
        size = np.abs(0.48 * wheel)
        spread = 0.4 if law == "constant" else 0.004 * size
        heading = np.sign(wheel) * (size + rng.normal(0.0, 1.0, 16) * spread)
        gain = fit_turns(turns(wheel, heading, 0.01)).gain()
        hits += gain.low <= 0.48 <= gain.high
    assert hits / 150 > 0.95 - 4.0 * np.sqrt(0.95 * 0.05 / 150)


def test_scatter_is_found_beside_the_measurement():
    found = [fit_turns(simulated(seed, scatter=0.2, u=0.2, n=60)).scatter_deg for seed in range(20)]
    # The scatter of one fit has a standard deviation of about 0.2 * sqrt(2) / sqrt(2 * 60) * 2; mean of 20.
    assert_allclose(np.mean(found), 0.2, atol=4 * 0.052 / np.sqrt(20))


def test_what_the_turns_cannot_tell_is_said():
    fit = fit_turns(turns(np.full(6, 190.0), 90.0 + np.arange(6) * 0.1))
    assert fit.dead_band_wheel_deg() is None
    text = " ".join(fit.notes)
    assert "dead band cannot be told" in text
    assert "nothing is known of the other direction" in text
    with pytest.raises(NotIdentified, match="clockwise"):
        command_for(fit, -90.0)


def test_too_few_and_wrong_way():
    with pytest.raises(NotEnoughTurns, match="2 usable turns; at least 3"):
        fit_turns(turns([190.0, 190.0], [90.0, 91.0]))
    with pytest.raises(CalibError, match="against its commands"):
        fit_turns(turns(np.full(5, 190.0), np.full(5, -90.0) + np.arange(5)))


@pytest.mark.parametrize("u_deg", [np.nan, -0.1, np.inf])
def test_an_uncertainty_that_is_none_is_refused(u_deg):
    with pytest.raises(CalibError, match="turn 1 has the standard uncertainty"):
        fit_turns(turns(np.full(4, 190.0), np.array([90.0, 91.0, 90.5, 90.0]), u_deg))


def test_a_start_against_the_turn_before_needs_a_dead_band_that_can_be_told():
    fit = fit_turns(turns(np.full(6, 190.0), 90.0 + np.arange(6) * 0.1))
    with pytest.raises(NotIdentified, match="after a reversal"):
        command_for(fit, 90.0, after_reversal=True)


def test_zero_scatter_is_no_trouble():
    fit = fit_turns(turns(np.array([100.0, -100.0, 200.0, -200.0]), np.array([50.0, -50.0, 100.0, -100.0])))
    assert_allclose(fit.gain().value, 0.5)
    assert fit.scatter_deg < 1e-12


def test_reversals():
    state = reversals([90, 90, -90, np.nan, 90, 90], slack_known=[False, True, True, True, True, False])
    assert_allclose(state, [np.nan, 0, 1, np.nan, np.nan, np.nan])


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10_000), factor=st.floats(0.1, 10.0))
def test_units_of_the_commands_only_scale_the_gain(seed, factor):
    given_turns = simulated(seed, n=16)
    scaled = turns(given_turns.wheel_deg * factor, given_turns.heading_deg, given_turns.u_deg, given_turns.reversed_)
    a, b = fit_turns(given_turns).gain(), fit_turns(scaled).gain()
    assert_allclose([b.value * factor, b.u * factor], [a.value, a.u], rtol=1e-5)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_mirroring_swaps_the_directions(seed):
    given_turns = simulated(seed, n=16, gains=(0.48, 0.47))
    mirrored = turns(-given_turns.wheel_deg, -given_turns.heading_deg, given_turns.u_deg, given_turns.reversed_)
    a, b = fit_turns(given_turns), fit_turns(mirrored)
    assert a.model == b.model
    assert_allclose(a.gain(1.0).value, b.gain(-1.0).value, rtol=1e-9)


def test_command_inverts_the_fit():
    fit = fit_turns(simulated(1, dead_band=7.0, sizes=(95.0, 190.0, 380.0), n=40))
    for wanted in (45.0, -90.0):
        same, back = command_for(fit, wanted), command_for(fit, wanted, after_reversal=True)
        assert np.sign(same.wheel_deg.value) == np.sign(wanted)
        assert same.wheel_deg.low < same.wheel_deg.value < same.wheel_deg.high
        assert same.low_deg < wanted < same.high_deg
        lost = abs(back.wheel_deg.value) - abs(same.wheel_deg.value)
        assert_allclose(lost, fit.dead_band_wheel_deg(np.sign(wanted)).value, rtol=1e-9)
    assert command_for(fit, 400.0).extrapolated
    assert not command_for(fit, 100.0).extrapolated
    with pytest.raises(ValueError, match="other than 0"):
        command_for(fit, 0.0)


def test_single_turns_land_in_the_band():
    """1200 turns after 60 fits of 12: the 95 % band holds them within four standard deviations of that count."""
    hits = 0
    for seed in range(60):
        fit = fit_turns(simulated(seed, n=12, scatter=0.5, u=0.01))
        there = command_for(fit, 90.0)
        landed = 0.48 * there.wheel_deg.value + np.random.default_rng([seed, 9]).normal(0.0, 0.5, 20)
        hits += np.sum((there.low_deg < landed) & (landed < there.high_deg))
    # Turns after one fit share its error, so the count is that of about 60 * 4 independent ones.
    assert abs(hits / 1200 - 0.95) < 4.0 * np.sqrt(0.95 * 0.05 / 240)
