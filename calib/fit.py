"""The relation between what the wheels were told and what the robot did.

Along the direction of the command, ``heading change = gain * (|wheel degrees| - dead band * reversed)``, plus an offset
whatever the direction, with one gain or one for each direction, with or without dead band and offset, and with one of
three laws for the scatter of single turns. Which of these the data support is decided by the corrected information
criterion, and the ranking is kept; but an interval from terms that the data themselves chose holds the truth too seldom
(bench/coverage.py), so unless told otherwise every term that the turns can tell stays in. Strays are left out and
named, and a fit that they pull little at stands beside. What a plan cannot tell apart is said, not invented.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from calib.errors import CalibError, NotEnoughTurns
from calib.intervals import Estimate, ratio_estimate, sd_estimate, t_estimate
from calib.linear import TINY
from calib.models import (
    SIDE_NAMES,
    Candidate,
    Model,
    aicc,
    can_tell_dead_band,
    design_of,
    possible_models,
    sides_of,
)
from calib.robust import RobustFit, robust_fit
from calib.scatter import LAWS, ScatterFit, fit_with_scatter, shape_of
from calib.strays import FEWEST_DOF, STRAGGLER_LEVEL, STRAY_LEVEL, extreme_residuals, most_strays
from calib.turns import Turns

FloatArray = NDArray[np.float64]

CONFIDENCE = 0.95
FEWEST_TURNS = 3
STRONG = 6.0
"""Difference of the criterion that counts as strong evidence (Burnham and Anderson 2002, 2.6)."""
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
        Repeatability of a turn of that size; other sizes follow the model's law.
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

    def gain(self, side: float | None = None, confidence: float = CONFIDENCE) -> Estimate:
        """Return heading change per wheel degree (deg/deg)."""
        row = self.gain_row(side)
        return t_estimate(float(row @ self.coefficients), float(np.sqrt(row @ self.cov @ row)), self.dof, confidence)

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
        lost, gain = self.lost_row(), self.gain_row(side)
        return ratio_estimate(
            float(lost @ self.coefficients),
            float(gain @ self.coefficients),
            var_above=float(lost @ self.cov @ lost),
            var_below=float(gain @ self.cov @ gain),
            cov=float(lost @ self.cov @ gain),
            dof=self.dof,
            confidence=confidence,
        )

    def offset_deg(self, confidence: float = CONFIDENCE) -> Estimate | None:
        """Return the heading added to every turn whatever its direction; None where the model has none."""
        if not self.model.offset:
            return None
        u = float(np.sqrt(self.cov[-1, -1]))
        return t_estimate(float(self.coefficients[-1]), u, self.dof, confidence)

    def repeatability_deg(self, confidence: float = CONFIDENCE) -> Estimate:
        """Return the standard deviation of single turns of `size_deg` (ISO 5725-1, repeatability)."""
        return sd_estimate(self.scatter_deg, self.dof, confidence, beside=self.u_typical_deg)

    def scatter_at_deg(self, size_deg: float) -> float:
        """Return the standard deviation of single turns of a given size."""
        return float(self.scatter_deg * (abs(size_deg) / self.size_deg) ** LAWS[self.model.law])


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class _Choice:
    """The models fitted to one set of turns, best by the criterion first, and the one that intervals rest on."""

    turns: Turns
    ranked: tuple[tuple[Candidate, ScatterFit], ...]

    best: tuple[Model, ScatterFit]


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
        If the robot turned against its commands, or did not turn.
    """
    if len(turns) < FEWEST_TURNS:
        raise NotEnoughTurns(
            f"{len(turns)} usable turns; at least {FEWEST_TURNS} are needed for a gain with its uncertainty",
            n_seen=len(turns),
            n_needed=FEWEST_TURNS,
        )
    _check_direction(turns)
    strays: tuple[int, ...] = ()
    choice, place = _choose(turns, np.ones(len(turns), dtype=bool), drop_terms)
    for _ in range(0 if keep_strays else 3):
        found = _far_out(turns, choice, STRAY_LEVEL)
        if set(found) <= set(strays):
            break
        strays = tuple(sorted({*strays, *found}))
        kept = np.ones(len(turns), dtype=bool)
        kept[list(strays)] = False
        choice, place = _choose(turns, kept, drop_terms)
    return _concluded(turns, choice, place, strays)


def _check_direction(turns: Turns) -> None:
    if float(np.median(turns.heading_deg * turns.side / np.abs(turns.wheel_deg))) <= 0.0:
        raise CalibError("the robot turned against its commands, or not at all; check the signs of the commands")


