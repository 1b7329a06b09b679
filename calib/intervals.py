"""Intervals: of a mean, of a standard deviation, of a ratio."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import special


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


def t_quantile(confidence: float, dof: float) -> float:
    """Return the half width of Student's two-sided interval in standard uncertainties."""
    return float(special.stdtrit(dof, 0.5 + 0.5 * confidence))


def t_estimate(value: float, u: float, dof: float, confidence: float) -> Estimate:
    """Return the estimate with its two-sided Student interval."""
    half = t_quantile(confidence, dof) * u
    return Estimate(value=value, u=u, low=value - half, high=value + half, confidence=confidence)


def sd_estimate(sd: float, dof: float, confidence: float, *, beside: float = 0.0) -> Estimate:
    """Return a standard deviation with its chi-square interval; `u` is that of a sample deviation.

    Parameters
    ----------
    sd : float
    dof : float
    confidence : float
    beside : float
        Known standard deviation of the measurement, which was in the readings too and has been taken off in squares.
    """
    tail = 0.5 * (1.0 - confidence)
    total2 = sd**2 + beside**2
    low2 = total2 * dof / float(special.chdtri(dof, tail)) - beside**2
    high2 = total2 * dof / float(special.chdtri(dof, 1.0 - tail)) - beside**2
    if beside > 0.0 and sd < 1e-6 * beside:
        u = beside / (2.0 * dof) ** 0.25
    else:
        u = total2 / (sd * math.sqrt(2.0 * dof)) if sd > 0.0 else 0.0
    return Estimate(
        value=sd,
        u=u,
        low=math.sqrt(max(low2, 0.0)),
        high=math.sqrt(max(high2, 0.0)),
        confidence=confidence,
    )


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
    t = t_quantile(confidence, dof)
    a = below**2 - t**2 * var_below
    b = above * below - t**2 * cov
    c = above**2 - t**2 * var_above
    root = b**2 - a * c
    if a <= 0.0 or root < 0.0:
        return Estimate(value=value, u=u, low=-np.inf, high=np.inf, confidence=confidence)
    ends = sorted(((b - math.sqrt(root)) / a, (b + math.sqrt(root)) / a))
    return Estimate(value=value, u=u, low=ends[0], high=ends[1], confidence=confidence)
