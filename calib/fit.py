"""The relation between what the wheels were told and what the robot did.

Along the direction of the command, ``heading change = gain * (|wheel degrees| - dead band * reversed)``, plus an offset
whatever the direction, with one gain or one for each direction, with or without dead band and offset, and with one of
three laws for the scatter of single turns. Which of these the data support is decided by the corrected information
criterion, and the ranking is kept; but an interval from terms that the data themselves chose holds the truth too seldom
(bench/coverage.py), so unless told otherwise every term that the turns can tell stays in, and the three laws are
averaged by how likely they are. Strays are left out and
named, and a fit that they pull little at stands beside. What a plan cannot tell apart is said, not invented.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from calib.at_once import search_scatter
from calib.errors import CalibError, NotEnoughTurns
from calib.intervals import Estimate, t_estimate
from calib.linear import TINY
from calib.mixture import Part, RatioPart, mixed_ratio, mixed_sd, mixed_t
from calib.models import (
    SIDE_NAMES,
    Candidate,
    Model,
    aicc,
    all_columns,
    can_tell_dead_band,
    columns_taken,
    design_of,
    possible_models,
    sides_of,
)
from calib.robust import RobustFit, robust_fit
from calib.scatter import (
    LawShare,
    ScatterFit,
    average_over_laws,
    average_over_sets,
    fit_at_scatter,
    fit_with_scatter,
    scatter_variance_deg2,
    shape_of,
    typical_size,
)
from calib.strays import (
    FEWEST_DOF,
    STRAGGLER_LEVEL,
    extreme_residuals,
    most_strays,
    stray_level,
    which_strays,
)
from calib.turns import Turns

FloatArray = NDArray[np.float64]

CONFIDENCE = 0.95
FEWEST_TURNS = 3
STRONG = 10.0
"""Difference of the criterion that leaves a model no support (Burnham and Anderson 2002, 2.6)."""
RIVAL = 0.005
"""How likely it must be that another turn is the stray for the intervals to allow for it."""
MOST_ROUNDS = 4
"""Rounds of leaving out strays and fitting the others."""
UNKNOWN_SLACK = "the slack of the wheels before it is not known, and a dead band is fitted"


@dataclass(frozen=True, kw_only=True, slots=True)
class NotFitted:
    """A turn, by its place among those given, that the fit does not rest on, with the reason."""

    index: int
    reason: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Fit:
    """The fitted relation.

    Parameters
    ----------
    model : Model
    sides : tuple of float
        Directions that the turns have: +1 counter-clockwise, -1 clockwise.
    coefficients : ndarray, shape (P,)
        Gains (one, or one for each of `sides`), then the heading lost at a reversal and the offset in deg, if the
        model has them.
    cov : ndarray, shape (P, P)
    dof : int
    scatter_deg, size_deg : float
        Repeatability of a turn of that size; other sizes follow the laws.
    laws : tuple of LawShare
        The laws of scatter, each with its weight.
    n_turns : int
    tried_wheel_deg : tuple of float
        Smallest and largest size of the commands.
    candidates : tuple of Candidate
        All models tried, best by the criterion first.
    notes : tuple of str
        What the data could not tell, a sentence each.
    residuals_deg, standardised : ndarray, shape (N,)
        Along the command's direction; the latter in units of the fitted scatter.
    u_typical_deg : float
        Root mean square of the turns' own measurement uncertainties.
    not_fitted : tuple of NotFitted
        Turns given that the fit does not rest on.
    stragglers : tuple of int
        Turns given that lie far out, but not far enough to be left out.
    robust : RobustFit or None
        The same model fitted to strays too, with errors that expect some.
    dead_band_if_any, difference_if_any : Estimate or None
        Dead band (wheel deg), and relative difference of the gains, by the best model that has them, whether or not it
        was chosen; None where the turns cannot tell.
    """

    model: Model
    sides: tuple[float, ...]
    coefficients: FloatArray
    cov: FloatArray
    dof: int
    scatter_deg: float
    size_deg: float
    laws: tuple[LawShare, ...]
    n_turns: int
    tried_wheel_deg: tuple[float, float]
    candidates: tuple[Candidate, ...]
    notes: tuple[str, ...]
    residuals_deg: FloatArray
    standardised: FloatArray
    u_typical_deg: float = 0.0
    not_fitted: tuple[NotFitted, ...] = ()
    stragglers: tuple[int, ...] = ()
    robust: RobustFit | None = None
    dead_band_if_any: Estimate | None = None
    difference_if_any: Estimate | None = None

    def gain_row(self, side: float | None) -> FloatArray:
        """Return the weights that pick a direction's gain out of the coefficients; None for the mean gain."""
        row = np.zeros(len(self.coefficients))
        n_gains = len(self.sides) if self.model.separate_gains else 1
        if side is None or n_gains == 1:
            row[:n_gains] = 1.0 / n_gains
        else:
            row[self.sides.index(side)] = 1.0
        return row

    def lost_row(self) -> FloatArray:
        """Return the weights that pick the heading lost at a reversal; all zero without a dead band."""
        row = np.zeros(len(self.coefficients))
        if self.model.dead_band:
            row[-2 if self.model.offset else -1] = 1.0
        return row

    def offset_row(self, side: float | None) -> FloatArray:
        """Return the weights of the offset along a direction; all zero without one, and for the mean of both."""
        row = np.zeros(len(self.coefficients))
        if self.model.offset and side is not None:
            row[-1] = side
        return row

    def linear(self, row: FloatArray, confidence: float = CONFIDENCE) -> Estimate:
        """Return a weighted sum of the coefficients, its interval averaged over the laws of scatter."""
        parts = [
            Part(weight=one.weight, value=float(row @ one.coefficients), u=math.sqrt(float(row @ one.cov @ row)))
            for one in self.laws
        ]
        return mixed_t(parts, self.dof, confidence)

    def ratio(self, above: FloatArray, below: FloatArray, confidence: float, *, plus: float = 0.0) -> Estimate:
        """Return one weighted sum of the coefficients (and a number `plus`) over another, by Fieller's interval."""
        parts = [
            RatioPart(
                weight=one.weight,
                above=plus + float(above @ one.coefficients),
                below=float(below @ one.coefficients),
                var_above=float(above @ one.cov @ above),
                var_below=float(below @ one.cov @ below),
                cov=float(above @ one.cov @ below),
            )
            for one in self.laws
        ]
        return mixed_ratio(parts, self.dof, confidence)

    def gain(self, side: float | None = None, confidence: float = CONFIDENCE) -> Estimate:
        """Return heading change per wheel degree (deg/deg)."""
        return self.linear(self.gain_row(side), confidence)

    def robust_gain(self, side: float | None = None, confidence: float = CONFIDENCE) -> Estimate | None:
        """Return the gain by the fit that strays pull little at."""
        if self.robust is None:
            return None
        row = self.gain_row(side)
        u = float(np.sqrt(row @ self.robust.cov @ row))
        return t_estimate(float(row @ self.robust.coefficients), u, self.dof, confidence)

    def dead_band_wheel_deg(self, side: float | None = None, confidence: float = CONFIDENCE) -> Estimate | None:
        """Return the wheel degrees lost at a reversal; None where the model has none."""
        if not self.model.dead_band:
            return None
        return self.ratio(self.lost_row(), self.gain_row(side), confidence)

    def offset_deg(self, confidence: float = CONFIDENCE) -> Estimate | None:
        """Return the heading added to every turn whatever its direction; None where the model has none."""
        if not self.model.offset:
            return None
        return self.linear(np.eye(len(self.coefficients))[-1], confidence)

    def repeatability_deg(self, confidence: float = CONFIDENCE) -> Estimate:
        """Return the standard deviation of single turns of `size_deg` (ISO 5725-1, repeatability)."""
        parts = [Part(weight=one.weight, value=one.scatter_deg, u=0.0) for one in self.laws]
        return mixed_sd(parts, self.dof, confidence, beside=self.u_typical_deg)

    def scatter_at_deg(self, size_deg: float) -> float:
        """Return the standard deviation of single turns of a given size."""
        variance = scatter_variance_deg2(self.laws, np.array([abs(size_deg)]), self.size_deg)
        return float(np.sqrt(variance[0]))


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class _Choice:
    """The models fitted to one set of turns, best by the criterion first, and those that intervals rest on.

    Parameters
    ----------
    turns : Turns
    ranked : tuple of Candidate
    best, full : tuple of (Model, ScatterFit)
        The one chosen, and that with every term; laws averaged.
    """

    turns: Turns
    ranked: tuple[Candidate, ...]
    best: tuple[Model, ScatterFit]
    full: tuple[Model, ScatterFit]


