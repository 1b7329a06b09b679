"""Intervals over several laws: quantiles of a mixture, and those of one law where there is one."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import stats

from calib.intervals import ratio_estimate, sd_estimate, t_estimate
from calib.mixture import Part, RatioPart, mixed_ratio, mixed_sd, mixed_t, worth

LAWS = (Part(weight=0.5, value=1.0, u=0.1), Part(weight=0.3, value=1.1, u=0.2), Part(weight=0.2, value=0.9, u=0.05))


def test_one_law_gives_students_interval_to_the_digit():
    assert mixed_t([Part(weight=1.0, value=2.0, u=0.3)], 7, 0.95) == t_estimate(2.0, 0.3, 7, 0.95)


def test_the_ends_are_quantiles_of_the_mixture():
    found = mixed_t(LAWS, 9, 0.95)
    for end, share in ((found.low, 0.025), (found.high, 0.975)):
        below = sum(one.weight * stats.t.cdf((end - one.value) / one.u, 9) for one in LAWS)
        assert_allclose(below, share, atol=1e-9)
    draws = np.concatenate(
        [
            one.value + one.u * stats.t.rvs(9, size=int(200_000 * one.weight), random_state=np.random.default_rng(k))
            for k, one in enumerate(LAWS)
        ]
    )
    assert_allclose([found.low, found.high], np.quantile(draws, [0.025, 0.975]), atol=0.01)


def test_ratios_and_deviations_under_equal_laws_are_those_of_one():
    ratio = {"above": 3.0, "below": 2.0, "var_above": 0.01, "var_below": 0.02, "cov": 0.003}
    same = mixed_ratio([RatioPart(weight=0.4, **ratio), RatioPart(weight=0.6, **ratio)], 9, 0.95)
    alone = ratio_estimate(3.0, 2.0, var_above=0.01, var_below=0.02, cov=0.003, dof=9, confidence=0.95)
    assert_allclose([same.low, same.high, same.value], [alone.low, alone.high, alone.value], rtol=1e-9)
    two = [Part(weight=0.5, value=0.4, u=0.0), Part(weight=0.5, value=0.4, u=0.0)]
    spread, plain = mixed_sd(two, 9, 0.95, beside=0.1), sd_estimate(0.4, 9, 0.95, beside=0.1)
    assert_allclose([spread.low, spread.high, spread.value], [plain.low, plain.high, plain.value], rtol=1e-9)


def test_a_denominator_that_may_be_nothing_leaves_the_ratio_open():
    ratio = RatioPart(weight=0.5, above=1.0, below=0.1, var_above=0.01, var_below=0.04, cov=0.0)
    found = mixed_ratio([ratio, ratio], 9, 0.95)
    assert found.low == -np.inf
    assert found.high == np.inf


@given(
    st.lists(
        st.tuples(st.floats(0.05, 1.0), st.floats(-5.0, 5.0), st.floats(0.01, 2.0)),
        min_size=2,
        max_size=3,
    )
)
def test_a_mixture_lies_between_its_laws(rows):
    weight = worth(np.array([row[0] for row in rows]))
    parts = [Part(weight=float(w), value=row[1], u=row[2]) for w, row in zip(weight, rows, strict=True)]
    found = mixed_t(parts, 9, 0.95)
    each = [t_estimate(one.value, one.u, 9, 0.95) for one in parts]
    assert min(one.low for one in each) - 1e-9 <= found.low <= max(one.low for one in each) + 1e-9
    assert min(one.high for one in each) - 1e-9 <= found.high <= max(one.high for one in each) + 1e-9


def test_a_law_that_nothing_speaks_for_has_no_weight():
    assert_allclose(worth(np.array([1.0, 1e-9, 1.0])), [0.5, 0.0, 0.5])
    assert worth(np.array([0.2, 0.3])).sum() == pytest.approx(1.0)
