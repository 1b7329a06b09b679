"""How many repeats a wanted certainty takes."""

from __future__ import annotations

import math
from collections.abc import Callable

from scipy import special, stats

from calib.equivalence import chance_to_show
from calib.errors import CalibError
from calib.intervals import t_quantile

MOST = 1_000_000
"""No plan asks for more."""


def least_count(good: Callable[[int], bool], lowest: int = 2, highest: int = MOST) -> int:
    """Return the least count that is good, if every larger one is good too.

    Raises
    ------
    CalibError
        If even the highest is not.
    """
    top = lowest
    while not good(top):
        if top >= highest:
            raise CalibError(f"more than {highest} repeats would be needed; ask for less certainty")
        top = min(2 * top, highest)
    low = max(lowest, top // 2)
    while low < top:
        middle = (low + top) // 2
        low, top = (low, middle) if good(middle) else (middle + 1, top)
    return top


def repeats_for_mean(half_width: float, sd: float, *, confidence: float = 0.95, commands: int = 1) -> int:
    """Return the repeats of each command for the interval of its mean to reach this far either way.

    Parameters
    ----------
    half_width, sd : float
        Wanted half-width, and the standard deviation of single turns that is expected.
    confidence : float
    commands : int
        Commands repeated alike, whose common scatter the interval uses.
    """
    _check(half_width, sd, confidence)

    def good(n: int) -> bool:
        return t_quantile(confidence, commands * (n - 1)) * sd / math.sqrt(n) <= half_width

    return least_count(good)


def repeats_for_spread(share: float, *, confidence: float = 0.95, commands: int = 1) -> int:
    """Return the repeats for half the width of a standard deviation's interval to be at most this share of it."""
    if not 0.0 < share < 10.0:
        raise ValueError(f"share {share}; accepted: above 0 and below 10")
    _check(share, 1.0, confidence)
    tail = 0.5 * (1.0 - confidence)

    def good(n: int) -> bool:
        dof = commands * (n - 1)
        low, high = (math.sqrt(dof / float(special.chdtri(dof, one))) for one in (tail, 1.0 - tail))
        return 0.5 * (high - low) <= share

    return least_count(good)


def repeats_for_difference(
    half_width: float, sd_first: float, sd_second: float, *, confidence: float = 0.95, commands: int = 1
) -> int:
    """Return the repeats on each of two floors for the interval of their difference to reach this far either way."""
    _check(half_width, math.hypot(sd_first, sd_second), confidence)

    def good(n: int) -> bool:
        each = commands * (n - 1)
        first, second = sd_first**2, sd_second**2
        dof = each * (first + second) ** 2 / (first**2 + second**2)
        return t_quantile(confidence, dof) * math.sqrt((first + second) / n) <= half_width

    return least_count(good)


def repeats_to_detect(difference: float, sd: float, *, level: float = 0.05, power: float = 0.8) -> int:
    """Return the repeats on each of two floors for Student's test to see a true difference with this chance.

    References
    ----------
    Cohen (1988), Statistical Power Analysis for the Behavioral Sciences, 2.4 (there from tables of the same power).
    """
    _check(abs(difference), sd, 1.0 - level)
    return least_count(lambda n: detection_power(difference, sd * math.sqrt(2.0 / n), 2 * n - 2, level) >= power)


def detection_power(difference: float, u: float, dof: float, level: float = 0.05) -> float:
    """Return the chance that Student's two-sided test sees a true difference of this size."""
    critical, apart = t_quantile(1.0 - level, dof), abs(difference) / u
    return float(stats.nct.sf(critical, dof, apart) + stats.nct.cdf(-critical, dof, apart))


def repeats_for_equivalence(
    margin: float, sd: float, *, difference: float = 0.0, level: float = 0.05, power: float = 0.8
) -> int:
    """Return the repeats on each of two floors to show that they are the same within a margin, with this chance."""
    _check(margin, sd, 1.0 - level)
    if not abs(difference) < margin:
        raise ValueError(f"difference {difference}; accepted: less than the margin, {margin}")
    return least_count(
        lambda n: chance_to_show(difference, sd * math.sqrt(2.0 / n), 2 * n - 2, margin, level) >= power
    )


def repeats_for_hit_rate(half_width: float, rate: float, *, confidence: float = 0.95) -> int:
    """Return the turns for half the width of Wilson's interval of a hit rate to be at most this.

    References
    ----------
    Wilson (1927), Probable inference, the law of succession, and statistical inference, JASA 22, 209-212.
    """
    if not (0.0 < half_width < 0.5 and 0.0 <= rate <= 1.0):
        raise ValueError(f"half width {half_width}, rate {rate}; accepted: above 0 and below 0.5, and from 0 to 1")
    return least_count(lambda n: wilson_half_width(rate, n, confidence) <= half_width, lowest=1)


def wilson_half_width(rate: float, n: int, confidence: float = 0.95) -> float:
    """Return half the width of Wilson's interval for a rate seen in n turns."""
    z2 = float(special.ndtri(0.5 + 0.5 * confidence)) ** 2
    return math.sqrt(z2 * rate * (1.0 - rate) / n + 0.25 * (z2 / n) ** 2) / (1.0 + z2 / n)


def turns_to_settle(
    difference: float,
    u: float,
    dof: float,
    margin: float,
    n_turns: int,
    *,
    level: float = 0.05,
    power: float = 0.8,
    most: int = 10_000,
) -> int | None:
    """Return how many turns more on each floor would settle a comparison, if the difference is as found.

    Settled means shown to be different, or the same within the margin, with chance `power`.

    Parameters
    ----------
    difference, u, dof : float
        As found so far.
    margin : float
    n_turns : int
        Turns so far of the floor that has fewer.
    level, power : float
    most : int

    Returns
    -------
    int or None
        None where more than `most` would be needed: the difference lies at the margin, or at 0.
    """

    def good(more: int) -> bool:
        times = (n_turns + more) / n_turns
        u_then, dof_then = u / math.sqrt(times), dof * times
        shown = chance_to_show(difference, u_then, dof_then, margin, level)
        return max(shown, detection_power(difference, u_then, dof_then, level)) >= power

    try:
        return least_count(good, lowest=1, highest=most)
    except CalibError:
        return None


def _check(width: float, sd: float, confidence: float) -> None:
    if not (width > 0.0 and math.isfinite(width)):
        raise ValueError(f"width {width}; accepted: a number above 0")
    if not (sd >= 0.0 and math.isfinite(sd)):
        raise ValueError(f"standard deviation {sd}; accepted: 0 or more")
    if not 0.0 < confidence < 1.0:
        raise ValueError(f"confidence {confidence}; accepted: above 0 and below 1")