def fit_turns(turns: Turns, *, keep_strays: bool = False, drop_terms: bool = False) -> Fit:
    """Fit the relation to usable turns.

    Parameters
    ----------
    turns : Turns
    keep_strays : bool
        Whether turns far from all others stay in the fit.
    drop_terms : bool
        Whether terms that the criterion does not support are dropped. Intervals are then narrower, and hold the truth
        less often than they say.

    Raises
    ------
    NotEnoughTurns
        With fewer than three turns.
    CalibError
        If the robot turned against its commands, or did not turn, or an uncertainty is no number.
    """
    if len(turns) < FEWEST_TURNS:
        raise NotEnoughTurns(
            f"{len(turns)} usable turns; at least {FEWEST_TURNS} are needed for a gain with its uncertainty",
            n_seen=len(turns),
            n_needed=FEWEST_TURNS,
        )
    _check_uncertainty(turns)
    _check_direction(turns)
    strays: tuple[int, ...] = ()
    choice, place = _choose(turns, np.ones(len(turns), dtype=bool), drop_terms)
    for _ in range(0 if keep_strays else MOST_ROUNDS):
        # Strays blow up the scatter and bend its law, so they are judged again by what the others say.
        found = tuple(sorted(_far_out(turns, choice)))
        if found == strays:
            break
        strays = found
        kept = np.ones(len(turns), dtype=bool)
        kept[list(strays)] = False
        choice, place = _choose(turns, kept, drop_terms)
    doubts: tuple[str, ...] = ()
    if len(strays) == 1:
        choice, doubts = _with_rivals(turns, choice, strays[0], drop_terms)
    return _concluded(turns, choice, place, strays, doubts)