def _choose(turns: Turns, kept: NDArray[np.bool_], drop_terms: bool) -> tuple[_Choice, NDArray[np.intp]]:
    """Fit all models to the turns kept; return them with the places of the turns the answer rests on."""
    known = kept & np.isfinite(turns.reversed_)
    can_tell = can_tell_dead_band(turns.take(known)) if known.any() else False
    chosen = known if can_tell else kept
    ranked = _ranked(turns.take(chosen), dead_band=can_tell)
    best = ranked[0] if drop_terms else _fullest(ranked)
    if can_tell and not best[0].model.dead_band:  # turns with unknown slack count again
        chosen = kept
        best = (best[0], _fit_model(turns.take(kept), best[0].model) or best[1])
    choice = _Choice(turns=turns.take(chosen), ranked=ranked, best=(best[0].model, best[1]))
    return choice, np.flatnonzero(chosen)


def _ranked(turns: Turns, *, dead_band: bool) -> tuple[tuple[Candidate, ScatterFit], ...]:
    tried = [(model, _fit_model(turns, model)) for model in possible_models(turns, dead_band=dead_band)]
    fitted = [
        (Candidate(model=model, aicc=aicc(found, len(turns))), found) for model, found in tried if found is not None
    ]
    if not fitted:
        raise CalibError("no model can be fitted to these turns; more turns, or more different ones, are needed")
    return tuple(sorted(fitted, key=lambda one: one[0].aicc))


def _fullest(ranked: tuple[tuple[Candidate, ScatterFit], ...]) -> tuple[Candidate, ScatterFit]:
    """Return the model with every term; the law of scatter, and an offset, by strong evidence only."""
    best = ranked[0][0]
    without = [one for one in ranked if not one[0].model.offset]
    offset = best.model.offset and without[0][0].aicc - best.aicc > STRONG
    pool = [one for one in ranked if one[0].model.offset == offset]
    most = max((one[0].model.separate_gains + one[0].model.dead_band) for one in pool)
    full = [one for one in pool if one[0].model.separate_gains + one[0].model.dead_band == most]
    return max(full, key=lambda one: one[1].residual_likelihood)


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


def _far_out(turns: Turns, choice: _Choice, level: float) -> tuple[int, ...]:
    """Return which of all turns lie too far from the chosen model."""
    model, found = choice.best
    usable = np.isfinite(turns.reversed_) if model.dead_band else np.ones(len(turns), dtype=bool)
    rows = turns.take(usable)
    design = design_of(rows, model)
    if len(rows) - design.shape[1] < FEWEST_DOF:
        return ()
    shape = shape_of(nominal_size_deg(rows), found.size_deg, model.law)
    variance = np.maximum(rows.u_deg**2 + found.scatter_deg**2 * shape, TINY)
    far = extreme_residuals(
        design, rows.heading_deg * rows.side, variance.min() / variance, most=most_strays(len(rows)), level=level
    )
    places = np.flatnonzero(usable)
    return tuple(int(places[index]) for index in far.strays)


def _concluded(turns: Turns, choice: _Choice, place: NDArray[np.intp], strays: tuple[int, ...]) -> Fit:
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
        n_turns=len(choice.turns),
        tried_wheel_deg=(float(size.min()), float(size.max())),
        candidates=tuple(candidate for candidate, _ in choice.ranked),
        notes=_notes(choice.turns),
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
    shape = shape_of(nominal_size_deg(rows), scatter.size_deg, model.law)
    variance = rows.u_deg**2 + max(scatter.scatter_deg, 1e-9) ** 2 * shape
    try:
        return robust_fit(design_of(rows, model), rows.heading_deg * rows.side, variance)
    except CalibError:
        return None


def _if_any(choice: _Choice) -> tuple[Estimate | None, Estimate | None]:
    """Return dead band and difference of the gains by the best model that has them."""
    band = difference = None
    for candidate, scatter in choice.ranked:
        fit = _bare(choice.turns, candidate.model, scatter)
        if band is None and candidate.model.dead_band:
            band = fit.dead_band_wheel_deg()
        if difference is None and candidate.model.separate_gains:
            apart = direction_difference(fit)
            difference = apart[0] if apart else None
    return band, difference


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
    value, u = float(row @ fit.coefficients) / mean, float(np.sqrt(row @ fit.cov @ row)) / mean
    p_value = 2.0 * float(stats.t.sf(abs(value) / u, fit.dof)) if u > 0.0 else 0.0
    return t_estimate(value, u, fit.dof, confidence), p_value
