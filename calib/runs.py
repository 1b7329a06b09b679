"""Within and between runs: the two parts of the scatter (ISO 5725-2), with intervals.

A run is a stretch driven under the same conditions: one clip. Turns of a run are more alike than turns of different
runs where something changed between them: the robot was put down anew, the batteries, the day. The between-run part is
found after everything else that is known of the turns (their commands) has been fitted, so unequal runs and several
commands are no obstacle; the intervals are exact in level where the runs are of one length and one command, and close
to it elsewhere.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from calib.errors import NotEnoughTurns, NotIdentified
from calib.intervals import Estimate, sd_estimate
from calib.terms import spanned

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True, slots=True)
class RunParts:
    """The parts of the scatter.

    Parameters
    ----------
    repeatability, between, reproducibility : Estimate
        Standard deviations: of turns within a run, of runs, and of turns of different runs.
    ms_between, ms_within : float
        Mean squares.
    dof_between, dof_within : int
    turns_a_run : float
        Effective number of turns of a run, the weight of the between-run variance in `ms_between`.
    f, p_value : float
        Test that there is no between-run part.
    negative : bool
        Whether the between-run variance came out below 0 and was set to 0 (ISO 5725-2:1994, 7.4.5).
    """

    repeatability: Estimate
    between: Estimate
    reproducibility: Estimate
    ms_between: float
    ms_within: float
    dof_between: int
    dof_within: int
    turns_a_run: float
    f: float
    p_value: float
    negative: bool


def run_parts(
    values: ArrayLike, run: ArrayLike, design: ArrayLike | None = None, *, confidence: float = 0.95
) -> RunParts:
    """Split the scatter of values into its parts within and between runs.

    Parameters
    ----------
    values : array_like, shape (N,)
    run : array_like, shape (N,)
        Which run each is of.
    design : array_like, shape (N, P), optional
        What else is fitted; a common mean by default.
    confidence : float

    Raises
    ------
    NotIdentified
        If there is one run only, or runs cannot be told from the columns of the design.
    NotEnoughTurns
        If nothing is left to tell the scatter within runs.

    References
    ----------
    ISO 5725-2:1994, 7.4; Henderson (1953), Estimation of variance and covariance components, Biometrics 9, 226-252
    (method 3, for unequal runs); Ting, Burdick, Graybill, Jeyaratnam and Lu (1990), Confidence intervals on linear
    combinations of variance components that are unrestricted in sign, J. Statist. Comput. Simul. 35, 135-143; Graybill
    and Wang (1980), Confidence intervals on nonnegative linear combinations of variances, JASA 75, 869-873.
    """
    data = np.asarray(values, dtype=float)
    names, which = np.unique(np.asarray(run), return_inverse=True)
    if len(names) < 2:
        raise NotIdentified("there is one run only")
    base = np.ones((len(data), 1)) if design is None else np.asarray(design, dtype=float)
    member = (which[:, None] == np.arange(len(names))).astype(float)
    free = member - _onto(base, member)
    directions = _basis(free, float(np.linalg.norm(member)))
    dof_between = directions.shape[1]
    if dof_between == 0:
        raise NotIdentified("runs cannot be told from commands: no command was driven in more than one run")
    left = data - _onto(base, data[:, None])[:, 0]
    squares_between = float(np.sum((directions.T @ left) ** 2))
    dof_within = len(data) - spanned(base).shape[1] - dof_between
    if dof_within < 1:
        raise NotEnoughTurns(
            f"{len(data)} turns in {len(names)} runs leave nothing to tell the scatter within runs; repeat some turns",
            n_seen=len(data),
            n_needed=len(data) + 1 - dof_within,
        )
    within = left - directions @ (directions.T @ left)
    squares_within = float(within @ within)
    return _parts(
        squares_between / dof_between,
        _clean(squares_within, data) / dof_within,
        dof_between,
        dof_within,
        float(np.sum(free**2)) / dof_between,
        confidence,
    )


def run_parts_of_sums(
    count: ArrayLike, total: ArrayLike, squares: ArrayLike, *, n_fitted: int = 1, confidence: float = 0.95
) -> RunParts:
    """Split the scatter within and between many runs, from the sums of each: what `run_parts` says of a common mean.

    Parameters
    ----------
    count, total, squares : array_like, shape (R,)
        Values of each run, their sum, and the sum of their squares.
    n_fitted : int
        Means that were fitted to the values and taken off before.
    confidence : float

    Raises
    ------
    NotIdentified
        If there is one run only.
    NotEnoughTurns
        If nothing is left to tell the scatter within runs.
    """
    n, sums, squared = (np.asarray(one, dtype=float) for one in (count, total, squares))
    if len(n) < 2:
        raise NotIdentified("there is one run only")
    n_all, dof_between = float(n.sum()), len(n) - 1
    dof_within = int(n_all) - len(n) - (n_fitted - 1)
    if dof_within < 1:
        raise NotEnoughTurns(
            f"{int(n_all)} turns in {len(n)} runs leave nothing to tell the scatter within runs; repeat some turns",
            n_seen=int(n_all),
            n_needed=int(n_all) + 1 - dof_within,
        )
    between = float(np.sum(sums**2 / n) - sums.sum() ** 2 / n_all)
    within = float(squared.sum() - np.sum(sums**2 / n))
    return _parts(
        max(between, 0.0) / dof_between,
        max(within, 0.0) / dof_within,
        dof_between,
        dof_within,
        (n_all - float(np.sum(n**2)) / n_all) / dof_between,
        confidence,
    )


def _clean(squares: float, data: FloatArray) -> float:
    """Return a sum of squares, 0 where it is nothing but rounding."""
    return squares if squares > len(data) * (1e-14 * float(np.abs(data).max())) ** 2 else 0.0


def _basis(columns: FloatArray, scale: float) -> FloatArray:
    """Return orthonormal directions that the columns span, beyond rounding at a given scale."""
    left, size, _ = np.linalg.svd(columns, full_matrices=False)
    return np.asarray(left[:, size > 1e-9 * scale])


def _onto(base: FloatArray, columns: FloatArray) -> FloatArray:
    directions = spanned(base)
    return np.asarray(directions @ (directions.T @ columns))


def _parts(above: float, below: float, n_above: int, n_below: int, per_run: float, confidence: float) -> RunParts:
    raw = (above - below) / per_run
    between2 = max(raw, 0.0)
    total2 = below + between2
    f = above / below if below > 0.0 else math.inf
    var_above, var_below = 2.0 * above**2 / n_above, 2.0 * below**2 / n_below
    u_between2 = math.sqrt(var_above + var_below) / per_run
    u_total2 = math.sqrt(var_above / per_run**2 + (1.0 - 1.0 / per_run) ** 2 * var_below)
    return RunParts(
        repeatability=sd_estimate(math.sqrt(below), n_below, confidence),
        between=_sd(between2, u_between2, difference_bounds(above, below, n_above, n_below, confidence), per_run),
        reproducibility=_sd(
            total2,
            u_total2,
            sum_bounds(above, (per_run - 1.0) * below, n_above, n_below, confidence),
            per_run,
        ),
        ms_between=above,
        ms_within=below,
        dof_between=n_above,
        dof_within=n_below,
        turns_a_run=per_run,
        f=f,
        p_value=float(special.fdtrc(n_above, n_below, f)) if math.isfinite(f) else (0.0 if above > 0.0 else 1.0),
        negative=raw < 0.0,
    )


def _sd(variance: float, u_variance: float, bounds: tuple[float, float, float], per_run: float) -> Estimate:
    low, high, confidence = bounds
    value = math.sqrt(variance)
    u = u_variance / (2.0 * value) if variance > u_variance else math.sqrt(u_variance)
    return Estimate(
        value=value,
        u=u,
        low=math.sqrt(max(low, 0.0) / per_run),
        high=math.sqrt(max(high, 0.0) / per_run),
        confidence=confidence,
    )


def difference_bounds(
    above: float, below: float, n_above: float, n_below: float, confidence: float
) -> tuple[float, float, float]:
    """Return the interval of a difference of expected mean squares, and its confidence (Ting et al. 1990)."""
    tail = 0.5 * (1.0 - confidence)
    middle = above - below
    f_high, f_low = (float(special.fdtri(n_above, n_below, 1.0 - one)) for one in (tail, 1.0 - tail))
    g1, h1 = _shrink(n_above, tail), _stretch(n_above, tail)
    g2, h2 = _shrink(n_below, tail), _stretch(n_below, tail)
    g12 = ((f_high - 1.0) ** 2 - (g1 * f_high) ** 2 - h2**2) / f_high
    h12 = ((1.0 - f_low) ** 2 - (h1 * f_low) ** 2 - g2**2) / f_low
    down = (g1 * above) ** 2 + (h2 * below) ** 2 + g12 * above * below
    up = (h1 * above) ** 2 + (g2 * below) ** 2 + h12 * above * below
    return middle - math.sqrt(max(down, 0.0)), middle + math.sqrt(max(up, 0.0)), confidence


def sum_bounds(
    first: float, second: float, n_first: float, n_second: float, confidence: float
) -> tuple[float, float, float]:
    """Return the interval of a sum of expected mean squares, and its confidence (Graybill and Wang 1980)."""
    tail = 0.5 * (1.0 - confidence)
    down = math.hypot(_shrink(n_first, tail) * first, _shrink(n_second, tail) * second)
    up = math.hypot(_stretch(n_first, tail) * first, _stretch(n_second, tail) * second)
    return first + second - down, first + second + up, confidence


def _shrink(dof: float, tail: float) -> float:
    """Return by which share the lower limit of a variance lies below it."""
    return 1.0 - dof / float(special.chdtri(dof, tail))


def _stretch(dof: float, tail: float) -> float:
    """Return by which share the upper limit of a variance lies above it."""
    return dof / float(special.chdtri(dof, 1.0 - tail)) - 1.0
