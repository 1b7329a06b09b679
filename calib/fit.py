"""The relation between what the wheels were told and what the robot did.

Along the direction of the command, ``heading change = gain * (|wheel degrees| - dead band * reversed)``, with one gain
or one for each direction, with or without a dead band, and with one of three laws for the scatter of single turns.
Which of these the data support is decided by the corrected information criterion (Hurvich and Tsai 1989); the
runners-up are kept. What a plan cannot tell apart is said, not invented.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from calib.errors import CalibError, NotEnoughTurns
from calib.intervals import Estimate, ratio_estimate, sd_estimate, t_estimate
from calib.scatter import LAWS, ScatterFit, fit_with_scatter
from calib.turns import Turns

FloatArray = NDArray[np.float64]

CONFIDENCE = 0.95
FEWEST_TURNS = 3
SIDES = (1.0, -1.0)
SIDE_NAMES = {1.0: "counter-clockwise", -1.0: "clockwise"}


@dataclass(frozen=True, kw_only=True, slots=True)
class Robot:
    """What turns gains into lengths; None where it is not known."""

    wheel_diameter_mm: float | None = None
    inner_track_mm: float | None = None
    tyre_width_mm: float | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Model:
    """Which terms a relation has."""

    separate_gains: bool
    dead_band: bool
    law: str

    def __str__(self) -> str:
        gains = "a gain for each direction" if self.separate_gains else "one gain"
        band = "with dead band" if self.dead_band else "no dead band"
        return f"{gains}, {band}, {self.law} scatter"


@dataclass(frozen=True, kw_only=True, slots=True)
class Candidate:
    """A model that was tried, with its corrected information criterion (smaller is better)."""

    model: Model
    aicc: float


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Fit:
    """The fitted relation.

    Parameters
    ----------
    model : Model
    sides : tuple of float
        Directions that the turns have: +1 counter-clockwise, -1 clockwise.
    coefficients : ndarray, shape (P,)
        Gains (one, or one for each of `sides`), then the heading lost at a reversal in deg, if the model has it.
    cov : ndarray, shape (P, P)
    dof : int
    scatter_deg, size_deg : float
        Repeatability of a turn of that size; other sizes follow the model's law.
    n_turns : int
    tried_wheel_deg : tuple of float
        Smallest and largest size of the commands.
    candidates : tuple of Candidate
        All models tried, best first.
    notes : tuple of str
        What the data could not tell, a sentence each.
    residuals_deg, standardised : ndarray, shape (N,)
        Along the command's direction; the latter in units of the fitted scatter.
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
            row[-1] = 1.0
        return row

    def gain(self, side: float | None = None, confidence: float = CONFIDENCE) -> Estimate:
        """Return heading change per wheel degree (deg/deg)."""
        row = self.gain_row(side)
        return t_estimate(float(row @ self.coefficients), float(np.sqrt(row @ self.cov @ row)), self.dof, confidence)

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

    def repeatability_deg(self, confidence: float = CONFIDENCE) -> Estimate:
        """Return the standard deviation of single turns of `size_deg` (ISO 5725-1, repeatability)."""
        return sd_estimate(self.scatter_deg, self.dof, confidence)

    def scatter_at_deg(self, size_deg: float) -> float:
        """Return the standard deviation of single turns of a given size."""
        return float(self.scatter_deg * (abs(size_deg) / self.size_deg) ** LAWS[self.model.law])


