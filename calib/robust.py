"""A fit that strays pull little at: Student-t errors, by weights that fall with the distance.

Beside the ordinary fit it shows whether a few turns decide the answer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.linear import least_squares

FloatArray = NDArray[np.float64]

TAIL_DOF = 4.0
"""Degrees of freedom of the errors (Lange, Little and Taylor 1989, section 5)."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class RobustFit:
    """A linear model with Student-t errors.

    Parameters
    ----------
    coefficients : ndarray, shape (P,)
    cov : ndarray, shape (P, P)
        From the expected information at the maximum.
    scale : float
        Of the errors, in units of the standard deviations given; not a standard deviation.
    weight : ndarray, shape (N,)
        How much each row counted, relative to one in the middle.
    """

    coefficients: FloatArray
    cov: FloatArray
    scale: float
    weight: FloatArray


def robust_fit(design: FloatArray, data: FloatArray, variance: FloatArray) -> RobustFit:
    """Fit a linear model by maximum likelihood with Student-t errors (expectation-maximisation).

    Parameters
    ----------
    design : ndarray, shape (N, P)
    data : ndarray, shape (N,)
    variance : ndarray, shape (N,)
        Relative variances of the rows.

    References
    ----------
    Lange, Little and Taylor (1989), Robust statistical modeling using the t distribution, JASA 84, 881-896.
    """
    fit = least_squares(design, data, 1.0 / variance)
    floor = 1e-12 * max(float(np.abs(data).max()), 1e-300) / float(np.sqrt(variance.min()))
    spread = np.abs(fit.residuals) / np.sqrt(variance)
    scale = max(1.4826 * float(np.median(spread)), floor)
    weight = np.ones(len(data))
    for _ in range(200):
        weight = (TAIL_DOF + 1.0) / (TAIL_DOF + (fit.residuals**2 / variance) / scale**2)
        fit = least_squares(design, data, weight / variance)
        moved = max(float(np.sqrt(np.mean(weight * fit.residuals**2 / variance))), floor)
        done = abs(moved - scale) <= 1e-10 * scale
        scale = moved
        if done:
            break
    normal = least_squares(design, data, 1.0 / variance).unscaled_cov
    widen = (TAIL_DOF + 3.0) / (TAIL_DOF + 1.0) * len(data) / fit.dof
    return RobustFit(coefficients=fit.coefficients, cov=normal * scale**2 * widen, scale=scale, weight=weight)
