"""Intervals that rest on several noise laws at once, each believed as far as the turns speak for it.

Under each law an estimate has a distribution of its own (Student's, Fieller's, a chi-square's); the ends of the
interval are quantiles of their weighted mixture. With one law they are those of `calib.intervals`, to the digit.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special
from scipy.optimize import brentq

from calib.intervals import Estimate, ratio_estimate, sd_estimate, t_estimate

FloatArray = NDArray[np.float64]

NEGLIGIBLE = 1e-4
"""A law with a smaller weight is left out."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Part:
    """A value with its standard uncertainty under one law."""

    weight: float
    value: float
    u: float


@dataclass(frozen=True, kw_only=True, slots=True)
class RatioPart:
    """Numerator and denominator of a ratio under one law."""

    weight: float
    above: float
    below: float
    var_above: float
    var_below: float
    cov: float


def mixed_t(parts: Sequence[Part], dof: float, confidence: float) -> Estimate:
    """Return the weighted mean with the interval of the mixture of Student's distributions.

    Parameters
    ----------
    parts : sequence of Part
        Weights add up to one.
    dof : float
    confidence : float
    """
    each = [t_estimate(one.value, one.u, dof, confidence) for one in parts]
    weight, value, u = (np.array([getattr(one, name) for one in parts]) for name in ("weight", "value", "u"))
    if len(parts) == 1 or not np.all(u > 0.0):
        return each[int(np.argmax(weight))]

    def below(x: float) -> float:
        return float(weight @ special.stdtr(dof, (x - value) / u))

    return _mixed(each, weight, below, value=float(weight @ value), confidence=confidence)


def mixed_ratio(parts: Sequence[RatioPart], dof: float, confidence: float) -> Estimate:
    """Return a ratio with the interval of the mixture of Fieller's distributions.

    Parameters
    ----------
    parts : sequence of RatioPart
    dof : float
    confidence : float
    """
    each = [
        ratio_estimate(
            one.above,
            one.below,
            var_above=one.var_above,
            var_below=one.var_below,
            cov=one.cov,
            dof=dof,
            confidence=confidence,
        )
        for one in parts
    ]
    weight = np.array([one.weight for one in parts])
    names = ("above", "below", "var_above", "var_below", "cov")
    above, below, var_above, var_below, cov = (np.array([getattr(one, name) for one in parts]) for name in names)
    if len(parts) == 1:
        return each[0]

    def less(x: float) -> float:
        u = np.sqrt(np.maximum(var_above - 2.0 * x * cov + x**2 * var_below, 1e-300))
        return float(weight @ special.stdtr(dof, (x * below - above) / u))

    return _mixed(each, weight, less, value=float((weight @ above) / (weight @ below)), confidence=confidence)


def mixed_sd(parts: Sequence[Part], dof: float, confidence: float, *, beside: float = 0.0) -> Estimate:
    """Return a standard deviation with the interval of the mixture of chi-square distributions.

    Parameters
    ----------
    parts : sequence of Part
        `value` is the deviation under a law; `u` is not read.
    dof : float
    confidence : float
    beside : float
        As in `calib.intervals.sd_estimate`.
    """
    each = [sd_estimate(one.value, dof, confidence, beside=beside) for one in parts]
    weight, sd = np.array([one.weight for one in parts]), np.array([one.value for one in parts])
    if len(parts) == 1 or not np.all(sd > 0.0):
        return each[int(np.argmax(weight))]

    def less(x: float) -> float:
        return float(weight @ special.chdtrc(dof, dof * (sd**2 + beside**2) / (x**2 + beside**2)))

    return _mixed(each, weight, less, value=float(np.sqrt(weight @ sd**2)), confidence=confidence)


def _mixed(
    each: Sequence[Estimate], weight: FloatArray, less: Callable[[float], float], *, value: float, confidence: float
) -> Estimate:
    """Return the estimate whose ends are quantiles of `less`; they lie between those of the parts."""
    tail = 0.5 * (1.0 - confidence)
    spread = np.array([one.u**2 + (one.value - value) ** 2 for one in each])
    return Estimate(
        value=value,
        u=float(np.sqrt(weight @ spread)),
        low=_quantile(less, tail, [one.low for one in each]),
        high=_quantile(less, 1.0 - tail, [one.high for one in each]),
        confidence=confidence,
    )


def _quantile(less: Callable[[float], float], share: float, ends: Sequence[float]) -> float:
    low, high = min(ends), max(ends)
    if not (math.isfinite(low) and math.isfinite(high)):
        return low if share < 0.5 else high
    if low == high or less(low) >= share or less(high) <= share:
        return low if less(low) >= share else high
    return float(
        brentq(lambda x: less(x) - share, low, high, xtol=1e-12 * max(abs(low), abs(high), 1e-300), rtol=1e-12)
    )


def worth(likelihood: FloatArray) -> FloatArray:
    """Return weights in proportion to likelihoods, negligible ones set to zero, adding up to one."""
    weight = likelihood / likelihood.sum()
    kept = np.where(weight < NEGLIGIBLE, 0.0, weight)
    return np.asarray(kept / kept.sum(), dtype=np.float64)
