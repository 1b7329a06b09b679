import itertools

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats
from statsmodels.datasets import nile

from calib.drift import lag_one, mann_kendall, theil_sen
from calib.errors import NotEnoughTurns
from tests.reference import numbers


def test_five_readings():
    """Source: EPA QA/G-9, Mann-Kendall example (from memory): S = 6, one-sided p 0.117."""
    found = mann_kendall([5, 6, 11, 8, 10])
    assert (found.s, found.exact) == (6, True)
    assert_allclose(found.p_value / 2, 0.117, atol=5e-4)
    assert_allclose([found.variance, found.z], [16.6667, 1.22474], atol=5e-5)


def test_nile():
    """Source: Nile 1871-1970; S and p as pymannkendall 1.4.3 and R give them, slope -2.6 a year."""
    flow = nile.load_pandas().data["volume"].to_numpy()
    found = mann_kendall(flow)
    assert found.s == -1387
    assert not found.exact
    assert_allclose([found.variance, found.z, found.p_value], [112728.333, -4.128067, 3.6583e-5], rtol=2e-5)
    slope = theil_sen(flow, np.arange(100))
    assert_allclose(slope.value, -2.6, atol=1e-12)
    reference = stats.theilslopes(flow, np.arange(100), 0.95)
    assert_allclose([slope.low, slope.high], [reference.low_slope, reference.high_slope], rtol=1e-12)


def test_against_kendall_tau():
    """Source: reference library scipy.stats.kendalltau, exact."""
    values = np.random.default_rng(3).normal(size=17)
    reference = stats.kendalltau(np.arange(17), values, method="exact")
    found = mann_kendall(values)
    assert_allclose(found.s / (17 * 16 / 2), reference.statistic, rtol=1e-12)
    assert_allclose(found.p_value, reference.pvalue, rtol=1e-9)


def test_two_runs_are_counted_out_together():
    """Source: every order of both runs, counted one by one."""
    values, run = [3.0, 1.0, 2.0, 9.0, 5.0, 7.0, 8.0], [1, 1, 1, 2, 2, 2, 2]
    sums = [
        mann_kendall([*first, *second], run).s
        for first in itertools.permutations(values[:3])
        for second in itertools.permutations(values[3:])
    ]
    found = mann_kendall(values, run)
    assert_allclose(found.p_value, np.mean(np.abs(sums) >= abs(found.s)), rtol=1e-12)
    assert_allclose(np.var(sums), found.variance, rtol=1e-12)


@pytest.mark.parametrize(
    ("name", "r1"),
    [
        ("lew", -0.307304800605679),
        ("mavro", 0.937989183438248),
        ("michelso", 0.535199668621283),
        ("lottery", -0.120948622967393),
    ],
)
def test_certified_autocorrelation(name, r1):
    """Source: NIST StRD univariate summary statistics, certified to 15 digits."""
    found = lag_one(numbers(f"strd-{name}.csv")["y"])
    assert_allclose(found.r1, r1, rtol=1e-10)


def test_numacc_2_to_4():
    """Source: NIST StRD NumAcc2, 3 and 4: certified -0.999."""
    for centre in (1.2, 1000000.2, 10000000.2):
        series = centre + 0.1 * np.append(0.0, np.tile([-1.0, 1.0], 500))
        assert_allclose(lag_one(series).r1, -0.999, rtol=1e-8)


def test_moments_of_neighbours_are_those_of_all_orders():
    """Source: every order of six values, counted one by one (Wald and Wolfowitz 1943)."""
    values = np.array([0.3, -1.2, 2.5, 0.9, 7.0, -0.4])
    every = np.array([lag_one(order).r1 for order in itertools.permutations(values)])
    found = lag_one(values)
    assert_allclose(found.expected, every.mean(), rtol=1e-9)
    z = stats.norm.isf(found.p_value / 2)
    assert_allclose(abs(found.r1 - found.expected) / z, every.std(), rtol=1e-9)


def test_mavro_drifts_and_lottery_does_not():
    """Source: NIST StRD; Mavro is the handbook's drifting series, Lottery its random one."""
    mavro, lottery = numbers("strd-mavro.csv")["y"], numbers("strd-lottery.csv")["y"]
    assert mann_kendall(mavro).p_value < 1e-3
    assert lag_one(mavro).p_value < 1e-6
    assert mann_kendall(lottery).p_value > 0.05


def test_slopes_within_runs_only():
    found = theil_sen([0.0, 1.0, 2.0, 100.0, 101.0, 102.0], [0, 1, 2, 0, 1, 2], [1, 1, 1, 2, 2, 2])
    assert found.value == 1.0


def test_what_cannot_be_told_is_said():
    with pytest.raises(NotEnoughTurns, match="the longest has 2"):
        mann_kendall([1.0, 2.0])
    with pytest.raises(NotEnoughTurns, match="the longest has 4"):
        lag_one([1.0, 2.0, 3.0, 4.0])
    with pytest.raises(ValueError, match="not finite"):
        mann_kendall([1.0, np.nan, 2.0])
    assert mann_kendall([2.0] * 6).p_value == 1.0
    assert lag_one([2.0] * 6).p_value == 1.0
