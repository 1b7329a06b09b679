"""Whether a difference is within a margin: two one-sided tests, so that few turns never pass as no difference."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import special

from calib.intervals import Estimate, t_estimate


@dataclass(frozen=True, kw_only=True, slots=True)
class Equivalence:
    """Two one-sided tests of a difference.

    Parameters
    ----------
    difference : Estimate
        With the interval that must lie within the margin: its confidence is one less twice the level.
    margin : float
    t_above_low, t_below_high : float
        Student's statistics against the lower and the upper margin.
    p_above_low, p_below_high : float
        One-sided p-values of the two.
    dof : float
    """

    difference: Estimate
    margin: float
    t_above_low: float
    t_below_high: float
    p_above_low: float
    p_below_high: float
    dof: float

    @property
    def p_value(self) -> float:
        """The larger of the two: below the level, the difference is within the margin."""
        return max(self.p_above_low, self.p_below_high)


def two_one_sided(difference: float, u: float, dof: float, margin: float, level: float = 0.05) -> Equivalence:
    """Return the tests that a difference lies within plus or minus a margin.

    Parameters
    ----------
    difference, u, dof : float
        The difference, its standard uncertainty and degrees of freedom.
    margin : float
        Above 0.
    level : float

    References
    ----------
    Schuirmann (1987), A comparison of the two one-sided tests procedure and the power approach, J. Pharmacokin.
    Biopharm. 15, 657-680.
    """
    if not (margin > 0.0 and math.isfinite(margin)):
        raise ValueError(f"margin {margin}; accepted: a number above 0")
    low, high = difference + margin, difference - margin
    t_low = low / u if u > 0.0 else math.copysign(math.inf, low)
    t_high = high / u if u > 0.0 else math.copysign(math.inf, high)
    return Equivalence(
        difference=t_estimate(difference, u, dof, 1.0 - 2.0 * level),
        margin=margin,
        t_above_low=t_low,
        t_below_high=t_high,
        p_above_low=float(special.stdtr(dof, -t_low)),
        p_below_high=float(special.stdtr(dof, t_high)),
        dof=dof,
    )


def chance_to_show(difference: float, u: float, dof: float, margin: float, level: float = 0.05) -> float:
    """Return the chance that the tests show equivalence, if the difference and its uncertainty are truly these.

    Integrated over the distribution of the uncertainty that will be found, in steps of equal probability.
    """
    if u == 0.0:
        return float(abs(difference) < margin)
    middle = (np.arange(400) + 0.5) / 400
    found = u * np.sqrt(special.chdtri(dof, 1.0 - middle) / dof)
    room = margin + special.stdtrit(dof, level) * found
    chance = special.ndtr((room - difference) / u) - special.ndtr((-room - difference) / u)
    return float(np.mean(np.where(room > 0.0, chance, 0.0)))