def _with_rivals(turns: Turns, choice: _Choice, stray: int, drop_terms: bool) -> tuple[_Choice, tuple[str, ...]]:
    """Let the intervals rest on each turn that may be the stray in its stead, as far as it is likely to be."""
    places, design, along, weight = _weighed(turns, choice)
    likely = which_strays(design, along, weight)
    rivals = [n for n in np.argsort(-likely) if likely[n] > 0.0 and places[n] != stray]
    chances = [float(likely[list(places).index(stray)])]
    choices = [choice]
    for n in rivals:
        kept = np.ones(len(turns), dtype=bool)
        kept[places[n]] = False
        try:
            other, _ = _choose(turns, kept, drop_terms)
        except CalibError:
            continue
        if _same_terms(other, choice):
            choices.append(other)
            chances.append(float(likely[n]))
    believed = np.array(chances) / sum(chances)
    if len(choices) < 2 or believed[0] > 1.0 - RIVAL:
        return choice, ()
    best = average_over_sets([one.best[1] for one in choices], believed)
    full = average_over_sets([one.full[1] for one in choices], believed)
    doubt = (
        f"one turn strays, and the turns cannot tell which of {len(choices)}; the most likely one is left out, and the "
        "intervals hold for each"
    )
    return replace(choice, best=(choice.best[0], best), full=(choice.full[0], full)), (doubt,)


def _same_terms(one: _Choice, other: _Choice) -> bool:
    return all(
        replace(a[0], law=b[0].law) == b[0] and sides_of(one.turns) == sides_of(other.turns)
        for a, b in ((one.best, other.best), (one.full, other.full))
    )


