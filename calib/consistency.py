"""How consistent the turns are: of each command, over runs, in time, with heading, place, and anything else noted.

Every question is asked of the turns that the fit rests on, about the fitted relation, and the p-values of all of them
are adjusted together. A question that the turns cannot answer is kept with the reason.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy import special

from calib.about_fit import AboutFit, about_fit
from calib.drift import Likeness, Trend, lag_one, mann_kendall, theil_sen
from calib.errors import CalibError, NotIdentified
from calib.factors import Factor, find_factor
from calib.fit import CONFIDENCE, Fit, direction_difference
from calib.grain import Grain, find_grain
from calib.holm import holm
from calib.intervals import Estimate, sd_estimate, t_estimate
from calib.runs import RunParts, run_parts
from calib.table import TurnTable
from calib.warp import Warp, find_warp

FloatArray = NDArray[np.float64]

POOLING_LEVEL = 0.25
"""Runs count as alike, for the uncertainty of a mean, if their test is above this (Bancroft 1964)."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Cell:
    """The turns of one command from one kind of start.

    Parameters
    ----------
    wheel_deg : float
    after_reversal : bool or None
        None where the relation makes no difference between the starts.
    n : int
    mean_deg : Estimate
        Signed heading change; its interval rests on the scatter of all repeats together, brought to this size of turn,
        and is infinite where nothing was repeated.
    wanted_deg : float
        What it is held against: the wanted angle, or where the trial gives none, what the relation says.
    wanted_is_given : bool
    trueness_deg : Estimate
        Mean less wanted, along the command: positive where the robot turns too far (ISO 5725-1, bias).
    repeatability_deg : Estimate or None
        Standard deviation of single turns; None for a single turn.
    """

    wheel_deg: float
    after_reversal: bool | None
    n: int
    mean_deg: Estimate
    wanted_deg: float
    wanted_is_given: bool
    trueness_deg: Estimate
    repeatability_deg: Estimate | None


@dataclass(frozen=True, kw_only=True, slots=True)
class Drift:
    """Change in time: test, and slope in deg a turn for a turn of typical size, over how many turns at most."""

    trend: Trend
    slope_deg: Estimate
    turns_long: int


@dataclass(frozen=True, kw_only=True, slots=True)
class Check:
    """One question asked of the turns.

    Parameters
    ----------
    name : str
        ``drift``, ``neighbours``, ``grain``, ``slope of place``, ``curve of place``, ``runs``, ``direction``,
        ``relation``, or a factor's name after ``factor``.
    p_value, p_adjusted : float
        As it stands, and by Holm's method among all; NaN where it could not be asked.
    reason : str
        Why it could not be asked; empty where it could.
    """

    name: str
    p_value: float
    p_adjusted: float
    reason: str = ""


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Consistency:
    """What the turns say of their consistency; None where they cannot tell, with the reason among the checks.

    Parameters
    ----------
    cells : tuple of Cell
    size_deg : float
        The typical size of turn that pooled figures are for.
    repeatability_deg : Estimate or None
        Of all cells together.
    runs : RunParts or None
        In deg for a turn of typical size.
    drift : Drift or None
    neighbours : Likeness or None
    grain : Grain or None
    warp : Warp or None
    factors : tuple of Factor
    checks : tuple of Check
    confidence : float
    """

    cells: tuple[Cell, ...]
    size_deg: float
    repeatability_deg: Estimate | None
    runs: RunParts | None
    drift: Drift | None
    neighbours: Likeness | None
    grain: Grain | None
    warp: Warp | None
    factors: tuple[Factor, ...]
    checks: tuple[Check, ...]
    confidence: float

    def seen(self, level: float = 0.05) -> tuple[Check, ...]:
        """Return the checks that found something at a level held over all of them together."""
        return tuple(check for check in self.checks if check.p_adjusted <= level)


T = TypeVar("T")


class _Asked:
    """Questions asked one after the other, with what came of them."""

    def __init__(self) -> None:
        self.p_values: list[float] = []
        self.names: list[str] = []
        self.reasons: list[str] = []

    def ask(self, name: str, question: Callable[[], T | None], p_value: Callable[[T], float]) -> T | None:
        """Return the answer, or None with the reason kept."""
        try:
            answer = question()
        except CalibError as error:
            self.note(name, math.nan, str(error))
            return None
        if answer is not None:
            self.note(name, p_value(answer), "")
        return answer

    def note(self, name: str, p_value: float, reason: str) -> None:
        self.names.append(name)
        self.p_values.append(p_value)
        self.reasons.append(reason)

    def checks(self) -> tuple[Check, ...]:
        """Return all checks with their adjusted p-values."""
        rows = zip(self.names, self.p_values, holm(self.p_values), self.reasons, strict=True)
        return tuple(Check(name=n, p_value=p, p_adjusted=float(q), reason=why) for n, p, q, why in rows)


