"""What a fit may not depend on: the mirror, the order of turns, the unit of angle."""

from dataclasses import replace

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from calib.command import command_for
from calib.fit import fit_turns
from calib.turns import Turns, reversals


def trial(seed: int, n: int = 24) -> Turns:
    rng = np.random.default_rng(seed)
    wheel = np.resize([1.0, 1.0, -1.0, -1.0], n) * rng.permutation(np.resize([95.0, 190.0, 380.0], n))
    state = reversals(wheel, slack_known=np.arange(n) > 0)
    gain = np.where(wheel > 0.0, 0.483, 0.477)
    along = gain * (np.abs(wheel) - 6.0 * np.nan_to_num(state)) + 0.4 * rng.normal(size=n)
    return Turns(wheel_deg=wheel, heading_deg=np.sign(wheel) * along, u_deg=np.full(n, 0.02), reversed_=state)


def ends(one) -> list[float]:
    return [one.value, one.low, one.high]


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10_000))
def test_a_mirrored_trial_swaps_the_directions(seed):
    turns = trial(seed)
    fit = fit_turns(turns)
    mirrored = fit_turns(replace(turns, wheel_deg=-turns.wheel_deg, heading_deg=-turns.heading_deg))
    assert_allclose(ends(mirrored.gain(-1.0)), ends(fit.gain(1.0)), rtol=1e-9)
    assert_allclose(ends(mirrored.gain(1.0)), ends(fit.gain(-1.0)), rtol=1e-9)
    there, back = command_for(fit, 90.0), command_for(mirrored, -90.0)
    assert_allclose(there.wheel_deg.value, -back.wheel_deg.value, rtol=1e-9)
    assert_allclose([there.low_deg, there.high_deg], [-back.high_deg, -back.low_deg], rtol=1e-9)


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10_000), st.randoms(use_true_random=False))
def test_the_order_in_which_turns_are_listed_does_not_matter(seed, random):
    turns = trial(seed)
    places = list(range(len(turns)))
    random.shuffle(places)
    fit, shuffled = fit_turns(turns), fit_turns(turns.take(np.array(places)))
    assert_allclose(ends(shuffled.gain()), ends(fit.gain()), rtol=1e-8)
    assert_allclose(ends(shuffled.repeatability_deg()), ends(fit.repeatability_deg()), rtol=1e-6)
    assert {places[one.index] for one in shuffled.not_fitted} == {one.index for one in fit.not_fitted}


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10_000), st.floats(0.02, 50.0))
def test_another_unit_of_heading_scales_every_answer(seed, factor):
    turns = trial(seed)
    fit = fit_turns(turns)
    scaled = fit_turns(replace(turns, heading_deg=factor * turns.heading_deg, u_deg=factor * turns.u_deg))
    assert_allclose(np.array(ends(scaled.gain(1.0))) / factor, ends(fit.gain(1.0)), rtol=1e-6)
    assert_allclose(np.array(ends(scaled.repeatability_deg())) / factor, ends(fit.repeatability_deg()), rtol=1e-5)
    band, other = fit.dead_band_wheel_deg(), scaled.dead_band_wheel_deg()
    assert_allclose(ends(other), ends(band), rtol=1e-5)
