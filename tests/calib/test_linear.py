import numpy as np
import pytest
from numpy.testing import assert_allclose

from calib.errors import NotEnoughTurns, NotIdentified
from calib.linear import least_squares
from tests.reference import numbers


def through_origin(name):
    data = numbers(name)
    return least_squares(np.array(data["x"])[:, None], data["y"])


def line(name):
    data = numbers(name)
    x = np.array(data["x"])
    return least_squares(np.column_stack([np.ones_like(x), x]), data["y"])


def test_noint1():
    """Source: NIST StRD, NoInt1, certified to 15 digits."""
    fit = through_origin("strd-noint1.csv")
    assert fit.dof == 10
    assert_allclose(fit.coefficients[0], 2.07438016528926, rtol=1e-12)
    assert_allclose(np.sqrt(fit.cov[0, 0]), 0.0165289256198347, rtol=1e-12)
    assert_allclose(fit.residual_sd, 3.56753034006338, rtol=1e-12)


def test_noint2():
    """Source: NIST StRD, NoInt2, certified to 15 digits."""
    fit = through_origin("strd-noint2.csv")
    assert fit.dof == 2
    assert_allclose(fit.coefficients[0], 0.727272727272727, rtol=1e-12)
    assert_allclose(np.sqrt(fit.cov[0, 0]), 0.0420827318078432, rtol=1e-12)
    assert_allclose(fit.residual_sd, 0.369274472937998, rtol=1e-12)


def test_norris():
    """Source: NIST StRD, Norris, certified to 15 digits."""
    fit = line("strd-norris.csv")
    assert_allclose(fit.coefficients, [-0.262323073774029, 1.00211681802045], rtol=1e-9)
    assert_allclose(np.sqrt(np.diag(fit.cov)), [0.232818234301152, 0.000429796848199937], rtol=1e-9)
    assert_allclose(fit.residual_sd, 0.884796396144373, rtol=1e-9)


def test_linewidth_calibration_covariance():
    """Source: NIST/SEMATECH e-Handbook 2.3.6.7.3; the published digits."""
    fit = line("nist-linewidth-calibration.csv")
    assert_allclose(fit.coefficients, [0.2357623, 0.9870377], atol=5e-8)
    assert_allclose(np.sqrt(np.diag(fit.cov)), [0.02430034, 0.00344058], atol=5e-9)
    assert_allclose(fit.cov[0, 1], -7.649453e-5, atol=5e-12)


def test_gum_thermometer_line():
    """Source: JCGM 100:2008, H.3, with t0 = 20 deg C; the published digits, then those recomputed from the data."""
    data = numbers("gum-h3.csv")
    t = np.array(data["t_k"]) - 20.0
    fit = least_squares(np.column_stack([np.ones_like(t), t]), data["b_k"])
    u = np.sqrt(np.diag(fit.cov))
    assert_allclose(fit.coefficients * [1, 10], [-0.1712, 0.0218], atol=5e-5)
    assert_allclose(u * [1, 10], [0.0029, 0.0067], atol=5e-5)
    assert_allclose(fit.cov[0, 1] / (u[0] * u[1]), -0.930, atol=5e-4)
    row = np.array([1.0, 10.0])
    assert_allclose([row @ fit.coefficients, np.sqrt(row @ fit.cov @ row)], [-0.1494, 0.0041], atol=5e-5)


def test_weights_act_like_repeated_rows():
    rng = np.random.default_rng(1)
    x, y = rng.normal(size=(6, 2)), rng.normal(size=6)
    weighted = least_squares(x, y, [2, 1, 1, 1, 1, 1])
    repeated = least_squares(np.vstack([x, x[0]]), np.append(y, y[0]))
    assert_allclose(weighted.coefficients, repeated.coefficients, rtol=1e-12)
    assert_allclose(weighted.unscaled_cov, repeated.unscaled_cov, rtol=1e-12)


def test_what_cannot_be_fitted_is_refused():
    with pytest.raises(NotEnoughTurns, match="2 usable turns for 2"):
        least_squares(np.eye(2), [1, 2])
    with pytest.raises(NotIdentified):
        least_squares(np.ones((5, 2)), np.arange(5))