def judge(table: TurnTable, fit: Fit, *, confidence: float = CONFIDENCE) -> Consistency:
    """Judge the consistency of the turns that a fit rests on.

    Parameters
    ----------
    table : TurnTable
        The turns given to the fit, all of them, in the same order.
    fit : Fit
    confidence : float
    """
    about = about_fit(table, fit)
    which, keys = cells_of(about, fit)
    asked = _Asked()
    runs = asked.ask("runs", lambda: _runs(about, which, confidence), lambda one: one.p_value)
    drift = asked.ask("drift", lambda: _drift(about, confidence), lambda one: one.trend.p_value)
    neighbours = asked.ask("neighbours", lambda: _neighbours(about), lambda one: one.p_value)
    grain = asked.ask("grain", lambda: find_grain(about, confidence=confidence), lambda one: one.test.p_value)
    warp = asked.ask(
        "slope of place", lambda: find_warp(about, confidence=confidence), lambda one: one.slope.p_value
    )
    if warp is not None:
        asked.note("curve of place", warp.curve.p_value if warp.curve else math.nan, warp.why_no_curve)
    asked.ask("direction", lambda: direction_difference(fit, confidence), lambda one: one[1])
    asked.ask("relation", lambda: lack_of_fit(about, which), lambda one: one)
    factors = [
        asked.ask(f"factor {name}", lambda name=name: find_factor(about, name), lambda one: one.test.p_value)  # type: ignore[misc]
        for name in about.table.factors
    ]
    pooled = _pooled(about, which)
    spread = _without_measurement(*pooled, about.table.turns.u_deg, confidence) if pooled[1] else None
    return Consistency(
        cells=tuple(_cell(about, which == k, key, runs, pooled, confidence) for k, key in enumerate(keys)),
        size_deg=fit.size_deg,
        repeatability_deg=spread,
        runs=runs,
        drift=drift,
        neighbours=neighbours,
        grain=grain,
        warp=warp,
        factors=tuple(one for one in factors if one is not None),
        checks=asked.checks(),
        confidence=confidence,
    )


Key = tuple[float, bool | None]


def cells_of(about: AboutFit, fit: Fit) -> tuple[NDArray[np.intp], list[Key]]:
    """Return which cell each turn is of, and the command and start of each cell."""
    turns = about.table.turns
    states = [bool(one) if fit.model.dead_band else None for one in np.nan_to_num(turns.reversed_)]
    keys: list[Key] = list(zip(turns.wheel_deg.tolist(), states, strict=True))
    listed = sorted(set(keys), key=lambda key: (-np.sign(key[0]), abs(key[0]), bool(key[1])))
    return np.array([listed.index(key) for key in keys]), listed


def cell_columns(which: NDArray[np.intp]) -> FloatArray:
    """Return an indicator column for each cell, shape (N, C)."""
    return np.asarray((which[:, None] == np.arange(which.max() + 1)).astype(float))


def _runs(about: AboutFit, which: NDArray[np.intp], confidence: float) -> RunParts:
    columns = cell_columns(which) / about.relative[:, None]
    return run_parts(about.along_deg / about.relative, np.array(about.table.run), columns, confidence=confidence)


def _drift(about: AboutFit, confidence: float) -> Drift:
    run, number = np.array(about.table.run), about.table.number
    slope = theil_sen(about.evened_deg, number, run, confidence=confidence)
    longest = max(int(np.ptp(number[run == name])) for name in set(about.table.run))
    return Drift(trend=mann_kendall(_rounded(about), run), slope_deg=slope, turns_long=longest)


def _neighbours(about: AboutFit) -> Likeness:
    return lag_one(_rounded(about), np.array(about.table.run))


def _rounded(about: AboutFit) -> FloatArray:
    """Return evened residuals, 0 where they are nothing but rounding."""
    values, least = about.evened_deg, 1e-12 * float(np.abs(about.along_deg).max())
    return np.where(np.abs(values) > least, values, 0.0)


