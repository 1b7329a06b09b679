import numpy as np
import pytest
from numpy.testing import assert_allclose

from calib.intervals import ratio_estimate, sd_estimate, t_estimate
from calib.linear import least_squares
from tests.reference import numbers


def crystal(wanted, confidence):
    data = numbers("graybill-iyer-inverse.csv", set="crystal")
    x = np.array(data["x"])
    fit = least_squares(np.column_stack([np.ones_like(x), x]), data["y"])
    (a, b), cov = fit.coefficients, fit.cov
    return ratio_estimate(
        wanted - a,
        b,
        var_above=cov[0, 0],
        var_below=cov[1, 1],
        cov=-cov[0, 1],
        dof=fit.dof,
        confidence=confidence,
    )


@pytest.mark.parametrize(
    ("wanted", "confidence", "published"),
    [(5.0, 0.90, (9.929058, 8.650259, 11.047897)), (8.0, 0.95, (15.8882, 14.6590, 17.1596))],
)
def test_fieller_is_the_inversion_of_the_line(wanted, confidence, published):
    """Source: Graybill and Iyer (1994), p. 434, crystal growth, as quoted by the R package investr and its article."""
    found = crystal(wanted, confidence)
    assert_allclose([found.value, found.low, found.high], published, atol=5e-5)


def test_delta_method_uncertainty():
    """Source: the same, standard error of the mean inversion at 5 by the delta method."""
    assert_allclose(crystal(5.0, 0.95).u, 0.6658998, atol=5e-7)


def test_an_open_ratio_has_no_bounds():
    found = ratio_estimate(1.0, 0.1, var_above=0.01, var_below=0.01, cov=0.0, dof=10, confidence=0.95)
    assert found.low == -np.inf
    assert found.high == np.inf


@pytest.mark.parametrize(
    ("confidence", "published"),
    [(0.90, (0.00563, 0.00712)), (0.95, (0.00551, 0.00729)), (0.99, (0.00530, 0.00766))],
)
def test_limits_of_a_standard_deviation(confidence, published):
    """Source: NIST/SEMATECH e-Handbook gear data, n 100, limits as printed in the Boost manual's examples."""
    found = sd_estimate(0.006278908, 99, confidence)
    assert_allclose([found.low, found.high], published, atol=5e-6)


@pytest.mark.parametrize(("confidence", "published"), [(0.95, (9.25824, 9.26468)), (0.99, (9.25721, 9.26571))])
def test_limits_of_a_mean(confidence, published):
    """Source: NIST/SEMATECH e-Handbook heat flow data, limits as printed in the Boost manual's examples."""
    found = t_estimate(9.26146, 0.02278881 / np.sqrt(195), 194, confidence)
    assert_allclose([found.low, found.high], published, atol=6e-6)
