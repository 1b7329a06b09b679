"""Differences of means that were found with unequal uncertainties."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from calib.intervals import Estimate, t_estimate


def welch_dof(u_first: float, dof_first: float, u_second: float, dof_second: float) -> float:
    """Return the effective degrees of freedom of a difference (Welch-Satterthwaite; JCGM 100:2008, G.4.1)."""
    total = u_first**2 + u_second**2
    if total == 0.0:
        return dof_first + dof_second
    return 1.0 / ((u_first**2 / total) ** 2 / dof_first + (u_second**2 / total) ** 2 / dof_second)


def difference(
    first: float,
    second: float,
    *,
    u_first: float,
    u_second: float,
    dof_first: float,
    dof_second: float,
    confidence: float,
) -> tuple[Estimate, float, float]:
    """Return second less first, its effective degrees of freedom, and the two-sided p-value of no difference.

    References
    ----------
    Welch (1947), The generalization of Student's problem when several different population variances are involved,
    Biometrika 34, 28-35.
    """
    u = math.hypot(u_first, u_second)
    dof = welch_dof(u_first, dof_first, u_second, dof_second)
    found = second - first
    return t_estimate(found, u, dof, confidence), dof, two_sided(found, u, dof)


def two_sided(value: float, u: float, dof: float) -> float:
    """Return the p-value of Student's test that a value is 0; without any scatter, 0 or 1."""
    if u == 0.0:
        return 1.0 if value == 0.0 else 0.0
    return 2.0 * float(special.stdtr(dof, -abs(value) / u))


def all_alike(values: ArrayLike, u: ArrayLike, dof: ArrayLike) -> tuple[float, float, float, float]:
    """Return F, its two degrees of freedom and the p-value that several means are one, whatever their scatters.

    Parameters
    ----------
    values, u : array_like, shape (K,)
        Means and their standard uncertainties.
    dof : array_like, shape (K,)
        Degrees of freedom of each uncertainty.

    References
    ----------
    Welch (1951), On the comparison of several mean values: an alternative approach, Biometrika 38, 330-336.
    """
    mean, nu = np.asarray(values, dtype=float), np.asarray(dof, dtype=float)
    u2 = np.asarray(u, dtype=float) ** 2
    k = len(mean)
    if k < 2:
        raise ValueError("two means or more are compared")
    if not np.all(u2 > 0.0):
        return math.nan, k - 1.0, math.nan, math.nan
    weight = 1.0 / u2
    share = weight / weight.sum()
    lack = float(np.sum((1.0 - share) ** 2 / nu)) / (k**2 - 1.0)
    between = float(weight @ (mean - share @ mean) ** 2) / (k - 1.0)
    f = between / (1.0 + 2.0 * (k - 2.0) * lack)
    below = 1.0 / (3.0 * lack)
    return f, k - 1.0, below, float(special.fdtrc(k - 1.0, below, f))
