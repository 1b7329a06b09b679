"""A short trial against a stored fit: verdicts at their stated rates, and what is commanded after."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from calib.errors import NotEnoughTurns, NotIdentified
from calib.fit import fit_turns
from calib.turns import Turns
from calib.update import DRIFTED, UNSURE, VALID, check_fit

GAIN = 0.48


def driven(rng, n, *, gain=GAIN, scatter_deg=0.4):
    wheel = np.resize([190.0, 190.0, -190.0, -190.0], n)
    heading = gain * wheel + scatter_deg * rng.normal(size=n)
    return Turns(wheel_deg=wheel, heading_deg=heading, u_deg=np.full(n, 0.02), reversed_=np.zeros(n))


def test_no_drift_is_hardly_ever_called_one():
    # 95 % intervals: 5 % false alarms; 400 seeded pairs of a stored fit and a new trial, +-2.2 points by chance.
    rng = np.random.default_rng(3)
    found = [check_fit(fit_turns(driven(rng, 16)), driven(rng, 8), 90.0, margin_deg=1.0) for _ in range(400)]
    held = np.mean([one.drift_deg.low <= 0.0 <= one.drift_deg.high for one in found])
    assert 0.92 <= held <= 0.98
    assert np.mean([one.verdict == DRIFTED for one in found]) < 0.03  # within the margin counts as valid


def test_a_drift_is_seen_sized_and_commanded_away():
    rng = np.random.default_rng(4)
    fit = fit_turns(driven(rng, 40))
    one = check_fit(fit, driven(rng, 12, gain=1.05 * GAIN), 90.0, margin_deg=1.0)
    assert one.verdict == DRIFTED
    assert_allclose(one.drift_deg.value, 4.5, atol=0.6)
    assert one.weight > 0.9
    assert_allclose(one.now_wheel_deg, 90.0 / (1.05 * GAIN), atol=1.5)
    assert "have changed" in one.reason


def test_the_same_turns_again_leave_the_command_where_it_was():
    rng = np.random.default_rng(5)
    fit = fit_turns(driven(rng, 40))
    one = check_fit(fit, driven(rng, 12), -90.0, margin_deg=1.0)
    assert one.verdict == VALID
    assert abs(one.now_wheel_deg - one.old_wheel_deg) < 1.0
    assert one.old_wheel_deg < 0.0


def test_too_wild_a_trial_tells_nothing():
    rng = np.random.default_rng(6)
    one = check_fit(fit_turns(driven(rng, 40)), driven(rng, 4, scatter_deg=6.0), 90.0, margin_deg=0.5)
    assert one.verdict == UNSURE
    assert "drive more turns" in one.reason


def test_what_cannot_be_checked_is_said():
    rng = np.random.default_rng(8)
    fit, turns = fit_turns(driven(rng, 16)), driven(rng, 8)
    with pytest.raises(NotEnoughTurns, match="1 usable counter-clockwise"):
        check_fit(fit, turns.take(np.arange(8) == 0), 90.0, margin_deg=1.0)
    one_way = fit_turns(turns.take(turns.side > 0.0))
    with pytest.raises(NotIdentified, match="clockwise"):
        check_fit(one_way, turns, -90.0, margin_deg=1.0)


def test_turning_the_signs_turns_the_answer():
    rng = np.random.default_rng(9)
    old, new = driven(rng, 16), driven(rng, 8)
    mirrored = [replace(one, wheel_deg=-one.wheel_deg, heading_deg=-one.heading_deg) for one in (old, new)]
    here = check_fit(fit_turns(old), new, 90.0, margin_deg=1.0)
    there = check_fit(fit_turns(mirrored[0]), mirrored[1], -90.0, margin_deg=1.0)
    assert_allclose(there.now_wheel_deg, -here.now_wheel_deg, rtol=1e-9)
    assert_allclose(there.drift_deg.value, here.drift_deg.value, rtol=1e-7)
