"""How single turns scatter about the fitted line: three noise laws, each turn's own uncertainty taken into account."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from calib.linear import LinearFit, least_squares

FloatArray = NDArray[np.float64]

LAWS = {"constant": 0.0, "root": 0.5, "proportional": 1.0}
"""Noise laws by name: the power of the turn's size with which the standard deviation grows."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class ScatterFit:
    """A linear fit with the scatter that it was weighted by.

    Parameters
    ----------
    linear : LinearFit
        Weighted by the inverse of `variance_deg2`, so that `linear.unscaled_cov` is the covariance.
    scatter_deg : float
        Repeatability standard deviation of a turn of `size_deg`.
    size_deg : float
        Size of turn that `scatter_deg` stands for: the root mean square of the data.
    law : str
    variance_deg2 : ndarray, shape (N,)
    log_likelihood : float
        At the maximum over coefficients, the scatter from its residual likelihood.
    """

    linear: LinearFit
    scatter_deg: float
    size_deg: float
    law: str
    variance_deg2: FloatArray
    log_likelihood: float


def fit_with_scatter(design: FloatArray, data: FloatArray, u: FloatArray, size: FloatArray, law: str) -> ScatterFit:
    """Fit a line and the scatter about it by residual maximum likelihood (Patterson and Thompson 1971).

    Parameters
    ----------
    design : ndarray, shape (N, P)
    data : ndarray, shape (N,)
    u : ndarray, shape (N,)
        Standard uncertainties of the data.
    size : ndarray, shape (N,)
        Sizes of the turns, positive.
    law : str
        A key of `LAWS`.
    """
    typical = float(np.sqrt(np.mean(size**2)))
    shape = (size / typical) ** (2.0 * LAWS[law])
    first = least_squares(design, data, 1.0 / shape)
    if not np.any(u > 0.0):
        return _made(first, first.residual_sd, typical, law, shape * first.residual_sd**2, design, data)
    top = max(first.residual_sd, 1e-12)

    def cost(scatter: float) -> float:
        return -_residual_likelihood(design, data, u**2 + scatter**2 * shape)

    found = minimize_scalar(cost, bounds=(0.0, 3.0 * top), method="bounded", options={"xatol": 1e-5 * top})
    scatter = float(found.x) if found.fun < cost(0.0) else 0.0
    variance = u**2 + scatter**2 * shape
    return _made(least_squares(design, data, 1.0 / variance), scatter, typical, law, variance, design, data)


def _made(
    linear: LinearFit,
    scatter: float,
    typical: float,
    law: str,
    variance: FloatArray,
    design: FloatArray,
    data: FloatArray,
) -> ScatterFit:
    variance = np.maximum(variance, np.finfo(float).tiny)
    final = least_squares(design, data, 1.0 / variance)
    likelihood = -0.5 * float(np.sum(np.log(2.0 * np.pi * variance) + final.residuals**2 / variance))
    return ScatterFit(
        linear=final,
        scatter_deg=scatter,
        size_deg=typical,
        law=law,
        variance_deg2=variance,
        log_likelihood=likelihood,
    )


def _residual_likelihood(design: FloatArray, data: FloatArray, variance: FloatArray) -> float:
    """Return the logarithm of the residual likelihood up to a constant; by normal equations, since it is searched."""
    weight = 1.0 / np.maximum(variance, np.finfo(float).tiny)
    weighted = design * weight[:, None]
    normal = design.T @ weighted
    left = data - design @ np.linalg.solve(normal, weighted.T @ data)
    _, log_det = np.linalg.slogdet(normal)
    return 0.5 * float(np.sum(np.log(weight)) - weight @ left**2 - log_det)
