import numpy as np
import pytest
from numpy.testing import assert_allclose

from calib.fit import fit_turns
from calib.strays import extreme_residuals, extremes, which_strays
from calib.turns import Turns, reversals
from tests.calib.test_fit import simulated, turns

ROSNER = """-0.25 0.68 0.94 1.15 1.20 1.26 1.26 1.34 1.38 1.43 1.49 1.49 1.55 1.56 1.58 1.65 1.69 1.70
1.76 1.77 1.81 1.91 1.94 1.96 1.99 2.06 2.09 2.10 2.14 2.15 2.23 2.24 2.26 2.35 2.37 2.40
2.47 2.54 2.62 2.64 2.90 2.92 2.92 2.93 3.21 3.26 3.30 3.59 3.68 4.30 4.64 5.34 5.42 6.01"""


def test_rosners_example():
    """Source: Rosner (1983), Technometrics 25, also NIST/SEMATECH e-Handbook 1.3.5.17.3; figures from memory, where the
    printed ones are cut, not rounded, at the third decimal. One after another the first two would be missed."""
    found = extremes([float(word) for word in ROSNER.split()], most=10, level=0.05)
    statistics = [3.118, 2.942, 3.179, 2.810, 2.815, 2.848, 2.279, 2.310, 2.101, 2.067]
    critical = [3.158, 3.151, 3.143, 3.136, 3.128, 3.120, 3.111, 3.103, 3.094, 3.085]
    assert_allclose(found.statistics, statistics, rtol=0, atol=1e-3)
    assert_allclose(found.critical, critical, rtol=0, atol=1e-3)
    assert found.n_strays == 3
    assert found.strays == (53, 52, 51)


def test_residuals_from_a_mean_are_the_same_test():
    sample = np.array([float(word) for word in ROSNER.split()])
    weighted = extreme_residuals(np.ones((54, 1)), sample, np.full(54, 7.0), most=10)
    assert weighted.strays == extremes(sample, most=10).strays


def test_false_alarms_come_at_the_level():
    """600 samples of 24 about a line, level 5 %: alarms within four standard deviations of that count."""
    rng = np.random.default_rng(2)
    design = np.column_stack([np.ones(24), np.arange(24.0)])
    alarms = sum(extreme_residuals(design, rng.normal(size=24), most=4).n_strays > 0 for _ in range(600))
    assert abs(alarms / 600 - 0.05) < 4.0 * np.sqrt(0.05 * 0.95 / 600)


def test_strays_are_left_out_and_named():
    calm = simulated(5, n=24)
    heading = calm.heading_deg.copy()
    heading[[7, 15]] *= 0.8
    given = turns(calm.wheel_deg, heading, calm.u_deg, calm.reversed_)
    fit = fit_turns(given)
    left_out = {one.index: one.reason for one in fit.not_fitted}
    assert {7, 15} <= set(left_out)
    assert "strays by -18" in left_out[7]
    assert_allclose(fit.gain().value, fit_turns(calm).gain().value, atol=4 * fit.gain().u)
    kept = fit_turns(given, keep_strays=True)
    assert not kept.not_fitted or all("slack" in one.reason for one in kept.not_fitted)
    assert_allclose(kept.robust_gain().value, fit.gain().value, atol=4 * fit.gain().u)


@pytest.mark.parametrize("n", [6, 24])
def test_an_exact_line_has_no_strays(n):
    x = np.arange(1.0, n + 1)
    assert extreme_residuals(x[:, None], 0.5 * x, most=2).n_strays == 0


def test_two_turns_that_alone_stand_for_their_kind_cannot_be_told_apart():
    # Gain each way and loss at a reversal, from 2, 1, 2 and 1 turns: leaving out either single turn fits as well.
    wheel = np.array([190.0, 190.0, -190.0, -190.0, 190.0, 190.0, -190.0])
    state = reversals(wheel, slack_known=np.arange(7) > 0)
    along = 0.48 * (np.abs(wheel) - 7.0 * np.nan_to_num(state)) + np.array([0.0, 0.1, -0.1, 0.05, 0.0, -0.1, -0.05])
    heading = np.sign(wheel) * along
    for far in (3, 4):  # the only clockwise start along, the only counter-clockwise one against
        strayed = heading.copy()
        strayed[far] -= 18.0 * np.sign(wheel[far])
        fit = fit_turns(Turns(wheel_deg=wheel, heading_deg=strayed, u_deg=np.full(7, 0.02), reversed_=state))
        band = fit.dead_band_wheel_deg()
        assert any("cannot tell which of 2" in note for note in fit.notes)
        assert band.low < 7.0 < band.high
        assert fit.repeatability_deg().value < 1.0
    assert sum(which_strays(np.ones((5, 1)), [0.0, 0.1, -0.1, 0.0, 9.0], np.ones(5)) > 0.01) == 1
