import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats
from statsmodels.stats.power import TTestIndPower

from calib.errors import CalibError
from calib.intervals import sd_estimate
from calib.sample_size import (
    detection_power,
    repeats_for_difference,
    repeats_for_equivalence,
    repeats_for_hit_rate,
    repeats_for_mean,
    repeats_for_spread,
    repeats_to_detect,
    turns_to_settle,
    wilson_half_width,
)


@pytest.mark.parametrize(("d", "n"), [(0.8, 26), (0.5, 64), (0.2, 394)])
def test_repeats_to_detect(d, n):
    """Source: Cohen (1988), table 2.4.1, 5 % two-sided, power 0.80 (from memory; for d = 0.2 it prints 393)."""
    assert repeats_to_detect(d, 1.0) == n
    reference = TTestIndPower().solve_power(effect_size=d, alpha=0.05, power=0.8)
    assert n - 1 < reference <= n


def test_detection_power():
    """Source: noncentral t, d 0.5 and 64 a group: 0.80146 (reference library statsmodels)."""
    assert_allclose(detection_power(0.5, np.sqrt(2 / 64), 126), 0.80146, atol=5e-6)


def test_repeats_for_a_mean_are_just_enough():
    n = repeats_for_mean(0.3, 0.5)
    assert stats.t.ppf(0.975, n - 1) * 0.5 / np.sqrt(n) <= 0.3
    assert stats.t.ppf(0.975, n - 2) * 0.5 / np.sqrt(n - 1) > 0.3
    assert repeats_for_mean(0.3, 0.5, commands=4) < n


def test_repeats_for_a_spread_are_just_enough():
    n = repeats_for_spread(0.2)
    wide = [sd_estimate(1.0, m - 1, 0.95) for m in (n, n - 1)]
    assert 0.5 * (wide[0].high - wide[0].low) <= 0.2 < 0.5 * (wide[1].high - wide[1].low)


def test_repeats_for_a_difference_with_unequal_scatter():
    n = repeats_for_difference(0.5, 0.3, 1.1)
    half = []
    for m in (n, n - 1):
        dof = (m - 1) * (0.3**2 + 1.1**2) ** 2 / (0.3**4 + 1.1**4)
        half.append(stats.t.ppf(0.975, dof) * np.sqrt((0.3**2 + 1.1**2) / m))
    assert half[0] <= 0.5 < half[1]


@pytest.mark.parametrize(
    ("hits", "n", "low", "high"),
    [(81, 263, 0.2553, 0.3662), (15, 148, 0.0624, 0.1605), (0, 20, 0.0, 0.1611), (1, 29, 0.0061, 0.1718)],
)
def test_wilson_width(hits, n, low, high):
    """Source: Newcombe (1998), Statistics in Medicine 17, table I (from memory)."""
    assert_allclose(wilson_half_width(hits / n, n), 0.5 * (high - low), atol=1e-4)


def test_repeats_for_a_hit_rate_are_just_enough():
    n = repeats_for_hit_rate(0.1, 0.9)
    widths = []
    for m in (n, n - 1):
        interval = stats.binomtest(round(0.9 * m), m).proportion_ci(method="wilson")
        widths.append(0.5 * (interval.high - interval.low))
    assert wilson_half_width(0.9, n) <= 0.1 < wilson_half_width(0.9, n - 1)
    assert_allclose(widths, 0.1, atol=0.01)


def test_repeats_for_equivalence_do_show_it():
    """Monte Carlo; 20 000 trials, four standard errors of the chance."""
    n = repeats_for_equivalence(1.0, 0.8)
    rng = np.random.default_rng(1)
    a, b = rng.normal(0, 0.8, (2, 20000, n))
    u = np.sqrt((a.var(axis=1, ddof=1) + b.var(axis=1, ddof=1)) / n)
    shown = np.abs(a.mean(axis=1) - b.mean(axis=1)) + stats.t.ppf(0.95, 2 * n - 2) * u < 1.0
    assert shown.mean() >= 0.8 - 4 * 0.5 / np.sqrt(20000)


def test_turns_to_settle():
    assert turns_to_settle(0.3, 0.4, 20, 1.0, 12) < turns_to_settle(0.6, 0.4, 20, 0.7, 12)
    assert turns_to_settle(0.0, 5.0, 20, 0.01, 12) is None


def test_what_cannot_be_planned_is_refused():
    with pytest.raises(ValueError, match="accepted: a number above 0"):
        repeats_for_mean(0.0, 1.0)
    with pytest.raises(ValueError, match="accepted: 0 or more"):
        repeats_for_mean(1.0, np.nan)
    with pytest.raises(CalibError, match="more than 1000000 repeats"):
        repeats_for_mean(1e-6, 1.0)
    with pytest.raises(ValueError, match="less than the margin"):
        repeats_for_equivalence(1.0, 0.5, difference=1.0)
    assert repeats_for_mean(1.0, 0.0) == 2
