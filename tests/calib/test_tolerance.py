import pytest
from numpy.testing import assert_allclose

from calib.tolerance import free_sample_size, howe_factor, one_sided_factor, tolerance_factor
from tests.reference import numbers

TABLE = numbers("tolerance-k.csv")
ROWS = [dict(zip(TABLE, row, strict=True)) for row in zip(*TABLE.values(), strict=True)]


@pytest.mark.parametrize("row", ROWS, ids=lambda row: f"n{row['n']:.0f}-{row['coverage']}")
def test_exact_factors(row):
    """Source: Meeker, Hahn and Escobar, Statistical Intervals, table J.5b, as the package toleranceinterval quotes."""
    n, coverage = row["n"], row["coverage"]
    found = tolerance_factor(n, n - 1, coverage, 0.95)
    assert_allclose(found, row["k2_published_MHE_J5b"], rtol=0, atol=6e-4)
    assert_allclose(found, row["k2_exact_computed"], rtol=0, atol=1e-5)
    assert_allclose(howe_factor(n, n - 1, coverage, 0.95), row["k2_howe"], rtol=0, atol=1e-6)
    assert_allclose(one_sided_factor(n, n - 1, coverage, 0.95), row["k1_one_sided_exact"], rtol=0, atol=1e-6)


@pytest.mark.parametrize(
    ("n", "groups", "coverage", "published"),
    [
        (5, 1, 0.95, 5.0769),
        (5, 2, 0.95, 3.6939),
        (5, 5, 0.95, 2.9820),
        (5, 10, 0.95, 2.7472),
        (10, 1, 0.95, 3.3935),
        (10, 2, 0.95, 2.8700),
        (10, 5, 0.95, 2.5377),
        (10, 10, 0.95, 2.4125),
        (35, 1, 0.90, 2.0943),
        (9, 1, 0.99, 4.6329),
    ],
)
def test_factors_with_a_pooled_deviation(n, groups, coverage, published):
    """Source: ISO 16269-6:2014 annex F, rounded up at the fourth decimal, as the package toleranceinterval quotes."""
    exact = tolerance_factor(n, groups * (n - 1), coverage, 0.95)
    assert 0.0 <= published - exact + 1e-6 <= 1.01e-4


def test_handbook_example():
    """Source: NIST/SEMATECH e-Handbook 7.2.6.3, Howe's approximation; exact ones recomputed."""
    k = howe_factor(43, 42, 0.90, 0.99)
    assert_allclose(k, 2.2173, rtol=0, atol=5e-5)
    assert_allclose([97.07 - 0.0268 * k, 97.07 + 0.0268 * k], [97.010576, 97.12942], rtol=0, atol=5e-6)
    assert_allclose(tolerance_factor(43, 42, 0.90, 0.99), 2.222825, rtol=0, atol=1e-6)
    assert_allclose(one_sided_factor(43, 42, 0.90, 0.99), 1.873954, rtol=0, atol=1e-6)


def test_sample_sizes_for_any_distribution():
    """Source: Wilks (1941); figures from memory, recomputed."""
    assert free_sample_size(0.95, 0.95, two_sided=False) == 59
    assert free_sample_size(0.95, 0.95, two_sided=True) == 93