def _check_uncertainty(turns: Turns) -> None:
    bad = np.flatnonzero(~(np.isfinite(turns.u_deg) & (turns.u_deg >= 0.0)))
    if len(bad):
        raise CalibError(
            f"turn {bad[0] + 1} has the standard uncertainty {turns.u_deg[bad[0]]:g} deg; accepted: finite, 0 or more"
        )


def _check_direction(turns: Turns) -> None:
    if float(np.median(turns.heading_deg * turns.side / np.abs(turns.wheel_deg))) <= 0.0:
        raise CalibError("the robot turned against its commands, or not at all; check the signs of the commands")


def _choose(turns: Turns, kept: NDArray[np.bool_], drop_terms: bool) -> tuple[_Choice, NDArray[np.intp]]:
    """Fit all models to the turns kept; return them with the places of the turns the answer rests on."""
    known = kept & np.isfinite(turns.reversed_)
    can_tell = can_tell_dead_band(turns.take(known)) if known.any() else False
    chosen = known if can_tell else kept
    rows = turns.take(chosen)
    ranked = _ranked(rows, dead_band=can_tell)
    full = _averaged(rows, ranked, _fullest(ranked))
    best = _averaged(rows, ranked, ranked[0].model) if drop_terms else full
    if can_tell and not best[0].dead_band:  # turns with unknown slack count again
        chosen = kept
        again = [_fit_model(turns.take(kept), replace(best[0], law=one.law)) for one in best[1].shares]
        fits = [one for one in again if one is not None]
        best = (best[0], average_over_laws(fits)) if len(fits) == len(again) else best
    choice = _Choice(
        turns=turns.take(chosen), ranked=tuple(one.candidate for one in ranked), best=best, full=full
    )
    return choice, np.flatnonzero(chosen)


@dataclass(frozen=True, kw_only=True, slots=True)
class _Tried:
    """A model that was tried, with the scatter found for it."""

    candidate: Candidate
    scatter_deg: float

    @property
    def model(self) -> Model:
        return self.candidate.model


def _averaged(turns: Turns, ranked: Sequence[_Tried], model: Model) -> tuple[Model, ScatterFit]:
    """Return a model's terms under all laws that were tried, averaged; the law named is the most likely one."""
    size = nominal_size_deg(turns)
    design, along = design_of(turns, model), turns.heading_deg * turns.side
    alike = [
        fit_at_scatter(design, along, turns.u_deg, size, one.model.law, one.scatter_deg)
        for one in ranked
        if replace(one.model, law=model.law) == model
    ]
    mean = average_over_laws(alike)
    return replace(model, law=mean.law), mean


def _ranked(turns: Turns, *, dead_band: bool) -> tuple[_Tried, ...]:
    """Return all models that the turns tell, each with its scatter, best by the criterion first."""
    columns, n = all_columns(turns), len(turns)
    models = possible_models(turns, dead_band=dead_band)
    told = {terms: _is_told(columns[:, np.array(terms)]) for terms in {columns_taken(one) for one in models}}
    models = [one for one in models if told[columns_taken(one)]]
    if not models:
        raise CalibError("no model can be fitted to these turns; more turns, or more different ones, are needed")
    size = nominal_size_deg(turns)
    found = search_scatter(
        np.nan_to_num(columns) if not dead_band else columns,
        np.array([columns_taken(one) for one in models]),
        turns.heading_deg * turns.side,
        turns.u_deg,
        np.array([shape_of(size, typical_size(size), one.law) for one in models]),
    )
    criterion = [
        aicc(float(likelihood), sum(columns_taken(one)), n)
        for one, likelihood in zip(models, found.log_likelihood, strict=True)
    ]
    tried = [
        _Tried(candidate=Candidate(model=one, aicc=value), scatter_deg=float(scatter))
        for one, value, scatter in zip(models, criterion, found.scatter_deg, strict=True)
    ]
    return tuple(sorted(tried, key=lambda one: one.candidate.aicc))


