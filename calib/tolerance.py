"""Tolerance factors: how many standard deviations hold a share of all turns with a stated confidence."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import special, stats
from scipy.optimize import brentq

_NODES, _WEIGHTS = (np.asarray(one) for one in np.polynomial.legendre.leggauss(96))
CENTRE_NODES = 4.5 * (_NODES + 1.0)
CENTRE_WEIGHTS = 9.0 * _WEIGHTS * np.exp(-0.5 * CENTRE_NODES**2) / math.sqrt(2.0 * math.pi)
"""Where the centre may lie, in its standard uncertainties either way, and how likely."""


def tolerance_factor(n: float, dof: float, coverage: float, confidence: float) -> float:
    """Return the exact two-sided factor for a normal population.

    Parameters
    ----------
    n : float
        Readings behind the mean; for a point on a fitted line, the variance of one reading over that of the point.
    dof : float
        Degrees of freedom of the standard deviation.
    coverage, confidence : float
        Share of the population to hold, and how sure.

    References
    ----------
    ISO 16269-6:2014; Krishnamoorthy and Mathew (2009), Statistical Tolerance Regions, 2.3.
    """
    return tolerance_half_width([HalfBand(weight=1.0, u_centre=1.0 / math.sqrt(n), sd=1.0)], dof, coverage, confidence)


@dataclass(frozen=True, kw_only=True, slots=True)
class HalfBand:
    """A normal population as far as it is known under one law: `u_centre` and `sd` in one unit."""

    weight: float
    u_centre: float
    sd: float


def tolerance_half_width(laws: Sequence[HalfBand], dof: float, coverage: float, confidence: float) -> float:
    """Return the half width of the band about the centre that holds a share, the laws weighted as they are believed.

    Parameters
    ----------
    laws : sequence of HalfBand
        Weights add up to one.
    dof : float
        Degrees of freedom of the standard deviations.
    coverage, confidence : float
    """
    _check(coverage, confidence)
    weight, centre, sd = (np.array([getattr(one, name) for one in laws]) for name in ("weight", "u_centre", "sd"))
    reach2 = special.chndtrix(coverage, 1.0, np.outer(centre / sd, CENTRE_NODES) ** 2) * sd[:, None] ** 2

    def short(log_half: float) -> float:
        sure = special.chdtrc(dof, dof * reach2 * math.exp(-2.0 * log_half)) @ CENTRE_WEIGHTS
        return float(weight @ sure) - confidence

    middle = math.log(max(one.sd for one in laws))
    return math.exp(float(brentq(short, middle + math.log(1e-3), middle + math.log(1e6), xtol=1e-12)))


def one_sided_factor(n: float, dof: float, coverage: float, confidence: float) -> float:
    """Return the exact one-sided factor for a normal population (noncentral t)."""
    _check(coverage, confidence)
    root = math.sqrt(n)
    return float(stats.nct.ppf(confidence, dof, float(stats.norm.ppf(coverage)) * root)) / root


def howe_factor(n: float, dof: float, coverage: float, confidence: float) -> float:
    """Return Howe's approximation to the two-sided factor, for comparison with published tables.

    References
    ----------
    Howe (1969), Two-sided tolerance limits for normal populations, JASA 64, 610-620.
    """
    _check(coverage, confidence)
    z = float(stats.norm.ppf(0.5 + 0.5 * coverage))
    return z * math.sqrt(dof * (1.0 + 1.0 / n) / float(stats.chi2.ppf(1.0 - confidence, dof)))


def free_sample_size(coverage: float, confidence: float, *, two_sided: bool) -> int:
    """Return the least sample whose largest value (or whose two extremes) hold a share, whatever the distribution.

    References
    ----------
    Wilks (1941), Determination of sample sizes for setting tolerance limits, Ann. Math. Stat. 12, 91-96.
    """
    _check(coverage, confidence)
    n = 2
    while stats.beta.sf(coverage, n - two_sided, 1 + two_sided) < confidence:
        n += 1
    return n


def _check(coverage: float, confidence: float) -> None:
    if not (0.0 < coverage < 1.0 and 0.0 < confidence < 1.0):
        raise ValueError(f"coverage {coverage}, confidence {confidence}; accepted: above 0 and below 1")
