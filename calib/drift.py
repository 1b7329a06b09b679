"""Drift over a run: a trend whatever its shape, its slope, and whether neighbouring turns are alike.

Several runs are taken together without being compared: each is ordered in itself only.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from calib.errors import NotEnoughTurns
from calib.intervals import Estimate

FloatArray = NDArray[np.float64]

MOST_EXACT = 60
"""Up to this many values the distribution of the trend statistic is counted out, beyond it is taken as normal."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Trend:
    """Mann and Kendall's test for a trend.

    Parameters
    ----------
    s : int
        Pairs that rise in time less pairs that fall.
    variance : float
        Of `s` without a trend, corrected for ties.
    z : float
        Normal deviate, corrected for continuity.
    p_value : float
        Two-sided.
    exact : bool
        Whether the p-value is counted out rather than from `z`.
    n : int
    """

    s: int
    variance: float
    z: float
    p_value: float
    exact: bool
    n: int


@dataclass(frozen=True, kw_only=True, slots=True)
class Likeness:
    """Correlation of neighbouring values.

    Parameters
    ----------
    r1 : float
        Lag-1 autocorrelation.
    expected : float
        What it would be on average in random order.
    p_value : float
        Two-sided, of random order.
    n : int
    """

    r1: float
    expected: float
    p_value: float
    n: int


def mann_kendall(values: ArrayLike, run: ArrayLike | None = None) -> Trend:
    """Return whether values rise or fall in time.

    Parameters
    ----------
    values : array_like, shape (N,)
        In the order of time, run after run.
    run : array_like, shape (N,), optional
        Which run each is of; pairs are within runs (Hirsch, Slack and Smith 1982).

    Raises
    ------
    NotEnoughTurns
        If no run has three values.

    References
    ----------
    Mann (1945), Nonparametric tests against trend, Econometrica 13, 245-259; Kendall (1975), Rank Correlation Methods.
    """
    parts = _parts(values, run, 3, "a trend")
    s = sum(_rises(part) for part in parts)
    variance = sum(_variance(part) for part in parts)
    n = sum(map(len, parts))
    z = (s - np.sign(s)) / math.sqrt(variance) if variance > 0.0 else 0.0
    exact = n <= MOST_EXACT and all(len(np.unique(part)) == len(part) for part in parts)
    p_value = _exact_tail([len(part) for part in parts], s) if exact else 2.0 * float(special.ndtr(-abs(z)))
    return Trend(s=s, variance=variance, z=float(z), p_value=min(p_value, 1.0), exact=exact, n=n)


def theil_sen(
    values: ArrayLike, time: ArrayLike, run: ArrayLike | None = None, *, confidence: float = 0.95
) -> Estimate:
    """Return the median slope of all pairs within runs, with Sen's interval.

    Parameters
    ----------
    values, time : array_like, shape (N,)
    run : array_like, shape (N,), optional
    confidence : float

    References
    ----------
    Sen (1968), Estimates of the regression coefficient based on Kendall's tau, JASA 63, 1379-1389.
    """
    parts, times = _parts(values, run, 3, "a slope"), _parts(time, run, 3, "a slope")
    slopes = np.sort(np.concatenate([_slopes(part, when) for part, when in zip(parts, times, strict=True)]))
    quantile = float(special.ndtri(0.5 + 0.5 * confidence))
    reach = quantile * math.sqrt(sum(_variance(part) for part in parts))
    lowest = round(0.5 * (len(slopes) - reach)) - 1
    highest = round(0.5 * (len(slopes) + reach))
    low = float(slopes[lowest]) if lowest >= 0 else -math.inf
    high = float(slopes[highest]) if highest < len(slopes) else math.inf
    return Estimate(
        value=float(np.median(slopes)), u=0.5 * (high - low) / quantile, low=low, high=high, confidence=confidence
    )


