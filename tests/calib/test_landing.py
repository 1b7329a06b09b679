"""Where turns land: tolerance band, hit rate and closure against closed forms and simulated populations."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from calib.command import Command, Landing, command_for
from calib.fit import fit_turns
from calib.intervals import Estimate
from calib.landing import closure, hit_rate, tolerance_band
from calib.tolerance import tolerance_factor
from calib.turns import Turns


def landing(*, u_mean_deg=0.1, scatter_deg=0.5, dof=11, wanted_deg=90.0, laws=None) -> Command:
    return Command(
        wanted_deg=wanted_deg,
        after_reversal=False,
        wheel_deg=Estimate(value=190.0, u=0.2, low=189.6, high=190.4, confidence=0.95),
        low_deg=88.9,
        high_deg=91.1,
        confidence=0.95,
        extrapolated=False,
        scatter_deg=scatter_deg,
        u_mean_deg=u_mean_deg,
        dof=dof,
        laws=laws or (Landing(weight=1.0, bias_deg=0.0, u_mean_deg=u_mean_deg, scatter_deg=scatter_deg),),
    )


def test_the_tolerance_band_of_a_plain_sample_has_the_published_factor():
    # NIST/SEMATECH e-Handbook 7.2.6.3: n = 43, 90 % of the population with 99 % confidence, factor 2.217 by Howe's
    # approximation, which is good to half a per cent (Howe 1969). The exact factors are held in test_tolerance.
    one = landing(u_mean_deg=0.5 / np.sqrt(43.0), dof=42)
    band = tolerance_band(one, 0.90, 0.99)
    assert_allclose((band.high_deg - 90.0) / 0.5, 2.217, rtol=5e-3)
    assert_allclose(band.high_deg - 90.0, 0.5 * tolerance_factor(43, 42, 0.90, 0.99), rtol=1e-9)
    assert_allclose(90.0 - band.low_deg, band.high_deg - 90.0, rtol=1e-12)


def test_the_hit_rate_of_a_known_mean_has_the_chi_square_limits():
    one = landing(u_mean_deg=1e-9, dof=11)
    found = hit_rate(one, 1.0)
    sd = 0.5 * np.sqrt(11.0 / stats.chi2.ppf([0.025, 0.975], 11))
    assert_allclose([found.low, found.high], 2.0 * stats.norm.cdf(1.0 / sd) - 1.0, atol=2e-3)
    assert_allclose(found.value, 2.0 * stats.norm.cdf(2.0) - 1.0, rtol=1e-9)


@pytest.mark.parametrize("scatter_deg", [0.3, 0.8])
def test_the_hit_rate_holds_the_truth_as_often_as_it_says(scatter_deg):
    # 10 turns of one command with a biased mean: the interval's 95 % hold over 1,500 seeded samples within 2 points.
    rng, held, n = np.random.default_rng(5), 0, 10
    for _ in range(1500):
        sample = scatter_deg * rng.normal(size=n)
        sd, mean = sample.std(ddof=1), sample.mean()
        u = sd / np.sqrt(n)
        law = Landing(weight=1.0, bias_deg=0.0, u_mean_deg=u, scatter_deg=sd)
        found = hit_rate(landing(u_mean_deg=u, scatter_deg=sd, dof=n - 1, laws=(law,)), 1.0)
        shifted = np.diff(stats.norm.cdf([-1.0, 1.0], -mean, scatter_deg))[0]  # the command aims at the sample's mean
        held += found.low <= shifted <= found.high
    assert 0.93 <= held / 1500 <= 0.97


def test_the_error_after_one_turn_is_the_band_of_the_next():
    rng = np.random.default_rng(2)
    wheel = np.tile([95.0, -95.0, -190.0, 190.0, 380.0, -380.0], 4)
    heading = 0.48 * wheel + np.sign(wheel) * 0.4 * rng.normal(size=24)
    fit = fit_turns(Turns(wheel_deg=wheel, heading_deg=heading, u_deg=np.full(24, 0.02), reversed_=np.zeros(24)))
    for wanted_deg in (90.0, -45.0):
        one = command_for(fit, wanted_deg)
        after = closure(one, 1)
        expected = [one.low_deg - wanted_deg, one.high_deg - wanted_deg]
        assert_allclose([after.low_deg, after.high_deg], expected, atol=1e-9)


def test_errors_of_the_mean_grow_with_the_count_and_scatter_with_its_root():
    mean_only = landing(u_mean_deg=0.1, scatter_deg=1e-12)
    assert_allclose(closure(mean_only, 9).high_deg, 9.0 * closure(mean_only, 1).high_deg, rtol=1e-9)
    scatter_only = landing(u_mean_deg=0.0)
    assert_allclose(closure(scatter_only, 9).high_deg, 3.0 * closure(scatter_only, 1).high_deg, rtol=1e-9)


def test_what_cannot_be_asked_is_refused():
    with pytest.raises(ValueError, match="above 0"):
        hit_rate(landing(), 0.0)
    with pytest.raises(ValueError, match="1 or more"):
        closure(landing(), 0)


def test_a_robot_without_scatter_hits_as_surely_as_its_mean_is_known():
    assert hit_rate(landing(scatter_deg=0.0, u_mean_deg=0.0), 0.1).low == 1.0
    known = hit_rate(landing(scatter_deg=0.0, u_mean_deg=0.1, dof=11), 0.25)
    assert known.low == 1.0  # t of 11 degrees of freedom: 2.201
    assert hit_rate(landing(scatter_deg=0.0, u_mean_deg=0.1, dof=11), 0.2).low == 0.0