def fit_turns(turns: Turns) -> Fit:
    """Fit the relation to usable turns.

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
    known = np.isfinite(turns.reversed_)
    can_tell = _can_tell_dead_band(turns.take(known)) if known.any() else False
    judged = turns.take(known) if can_tell else turns
    tried = [(model, _fit_model(judged, model)) for model in _models(judged, dead_band=can_tell)]
    fitted = [(model, found) for model, found in tried if found is not None]
    if not fitted:
        raise CalibError("no model can be fitted to these turns")
    ranked = sorted(
        (Candidate(model=model, aicc=_aicc(found, len(judged))) for model, found in fitted),
        key=lambda candidate: candidate.aicc,
    )
    best = ranked[0].model
    final = judged if best.dead_band else turns
    scatter = _fit_model(final, best)
    assert scatter is not None
    return _made(final, best, scatter, tuple(ranked), _notes(turns, final, can_tell))


def _can_tell_dead_band(turns: Turns) -> bool:
    return bool(np.sum(turns.reversed_ == 1.0) >= 2 and np.sum(turns.reversed_ == 0.0) >= 2)


def _models(turns: Turns, *, dead_band: bool) -> list[Model]:
    both = len(_sides(turns)) == 2 and min(np.sum(turns.side == s) for s in SIDES) >= 2
    sizes = np.ptp(np.abs(turns.wheel_deg)) > 0.2 * np.abs(turns.wheel_deg).max()
    return [
        Model(separate_gains=separate, dead_band=band, law=law)
        for separate, band, law in itertools.product(
            (False, True) if both else (False,),
            (False, True) if dead_band else (False,),
            LAWS if sizes else ("constant",),
        )
    ]


def _sides(turns: Turns) -> tuple[float, ...]:
    return tuple(side for side in SIDES if np.any(turns.side == side))


def design_of(turns: Turns, model: Model) -> FloatArray:
    """Return the design matrix of a model, shape (N, P)."""
    size = np.abs(turns.wheel_deg)
    if model.separate_gains:
        columns = [np.where(turns.side == side, size, 0.0) for side in _sides(turns)]
    else:
        columns = [size]
    if model.dead_band:
        columns.append(-turns.reversed_)
    return np.column_stack(columns)


def _fit_model(turns: Turns, model: Model) -> ScatterFit | None:
    along = turns.heading_deg * turns.side
    try:
        return fit_with_scatter(design_of(turns, model), along, turns.u_deg, np.abs(turns.heading_deg), model.law)
    except (CalibError, FloatingPointError):
        return None


def _aicc(found: ScatterFit, n_turns: int) -> float:
    n_free = len(found.linear.coefficients) + 1
    spare = n_turns - n_free - 1
    if spare <= 0:
        return np.inf
    return -2.0 * found.log_likelihood + 2.0 * n_free + 2.0 * n_free * (n_free + 1) / spare


def _made(
    turns: Turns, model: Model, scatter: ScatterFit, candidates: tuple[Candidate, ...], notes: tuple[str, ...]
) -> Fit:
    linear = scatter.linear
    if linear.coefficients[0] <= 0.0:
        raise CalibError("the robot turned against its commands, or not at all; check the signs of the commands")
    size = np.abs(turns.wheel_deg)
    return Fit(
        model=model,
        sides=_sides(turns),
        coefficients=linear.coefficients,
        cov=linear.unscaled_cov,
        dof=linear.dof,
        scatter_deg=scatter.scatter_deg,
        size_deg=scatter.size_deg,
        n_turns=len(turns),
        tried_wheel_deg=(float(size.min()), float(size.max())),
        candidates=candidates,
        notes=notes,
        residuals_deg=linear.residuals,
        standardised=linear.residuals / np.sqrt(scatter.variance_deg2),
    )


def _notes(turns: Turns, used: Turns, can_tell: bool) -> tuple[str, ...]:
    notes = []
    if not can_tell:
        notes.append(
            "a dead band cannot be told from these turns: at least two that start against and two that start along "
            "the direction of the turn before are needed"
        )
    if len(_sides(turns)) == 1:
        notes.append(f"all turns are {SIDE_NAMES[_sides(turns)[0]]}; nothing is known of the other direction")
    if np.ptp(np.abs(turns.wheel_deg)) == 0.0:
        notes.append("all commands have one size, so a gain that depends on the size cannot be seen")
    if len(used) < len(turns):
        notes.append(f"{len(turns) - len(used)} turns with unknown slack were left out of the fit of the dead band")
    return tuple(notes)


def effective_track_mm(gain: Estimate, robot: Robot, dof: float) -> Estimate | None:
    """Return the diameter of the circle on which the wheels would roll without slip."""
    if robot.wheel_diameter_mm is None:
        return None
    return ratio_estimate(
        robot.wheel_diameter_mm,
        gain.value,
        var_above=0.0,
        var_below=gain.u**2,
        cov=0.0,
        dof=dof,
        confidence=gain.confidence,
    )


def contact_fraction(track_mm: Estimate | None, robot: Robot) -> Estimate | None:
    """Return where the effective track falls across the tyre: 0 at the inner edge, 1 at the outer."""
    if track_mm is None or robot.inner_track_mm is None or robot.tyre_width_mm is None:
        return None
    wide = 2.0 * robot.tyre_width_mm
    return Estimate(
        value=(track_mm.value - robot.inner_track_mm) / wide,
        u=track_mm.u / wide,
        low=(track_mm.low - robot.inner_track_mm) / wide,
        high=(track_mm.high - robot.inner_track_mm) / wide,
        confidence=track_mm.confidence,
    )


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