def lack_of_fit(about: AboutFit, which: NDArray[np.intp]) -> float:
    """Return the p-value that the commands' means lie on the relation.

    Raises
    ------
    NotIdentified
        If the relation has as many terms as there are different commands, or no command was repeated.
    """
    n, n_cells, n_terms = len(which), int(which.max()) + 1, about.design.shape[1]
    if n_cells <= n_terms:
        raise NotIdentified("there are no more different commands than terms of the relation")
    if n <= n_cells:
        raise NotIdentified("no command was repeated")
    within = _within(about, which)
    squares = float(np.sum(within**2))
    if squares <= n * (1e-12 * float(np.abs(about.along_deg).max())) ** 2:
        raise NotIdentified("the repeats of the commands do not scatter at all")
    more = max(float(np.sum(about.evened_deg**2)) - squares, 0.0)
    f = more / (n_cells - n_terms) / (squares / (n - n_cells))
    return float(special.fdtrc(n_cells - n_terms, n - n_cells, f))


def _within(about: AboutFit, which: NDArray[np.intp]) -> FloatArray:
    """Return evened distances from the cells' own weighted means."""
    sums = np.bincount(which, about.weight * about.along_deg) / np.bincount(which, about.weight)
    return np.asarray((about.along_deg - sums[which]) / about.relative)


def _pooled(about: AboutFit, which: NDArray[np.intp]) -> tuple[float, int]:
    """Return the standard deviation within cells, of a turn of typical size, and its degrees of freedom."""
    dof = len(which) - int(which.max()) - 1
    return (math.sqrt(float(np.sum(_within(about, which) ** 2)) / dof) if dof else math.nan), dof


def _without_measurement(sd: float, dof: int, u_deg: FloatArray, confidence: float) -> Estimate:
    """Return the robot's own standard deviation, with the measurement's taken off in squares."""
    beside = float(np.sqrt(np.mean(u_deg**2)))
    return sd_estimate(math.sqrt(max(sd**2 - beside**2, 0.0)), dof, confidence, beside=beside)


def _cell(
    about: AboutFit,
    chosen: NDArray[np.bool_],
    key: Key,
    runs: RunParts | None,
    pooled: tuple[float, int],
    confidence: float,
) -> Cell:
    turns, along, expected = about.table.turns.take(chosen), about.along_deg[chosen], about.expected_deg[chosen]
    wanted = about.table.wanted_deg[chosen]
    given = bool(np.all(np.isfinite(wanted)) and np.ptp(wanted) == 0.0)
    side, n, mean = float(np.sign(key[0])), len(along), float(along.mean())
    target = float(wanted[0]) * side if given else float(expected.mean())
    n_runs = len({run for run, one in zip(about.table.run, chosen, strict=True) if one})
    u, dof = _u_mean(pooled, about.relative[chosen], n_runs, runs)
    found = t_estimate(mean, u, dof, confidence) if dof else _unbounded(mean, confidence)
    ends = sorted((side * found.low, side * found.high))
    sd = float(along.std(ddof=1)) if n > 1 else 0.0
    return Cell(
        wheel_deg=key[0],
        after_reversal=key[1],
        n=n,
        mean_deg=Estimate(value=side * mean, u=found.u, low=ends[0], high=ends[1], confidence=confidence),
        wanted_deg=side * target,
        wanted_is_given=given,
        trueness_deg=Estimate(
            value=mean - target, u=found.u, low=found.low - target, high=found.high - target, confidence=confidence
        ),
        repeatability_deg=_without_measurement(sd, n - 1, turns.u_deg, confidence) if n > 1 else None,
    )


def _u_mean(
    pooled: tuple[float, int], relative: FloatArray, n_runs: int, runs: RunParts | None
) -> tuple[float, int]:
    """Return the standard uncertainty of a cell's mean and its degrees of freedom, 0 for none."""
    sd, dof = pooled
    if dof == 0:
        return math.nan, 0
    u = sd * float(np.sqrt(np.sum(relative**2))) / len(relative)
    if runs is None or runs.p_value > POOLING_LEVEL:
        return u, dof
    return math.hypot(u, runs.between.value * float(relative.mean()) / math.sqrt(n_runs)), runs.dof_between


def _unbounded(value: float, confidence: float) -> Estimate:
    return Estimate(value=value, u=math.inf, low=-math.inf, high=math.inf, confidence=confidence)