def _is_told(columns: FloatArray) -> bool:
    """Return whether columns depend neither on each other nor fit everything."""
    n, p = columns.shape
    if n <= p:
        return False
    diagonal = np.abs(np.diag(np.linalg.qr(columns / np.maximum(np.abs(columns).max(axis=0), TINY), mode="r")))
    return bool(diagonal.min() > 1e-11 * diagonal.max())


def _fullest(ranked: Sequence[_Tried]) -> Model:
    """Return the model with every term; an offset only where the turns leave no doubt of it."""
    best = ranked[0]
    without = [one for one in ranked if not one.model.offset]
    offset = best.model.offset and without[0].candidate.aicc - best.candidate.aicc > STRONG
    pool = [one.model for one in ranked if one.model.offset == offset]
    return max(pool, key=lambda one: one.separate_gains + one.dead_band)


def nominal_size_deg(turns: Turns) -> FloatArray:
    """Return the size of turn that each command aims at, from the middle of all gains."""
    size = np.abs(turns.wheel_deg)
    return np.asarray(size * float(np.median(turns.heading_deg * turns.side / size)))


def _fit_model(turns: Turns, model: Model) -> ScatterFit | None:
    along = turns.heading_deg * turns.side
    try:
        return fit_with_scatter(design_of(turns, model), along, turns.u_deg, nominal_size_deg(turns), model.law)
    except (CalibError, FloatingPointError):
        return None


def _far_out(turns: Turns, choice: _Choice, level: float | None = None) -> tuple[int, ...]:
    """Return which of all turns lie too far from the chosen model; without a level, at that of strays."""
    places, design, along, weight = _weighed(turns, choice)
    dof = len(places) - design.shape[1]
    if dof < FEWEST_DOF:
        return ()
    level = stray_level(dof) if level is None else level
    far = extreme_residuals(design, along, weight, most=most_strays(len(places)), level=level)
    return tuple(int(places[index]) for index in far.strays)


def _weighed(turns: Turns, choice: _Choice) -> tuple[NDArray[np.intp], FloatArray, FloatArray, FloatArray]:
    """Return all turns that the chosen model can say something of: places, design, heading, relative weight."""
    model, found = choice.best
    usable = np.isfinite(turns.reversed_) if model.dead_band else np.ones(len(turns), dtype=bool)
    rows = turns.take(usable)
    scatter2 = scatter_variance_deg2(found.shares, nominal_size_deg(rows), found.size_deg)
    variance = np.maximum(rows.u_deg**2 + scatter2, TINY)
    return np.flatnonzero(usable), design_of(rows, model), rows.heading_deg * rows.side, variance.min() / variance


def _concluded(
    turns: Turns, choice: _Choice, place: NDArray[np.intp], strays: tuple[int, ...], doubts: tuple[str, ...]
) -> Fit:
    model, scatter = choice.best
    if scatter.linear.coefficients[0] <= 0.0:
        raise CalibError("the robot turned against its commands, or not at all; check the signs of the commands")
    size = np.abs(choice.turns.wheel_deg)
    left = set(range(len(turns))) - set(place.tolist())
    not_fitted = [
        NotFitted(index=n, reason=_stray_reason(turns, n, model, scatter) if n in strays else UNKNOWN_SLACK)
        for n in sorted(left)
    ]
    band, difference = _if_any(choice)
    return Fit(
        model=model,
        sides=sides_of(choice.turns),
        coefficients=scatter.linear.coefficients,
        cov=scatter.linear.unscaled_cov,
        dof=scatter.linear.dof,
        scatter_deg=scatter.scatter_deg,
        size_deg=scatter.size_deg,
        laws=scatter.shares,
        n_turns=len(choice.turns),
        tried_wheel_deg=(float(size.min()), float(size.max())),
        candidates=choice.ranked,
        notes=(*_notes(choice.turns), *doubts),
        residuals_deg=scatter.linear.residuals,
        standardised=scatter.linear.residuals / np.sqrt(scatter.variance_deg2),
        u_typical_deg=float(np.sqrt(np.mean(choice.turns.u_deg**2))),
        not_fitted=tuple(not_fitted),
        stragglers=tuple(n for n in _far_out(turns, choice, STRAGGLER_LEVEL) if n not in left),
        robust=_robust(turns, model, scatter),
        dead_band_if_any=band,
        difference_if_any=difference,
    )


