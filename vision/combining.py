"""Contributions to one uncertainty, with the degrees of freedom that they leave together (JCGM 100, annex G)."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from scipy import stats

CONFIDENCE = 0.95


@dataclass(frozen=True, kw_only=True, slots=True)
class Combined:
    """A combined and an expanded uncertainty.

    Parameters
    ----------
    u : float
        Combined standard uncertainty, in the unit of the contributions.
    degrees_of_freedom : float
        Effective ones; infinite if all contributions are known well.
    coverage_factor : float
        Of Student's distribution at the degrees of freedom, cut to a whole number.
    expanded : float
        Coverage factor times `u`.
    confidence : float
    """

    u: float
    degrees_of_freedom: float
    coverage_factor: float
    expanded: float
    confidence: float


def combine(contributions: Iterable[tuple[float, float]], *, confidence: float = CONFIDENCE) -> Combined:
    """Combine independent contributions.

    Parameters
    ----------
    contributions : iterable of (u, degrees of freedom)
        Standard uncertainties, sensitivity coefficients included.
    confidence : float
        Of the expanded uncertainty.

    Notes
    -----
    Effective degrees of freedom by the Welch-Satterthwaite formula (JCGM 100, G.2b), cut to the next lower whole number
    for the coverage factor (G.4.1).
    """
    parts = [(u, nu) for u, nu in contributions if u > 0.0]
    total = sum(u**2 for u, _ in parts)
    spent = sum(u**4 / nu for u, nu in parts if math.isfinite(nu))
    freedom = total**2 / spent if spent > 0.0 else math.inf
    quantile = 0.5 * (1.0 + confidence)
    whole = math.floor(freedom + 1e-9) if math.isfinite(freedom) else math.inf
    factor = float(stats.t.ppf(quantile, max(whole, 1))) if math.isfinite(whole) else float(stats.norm.ppf(quantile))
    u = math.sqrt(total)
    return Combined(
        u=u, degrees_of_freedom=freedom, coverage_factor=factor, expanded=factor * u, confidence=confidence
    )