def lag_one(values: ArrayLike, run: ArrayLike | None = None) -> Likeness:
    """Return whether neighbours are more alike, or less, than in random order.

    The mean and variance of the statistic are those of all orders of the same values, so nothing is said of their
    distribution; the p-value then takes it as normal.

    Raises
    ------
    NotEnoughTurns
        If no run has five values.

    References
    ----------
    Wald and Wolfowitz (1943), An exact test for randomness in the non-parametric case based on serial correlation,
    Ann. Math. Stat. 14, 378-388 (here without joining the ends).
    """
    parts = [part - part.mean() for part in _parts(values, run, 5, "the likeness of neighbours")]
    moments = [_serial_moments(part) for part in parts]
    squares = sum(float(part @ part) for part in parts)
    n = sum(map(len, parts))
    if squares == 0.0:
        return Likeness(r1=0.0, expected=0.0, p_value=1.0, n=n)
    found = sum(float(part[:-1] @ part[1:]) for part in parts)
    mean, variance = sum(one for one, _ in moments), sum(one for _, one in moments)
    z = (found - mean) / math.sqrt(variance) if variance > 0.0 else 0.0
    return Likeness(
        r1=found / squares, expected=mean / squares, p_value=2.0 * float(special.ndtr(-abs(z))), n=n
    )


def _parts(values: ArrayLike, run: ArrayLike | None, least: int, what: str) -> list[FloatArray]:
    """Return the values of each run that has at least so many, in order."""
    data = np.asarray(values, dtype=float)
    if not np.all(np.isfinite(data)):
        raise ValueError("a value is not finite")
    which = np.zeros(len(data)) if run is None else np.asarray(run)
    parts = [data[which == name] for name in dict.fromkeys(which.tolist())]
    long = [part for part in parts if len(part) >= least]
    if not long:
        most = max(map(len, parts), default=0)
        raise NotEnoughTurns(
            f"no run has {least} turns in a row to see {what}; the longest has {most}", n_seen=most, n_needed=least
        )
    return long


def _rises(part: FloatArray) -> int:
    return int(np.sum(np.sign(part[None, :] - part[:, None])[np.triu_indices(len(part), 1)]))


def _variance(part: FloatArray) -> float:
    _, ties = np.unique(part, return_counts=True)
    n = len(part)
    return float(n * (n - 1) * (2 * n + 5) - np.sum(ties * (ties - 1) * (2 * ties + 5))) / 18.0


def _exact_tail(lengths: list[int], s: int) -> float:
    """Return the two-sided chance of a statistic this far from 0, by counting all orders."""
    chance = np.ones(1)
    for length in lengths:
        for k in range(2, length + 1):
            chance = np.convolve(chance, np.full(k, 1.0 / k))
    pairs = len(chance) - 1
    return float(np.sum(chance[np.abs(pairs - 2 * np.arange(pairs + 1)) >= abs(s)]))


def _slopes(part: FloatArray, when: FloatArray) -> FloatArray:
    first, second = np.triu_indices(len(part), 1)
    apart = when[second] - when[first]
    return np.asarray((part[second] - part[first])[apart != 0.0] / apart[apart != 0.0])


def _serial_moments(part: FloatArray) -> tuple[float, float]:
    """Return mean and variance of the sum of neighbours' products over all orders of values about their mean."""
    n, two, four = len(part), float(np.sum(part**2)), float(np.sum(part**4))
    mean = -two / n
    pair = (two**2 - four) / (n * (n - 1))
    chain = (2.0 * four - two**2) / (n * (n - 1) * (n - 2))
    apart = (3.0 * two**2 - 6.0 * four) / (n * (n - 1) * (n - 2) * (n - 3))
    n_pairs = n - 1
    n_chains = 2 * (n - 2)
    second = n_pairs * pair + n_chains * chain + (n_pairs**2 - n_pairs - n_chains) * apart
    return mean, max(second - mean**2, 0.0)
