"""Whether spreads differ: the F test for two, and Brown and Forsythe's for any number and almost any distribution."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike
from scipy import special, stats

from calib.intervals import Estimate


def spread_ratio(
    sd_first: float, dof_first: float, sd_second: float, dof_second: float, confidence: float
) -> tuple[Estimate, float]:
    """Return the second standard deviation over the first, with its F interval and two-sided p-value of no difference.

    Both are NaN where the first is 0. The standard uncertainty is that of the logarithm's first order.
    """
    if sd_first == 0.0:
        missing = Estimate(value=math.nan, u=math.nan, low=0.0, high=math.inf, confidence=confidence)
        return missing, math.nan
    ratio = sd_second / sd_first
    tail = 0.5 * (1.0 - confidence)
    estimate = Estimate(
        value=ratio,
        u=ratio * math.sqrt(0.5 / dof_first + 0.5 / dof_second),
        low=ratio / math.sqrt(float(special.fdtri(dof_second, dof_first, 1.0 - tail))),
        high=ratio / math.sqrt(float(special.fdtri(dof_second, dof_first, tail))),
        confidence=confidence,
    )
    f = ratio**2
    below, above = (float(one(dof_second, dof_first, f)) for one in (special.fdtr, special.fdtrc))
    return estimate, min(1.0, 2.0 * min(below, above))


def brown_forsythe(groups: Sequence[ArrayLike]) -> tuple[float, float]:
    """Return F and the p-value that all groups have one spread, by distances from the groups' medians.

    NaN where a group has fewer than two values, or no value is off its median.

    References
    ----------
    Brown and Forsythe (1974), Robust tests for the equality of variances, JASA 69, 364-367.
    """
    values = [np.asarray(group, dtype=float) for group in groups]
    if len(values) < 2 or any(len(group) < 2 for group in values):
        return math.nan, math.nan
    if all(np.ptp(np.abs(group - np.median(group))) == 0.0 for group in values):
        return math.nan, math.nan
    found = stats.levene(*values, center="median")
    return float(found.statistic), float(found.pvalue)
