import numpy as np
import pytest
from numpy.testing import assert_allclose
from statsmodels.regression.linear_model import WLS

from calib.errors import NotEnoughTurns, NotIdentified
from calib.polar import direction_deg, length_of
from calib.terms import NotVaried, added_terms
from tests.reference import numbers

PERIODS = (12.0, 44.311088700, 26.887614440)


def harmonics(x, period):
    angle = 2.0 * np.pi * x / period
    return np.column_stack([np.cos(angle), np.sin(angle)])


def test_certified_harmonics():
    """Source: NIST StRD, ENSO, certified; its periods held fixed, so that the model is linear."""
    data = numbers("strd-enso.csv")
    x, y = np.array(data["x"]), np.array(data["y"])
    extra = np.hstack([harmonics(x, period) for period in PERIODS])
    found = added_terms(np.ones((len(x), 1)), extra, y, np.ones(len(x)))
    certified = [3.0762128085, 0.53280138227, -1.6231428586, 0.52554493756, 0.21232288488, 1.4966870418]
    assert_allclose(found.coefficients, certified, rtol=1e-6)
    left = y - y.mean() - (extra - extra.mean(axis=0)) @ found.coefficients
    assert_allclose(left @ left, 788.53978668, rtol=1e-9)
    yearly = length_of(found.coefficients[:2], found.cov[:2, :2], found.dof_left, 0.95)
    assert_allclose(yearly.value, 3.12201, atol=5e-6)


def test_the_f_test_of_nested_models():
    """Source: reference library statsmodels, weighted least squares and compare_f_test."""
    rng = np.random.default_rng(1)
    base, extra = rng.normal(size=(30, 3)), rng.normal(size=(30, 2)) * [1.0, 6.0]
    y, weight = rng.normal(size=30), rng.uniform(0.2, 3.0, 30)
    found = added_terms(base, extra, y, weight)
    full, small = (WLS(y, matrix, weight).fit() for matrix in (np.hstack([base, extra]), base))
    f, p, _ = full.compare_f_test(small)
    assert_allclose([found.f, found.p_value], [f, p], rtol=1e-9)
    assert_allclose(found.coefficients, full.params[3:], rtol=1e-9)
    assert_allclose(found.cov, full.cov_params()[3:, 3:], rtol=1e-9)


@pytest.mark.parametrize("truth", [0.0, 1.5, 8.0])
def test_interval_of_a_length_holds_the_truth(truth):
    """Monte Carlo; 2000 trials, so 95 +- 1 per cent by chance; at 0 only the upper limit can miss."""
    rng = np.random.default_rng(2)
    dof, held = 12, 0
    for _ in range(2000):
        pair = np.array([truth, 0.0]) + rng.normal(size=2)
        one = length_of(pair, np.eye(2) * rng.chisquare(dof) / dof, dof, 0.95)
        held += one.low <= truth <= one.high
    assert 0.935 < held / 2000 < (0.97 if truth else 0.99)


def test_interval_of_a_direction_holds_the_truth():
    """Monte Carlo; 2000 trials, so 95 +- 1 per cent by chance."""
    rng = np.random.default_rng(3)
    dof, held, shape = 12, 0, np.array([[2.0, 0.5], [0.5, 0.7]])
    root = np.linalg.cholesky(shape)
    for _ in range(2000):
        pair = np.array([3.0, 2.0]) + root @ rng.normal(size=2)
        one = direction_deg(pair, shape * rng.chisquare(dof) / dof, dof, 0.95)
        truth = np.degrees(np.arctan2(2.0, 3.0))
        held += any(one.low <= truth + turn <= one.high for turn in (-360.0, 0.0, 360.0))
    assert 0.935 < held / 2000 < 0.97


def test_what_cannot_be_told_is_said():
    ones, y = np.ones((6, 1)), np.arange(6.0) ** 2
    with pytest.raises(NotVaried):
        added_terms(ones, 3.0 * ones, y, np.ones(6))
    with pytest.raises(NotEnoughTurns, match="3 turns where 4"):
        added_terms(ones[:3], np.arange(3.0)[:, None], y[:3], np.ones(3))
    with pytest.raises(NotIdentified, match="do not scatter"):
        added_terms(ones, np.arange(6.0)[:, None], 2.0 * np.arange(6.0), np.ones(6))
    nothing = direction_deg(np.zeros(2), np.eye(2), 5, 0.95)
    assert nothing.high - nothing.low == 360.0
    assert length_of(np.array([3.0, 4.0]), np.zeros((2, 2)), 5, 0.95).low == 5.0