def _stray_reason(turns: Turns, n: int, model: Model, scatter: ScatterFit) -> str:
    side, state = float(turns.side[n]), float(np.nan_to_num(turns.reversed_[n]))
    gain = scatter.linear.coefficients[1 if model.separate_gains and side < 0.0 else 0]
    rest = list(scatter.linear.coefficients[2 if model.separate_gains else 1 :])
    expected = gain * abs(turns.wheel_deg[n])
    if model.dead_band:
        expected -= rest.pop(0) * state
    if model.offset:
        expected += rest.pop(0) * side
    off = float(turns.heading_deg[n] * side - expected)
    return f"it strays by {off:+.2f} degrees along its command from what all others say"


def _robust(turns: Turns, model: Model, scatter: ScatterFit) -> RobustFit | None:
    usable = np.isfinite(turns.reversed_) if model.dead_band else np.ones(len(turns), dtype=bool)
    rows = turns.take(usable)
    scatter2 = scatter_variance_deg2(scatter.shares, nominal_size_deg(rows), scatter.size_deg)
    variance = rows.u_deg**2 + np.maximum(scatter2, 1e-18)
    try:
        return robust_fit(design_of(rows, model), rows.heading_deg * rows.side, variance)
    except CalibError:
        return None


def _if_any(choice: _Choice) -> tuple[Estimate | None, Estimate | None]:
    """Return dead band and difference of the gains by the model with every term."""
    model, scatter = choice.full
    fit = _bare(choice.turns, model, scatter)
    apart = direction_difference(fit)
    return fit.dead_band_wheel_deg(), apart[0] if apart else None


def _bare(turns: Turns, model: Model, scatter: ScatterFit) -> Fit:
    """Return a fit with what its intervals need and nothing more."""
    return Fit(
        model=model,
        sides=sides_of(turns),
        coefficients=scatter.linear.coefficients,
        cov=scatter.linear.unscaled_cov,
        dof=scatter.linear.dof,
        scatter_deg=scatter.scatter_deg,
        size_deg=scatter.size_deg,
        laws=scatter.shares,
        n_turns=len(turns),
        tried_wheel_deg=(0.0, 0.0),
        candidates=(),
        notes=(),
        residuals_deg=scatter.linear.residuals,
        standardised=scatter.linear.residuals,
    )


def _notes(turns: Turns) -> tuple[str, ...]:
    notes = []
    known = np.isfinite(turns.reversed_)
    if not (known.any() and can_tell_dead_band(turns.take(known))):
        notes.append(
            "a dead band cannot be told from these turns: at least two that start against and two that start along "
            "the direction of the turn before are needed"
        )
    if len(sides_of(turns)) == 1:
        notes.append(f"all turns are {SIDE_NAMES[sides_of(turns)[0]]}; nothing is known of the other direction")
    if np.ptp(np.abs(turns.wheel_deg)) == 0.0:
        notes.append("all commands have one size, so a gain that depends on the size cannot be seen")
    return tuple(notes)


def direction_difference(fit: Fit, confidence: float = CONFIDENCE) -> tuple[Estimate, float] | None:
    """Return the relative difference of the two gains, counter-clockwise less clockwise, and its p-value.

    None where the model has one gain or the turns one direction.
    """
    if not fit.model.separate_gains or len(fit.sides) < 2:
        return None
    row = fit.gain_row(1.0) - fit.gain_row(-1.0)
    mean = fit.gain().value
    apart = fit.linear(row / mean, confidence)
    p_value = 2.0 * float(stats.t.sf(abs(apart.value) / apart.u, fit.dof)) if apart.u > 0.0 else 0.0
    return apart, p_value
