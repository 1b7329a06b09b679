"""Intervals: of a mean, of a standard deviation, of a ratio."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import stats


@dataclass(frozen=True, kw_only=True, slots=True)
class Estimate:
    """A number with what is known of it.

    Parameters
    ----------
    value : float
    u : float
        Standard uncertainty (k = 1).
    low, high : float
        Interval at `confidence`; infinite where the data set no bound.
    confidence : float
    """

    value: float
    u: float
    low: float
    high: float
    confidence: float


def t_estimate(value: float, u: float, dof: float, confidence: float) -> Estimate:
    """Return the estimate with its two-sided Student interval."""
    half = float(stats.t.ppf(0.5 + 0.5 * confidence, dof)) * u
    return Estimate(value=value, u=u, low=value - half, high=value + half, confidence=confidence)


def sd_estimate(sd: float, dof: float, confidence: float) -> Estimate:
    """Return a standard deviation with its chi-square interval; `u` is that of a sample deviation."""
    tail = 0.5 * (1.0 - confidence)
    low = sd * math.sqrt(dof / float(stats.chi2.ppf(1.0 - tail, dof)))
    high = sd * math.sqrt(dof / float(stats.chi2.ppf(tail, dof)))
    return Estimate(value=sd, u=sd / math.sqrt(2.0 * dof), low=low, high=high, confidence=confidence)


def ratio_estimate(
    above: float,
    below: float,
    *,
    var_above: float,
    var_below: float,
    cov: float,
    dof: float,
    confidence: float,
) -> Estimate:
    """Return a ratio of two normal estimates with Fieller's interval.

    The interval is unbounded where the denominator cannot be told from zero.

    References
    ----------
    Fieller (1954), Some problems in interval estimation, J. R. Statist. Soc. B 16, 175-185.
    """
    value = above / below
    u = math.sqrt(max(var_above - 2.0 * value * cov + value**2 * var_below, 0.0)) / abs(below)
    t = float(stats.t.ppf(0.5 + 0.5 * confidence, dof))
    a = below**2 - t**2 * var_below
    b = above * below - t**2 * cov
    c = above**2 - t**2 * var_above
    root = b**2 - a * c
    if a <= 0.0 or root < 0.0:
        return Estimate(value=value, u=u, low=-np.inf, high=np.inf, confidence=confidence)
    ends = sorted(((b - math.sqrt(root)) / a, (b + math.sqrt(root)) / a))
    return Estimate(value=value, u=u, low=ends[0], high=ends[1], confidence=confidence)
