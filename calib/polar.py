"""A pair of coefficients as a length and a direction, each with its interval."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy import special
from scipy.optimize import brentq

from calib.intervals import Estimate, t_quantile

FloatArray = NDArray[np.float64]


def length_of(pair: FloatArray, cov: FloatArray, dof: float, confidence: float) -> Estimate:
    """Return the length of a pair of normal estimates.

    The interval inverts the noncentral chi-square distribution of the squared length, so that it reaches 0 where the
    pair may be nothing but scatter, and is Student's where it is far from 0; it is for pairs of one variance, and close
    to right for others (bench/power.py, tests).

    Parameters
    ----------
    pair : ndarray, shape (2,)
    cov : ndarray, shape (2, 2)
    dof : float
        Degrees of freedom of `cov`.
    confidence : float
    """
    length = float(np.hypot(*pair))
    towards = pair / length if length > 0.0 else np.array([1.0, 0.0])
    u = math.sqrt(float(towards @ cov @ towards))
    if u == 0.0:
        return Estimate(value=length, u=0.0, low=length, high=length, confidence=confidence)
    tail = 0.5 * (1.0 - confidence)
    wide = u * t_quantile(confidence, dof) / float(special.ndtri(1.0 - tail))
    square = (length / wide) ** 2
    return Estimate(
        value=length,
        u=u,
        low=wide * math.sqrt(_noncentrality(square, 1.0 - tail)),
        high=wide * math.sqrt(_noncentrality(square, tail)),
        confidence=confidence,
    )


def _noncentrality(square: float, chance: float) -> float:
    """Return the noncentrality for which a smaller chi-square with 2 dof has this chance; 0 where none does."""
    if float(special.chdtr(2.0, square)) <= chance:
        return 0.0
    high = (math.sqrt(square) + 10.0) ** 2
    return float(brentq(lambda nc: float(special.chndtr(square, 2.0, nc)) - chance, 0.0, high, xtol=1e-10))


def direction_deg(pair: FloatArray, cov: FloatArray, dof: float, confidence: float) -> Estimate:
    """Return the direction of a pair, in -180 to 180, with Fieller's interval; 180 to either side where unbounded."""
    t = t_quantile(confidence, dof)
    angle = math.degrees(math.atan2(float(pair[1]), float(pair[0])))
    length = float(np.hypot(*pair))
    if length == 0.0:
        return Estimate(value=angle, u=180.0, low=angle - 180.0, high=angle + 180.0, confidence=confidence)
    across = np.array([-pair[1], pair[0]]) / length
    u = math.degrees(math.sqrt(float(across @ cov @ across)) / length)
    size, axes = np.linalg.eigh(np.outer(pair, pair) - t**2 * cov)
    if size[1] <= 0.0:
        return Estimate(value=angle, u=min(u, 180.0), low=angle - 180.0, high=angle + 180.0, confidence=confidence)
    main = axes[:, 1] * math.copysign(1.0, float(axes[:, 1] @ pair))
    middle = math.degrees(math.atan2(float(main[1]), float(main[0])))
    middle += 360.0 * round((angle - middle) / 360.0)
    half = math.degrees(math.atan(math.sqrt(max(-float(size[0]), 0.0) / float(size[1]))))
    return Estimate(value=angle, u=min(u, 180.0), low=middle - half, high=middle + half, confidence=confidence)
