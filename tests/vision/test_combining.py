"""Combination and effective degrees of freedom, against the worked examples of the GUM."""

import math

import pytest
from numpy.testing import assert_allclose

from vision.combining import combine


def test_the_end_gauge_of_the_gum():
    """JCGM 100:2008, H.1, in nm. Inputs as published; results from memory: u 32, 16 degrees of freedom, U99 93."""
    difference = combine([(5.8, 24.0), (3.9, 5.0), (6.7, 8.0)])
    assert_allclose(difference.u, 9.7, atol=0.05)
    assert_allclose(difference.degrees_of_freedom, 25.6, atol=0.2)  # published from u rounded to 9.7
    length_nm = 50_000_623.0
    expansion = length_nm * 0.1 * 1e-6 / math.sqrt(3.0)
    temperature = length_nm * 11.5e-6 * 0.05 / math.sqrt(3.0)
    assert_allclose(expansion, 2.9, atol=0.05)
    assert_allclose(temperature, 16.6, atol=0.05)
    whole = combine(
        [(25.0, 18.0), (difference.u, difference.degrees_of_freedom), (expansion, 50.0), (temperature, 2.0)],
        confidence=0.99,
    )
    assert_allclose(whole.u, 32.0, atol=0.5)
    assert math.floor(whole.degrees_of_freedom) == 16
    assert_allclose(whole.coverage_factor, 2.92, atol=0.005)
    assert_allclose(whole.expanded, 93.0, atol=1.0)


def test_the_example_of_annex_g():
    """JCGM 100:2008, G.4.2, from memory: relative 0.25, 0.57 and 0.82 % with 9, 4 and 14: 1.03 %, 19, U95 2.2 %."""
    found = combine([(0.25, 9.0), (0.57, 4.0), (0.82, 14.0)])
    assert_allclose(found.u, 1.03, atol=0.005)
    assert_allclose(found.degrees_of_freedom, 19.0, atol=0.05)
    assert_allclose(found.expanded, 2.2, atol=0.05)


@pytest.mark.parametrize(
    "contributions", [[(3.0, math.inf), (4.0, math.inf)], [(3.0, math.inf), (4.0, 1e12), (0.0, 1.0)]]
)
def test_contributions_that_are_known_well_give_the_normal_factor(contributions):
    found = combine(contributions)
    assert_allclose(found.u, 5.0)
    assert_allclose(found.coverage_factor, 1.959964, rtol=1e-6)


def test_no_contribution_is_no_uncertainty():
    found = combine([])
    assert (found.u, found.expanded) == (0.0, 0.0)
    assert math.isinf(found.degrees_of_freedom)
