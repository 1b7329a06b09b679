"""Strays: turns too far from the rest to belong to them, by the generalized extreme studentized deviate test.

The farthest value is taken away again and again, up to a stated number, and the largest number of values whose
statistic exceeded its critical value are strays; so one stray does not hide another (Rosner 1983). Here the deviates
are residuals from a line as well as from a mean: the studentized residual takes the place of the deviate.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from calib.errors import CalibError
from calib.intervals import t_quantile
from calib.linear import TINY, least_squares
from calib.mixture import worth

FloatArray = NDArray[np.float64]

STRAY_LEVEL = 0.01
"""Level at which a turn is left out, and
`STRAGGLER_LEVEL` that at which it is only pointed out (ISO 5725-2:1994, 7.3.2.1)."""
STRAGGLER_LEVEL = 0.05
FEWEST_DOF = 3
"""Below that nothing can be called a stray. Just there, one is judged at `STRAGGLER_LEVEL`: at 1 % it would have to lie
some 25 standard deviations out, and one of half that would stay and spoil every interval."""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Extremes:
    """The farthest values, one a step (K steps).

    Parameters
    ----------
    index : tuple of int
        The values in the order taken away.
    statistics, critical : ndarray, shape (K,)
        Studentized deviate of each, and what it would have to exceed.
    n_strays : int
        How many of the first of `index` are strays.
    """

    index: tuple[int, ...]
    statistics: FloatArray
    critical: FloatArray
    n_strays: int

    @property
    def strays(self) -> tuple[int, ...]:
        """Which values are strays."""
        return self.index[: self.n_strays]


def most_strays(n: int) -> int:
    """Return how many strays are looked for among `n` turns."""
    return max(1, min(10, n // 5))


def stray_level(dof: int) -> float:
    """Return the level at which a turn is left out, with these degrees of freedom before."""
    return STRAY_LEVEL if dof > FEWEST_DOF else STRAGGLER_LEVEL


def extremes(values: ArrayLike, *, most: int, level: float = STRAGGLER_LEVEL) -> Extremes:
    """Return the strays of a sample, with deviates in sample standard deviations as Rosner has them.

    Parameters
    ----------
    values : array_like, shape (N,)
    most : int
        Most strays looked for.
    level : float
        Chance of a false alarm in the whole sample.

    References
    ----------
    Rosner (1983), Percentage points for a generalized ESD many-outlier procedure, Technometrics 25, 165-172.
    """
    sample = np.asarray(values, dtype=float)
    found = extreme_residuals(np.ones((len(sample), 1)), sample, most=most, level=level)
    left = len(sample) - np.arange(len(found.index))
    shrink = np.sqrt((left - 1.0) / left)
    return Extremes(
        index=found.index,
        statistics=found.statistics * shrink,
        critical=found.critical * shrink,
        n_strays=found.n_strays,
    )


def extreme_residuals(
    design: ArrayLike,
    data: ArrayLike,
    weight: ArrayLike | None = None,
    *,
    most: int,
    level: float = STRAGGLER_LEVEL,
) -> Extremes:
    """Return the strays from a linear model, fitted again after each value taken away.

    Parameters
    ----------
    design : array_like, shape (N, P)
    data, weight : array_like, shape (N,)
    most : int
    level : float
    """
    matrix, values = np.asarray(design, dtype=float), np.asarray(data, dtype=float)
    weights = np.ones(len(values)) if weight is None else np.asarray(weight, dtype=float)
    left = np.arange(len(values))
    index, statistics, critical = [], [], []
    for _ in range(most):
        step = _farthest(matrix[left], values[left], weights[left], level)
        if step is None:
            break
        where, statistic, limit = step
        index.append(int(left[where]))
        statistics.append(statistic)
        critical.append(limit)
        left = np.delete(left, where)
    beyond = np.flatnonzero(np.array(statistics) > np.array(critical))
    return Extremes(
        index=tuple(index),
        statistics=np.array(statistics),
        critical=np.array(critical),
        n_strays=int(beyond[-1]) + 1 if len(beyond) else 0,
    )


def which_strays(design: ArrayLike, data: ArrayLike, weight: ArrayLike) -> FloatArray:
    """Return for each value how likely it is to be the stray, given that just one is, shape (N,).

    Few turns often cannot tell: two that alone stand for their kind fit equally well without either. By the residual
    likelihood of the others.

    Parameters
    ----------
    design : array_like, shape (N, P)
    data, weight : array_like, shape (N,)
    """
    matrix, weights = np.asarray(design, dtype=float), np.asarray(weight, dtype=float)
    fit = least_squares(matrix, data, weights)
    free = 1.0 - weights * np.einsum("ij,jk,ik->i", matrix, fit.unscaled_cov, matrix)
    told = free > 1e-9
    share = np.where(told, weights * fit.residuals**2 / np.where(told, free, 1.0), 0.0)
    left = np.maximum(1.0 - share / max(fit.dof * fit.residual_sd**2, TINY), 1e-24)
    log_likelihood = np.where(told, -0.5 * (fit.dof - 1) * np.log(left) - 0.5 * np.log(np.where(told, free, 1.0)), -700)
    return worth(np.exp(log_likelihood - log_likelihood.max()))


def _farthest(
    design: FloatArray, data: FloatArray, weight: FloatArray, level: float
) -> tuple[int, float, float] | None:
    """Return the row with the largest studentized residual, that residual, and its critical value."""
    n, n_columns = design.shape
    dof = n - n_columns
    if dof < 2:
        return None
    try:
        fit = least_squares(design, data, weight)
    except CalibError:
        return None
    scale = max(float(np.abs(data).max()), TINY)
    if fit.residual_sd <= 1e-12 * scale * float(np.sqrt(weight.max())):
        return None
    leverage = weight * np.einsum("ij,jk,ik->i", design, fit.unscaled_cov, design)
    free = np.maximum(1.0 - leverage, 1e-9)
    studentized = np.where(leverage < 1.0 - 1e-9, np.abs(fit.residuals) * np.sqrt(weight / free) / fit.residual_sd, 0.0)
    where = int(np.argmax(studentized))
    t = t_quantile(1.0 - level / n, dof - 1)
    return where, float(studentized[where]), t * float(np.sqrt(dof / (dof - 1.0 + t**2)))
