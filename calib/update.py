"""A short new trial against a stored fit: does the old relation still hold, and what to command now.

A few turns cannot replace a fit, but they can say whether it has drifted. Each new turn is compared with what the
stored relation expects; the common part of the differences, in degrees at a wanted angle, is the drift.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.command import command_for
from calib.errors import NotEnoughTurns, NotIdentified
from calib.fit import CONFIDENCE, Fit
from calib.intervals import Estimate, t_estimate, t_quantile
from calib.models import SIDE_NAMES, design_of
from calib.scatter import scatter_variance_deg2
from calib.turns import Turns

FloatArray = NDArray[np.float64]

VALID, DRIFTED, UNSURE = "still valid", "drifted", "cannot tell"
FEWEST = 2


@dataclass(frozen=True, kw_only=True, slots=True)
class Check:
    """What a short trial says of a stored fit.

    Parameters
    ----------
    wanted_deg : float
    verdict : str
        `VALID`, `DRIFTED` or `UNSURE`.
    drift_deg : Estimate
        Heading change now less that of the stored fit, for the stored command of the wanted angle, along it.
    margin_deg : float
    old_wheel_deg, now_wheel_deg : float
        Command by the stored fit, and by the update.
    u_now_wheel_deg : float
    weight : float
        How much the new turns count in the update, 0 to 1.
    n_turns : int
    reason : str
        Why this verdict, a sentence.
    """

    wanted_deg: float
    verdict: str
    drift_deg: Estimate
    margin_deg: float
    old_wheel_deg: float
    now_wheel_deg: float
    u_now_wheel_deg: float
    weight: float
    n_turns: int
    reason: str


def check_fit(fit: Fit, turns: Turns, wanted_deg: float, *, margin_deg: float, confidence: float = CONFIDENCE) -> Check:
    """Judge a stored fit by new turns in the direction of a wanted angle.

    The drift is a change of gain: the same share of every turn. It is estimated by least squares with the stored
    scatter as weights; the scatter of the new turns enters its uncertainty where it is larger. The update weighs the
    stored and the new gain by their variances, the stored one widened by as much as the two disagree beyond them
    (DerSimonian and Laird 1986, for two).

    Parameters
    ----------
    fit : Fit
    turns : Turns
        Of both directions; only those in that of `wanted_deg` are used.
    wanted_deg : float
    margin_deg : float
        Drift that does not matter.
    confidence : float

    Raises
    ------
    NotEnoughTurns, NotIdentified
        If too few turns go that way, or the stored fit knows nothing of it.
    """
    side = math.copysign(1.0, wanted_deg)
    rows = _that_way(fit, turns, side)
    command = command_for(fit, wanted_deg, confidence=confidence)
    design = design_of(rows, fit.model) if len(fit.sides) == 1 else _design(fit, rows)
    size = np.abs(rows.wheel_deg) * float(fit.gain_row(side) @ fit.coefficients)
    left = rows.heading_deg * side - design @ fit.coefficients
    variance = scatter_variance_deg2(fit.laws, size, fit.size_deg) + rows.u_deg**2
    weight = 1.0 / np.maximum(variance, 1e-18)
    share = float(np.sum(weight * size * left) / np.sum(weight * size**2))
    excess = float(np.sum(weight * (left - share * size) ** 2)) / (len(rows) - 1)
    u_new = math.sqrt(max(excess, 1.0) / float(np.sum(weight * size**2)))
    u_old = command.u_mean_deg / abs(wanted_deg)
    dof = _dof(u_old, fit.dof, u_new, len(rows) - 1 + (fit.dof if excess <= 1.0 else 0))
    drift = t_estimate(share * abs(wanted_deg), math.hypot(u_old, u_new) * abs(wanted_deg), dof, confidence)
    between2 = max(share**2 - u_old**2 - u_new**2, 0.0)
    believed = (u_old**2 + between2) / (u_old**2 + between2 + u_new**2)
    verdict = _verdict(drift, margin_deg, dof)
    now = 1.0 + believed * share
    return Check(
        wanted_deg=wanted_deg,
        verdict=verdict,
        drift_deg=drift,
        margin_deg=margin_deg,
        old_wheel_deg=command.wheel_deg.value,
        now_wheel_deg=command.wheel_deg.value / now,
        u_now_wheel_deg=abs(command.wheel_deg.value) / now * u_new * math.sqrt(believed),
        weight=believed,
        n_turns=len(rows),
        reason=_reason(verdict, drift, margin_deg, len(rows)),
    )


def _that_way(fit: Fit, turns: Turns, side: float) -> Turns:
    if side not in fit.sides:
        raise NotIdentified(f"no turn of the stored fit is {SIDE_NAMES[side]}; nothing can be checked that way")
    usable = turns.side == side
    if fit.model.dead_band:
        usable &= np.isfinite(turns.reversed_)
    rows = turns.take(usable)
    if len(rows) < FEWEST:
        raise NotEnoughTurns(
            f"{len(rows)} usable {SIDE_NAMES[side]} turns in the new trial; at least {FEWEST} are needed",
            n_seen=len(rows),
            n_needed=FEWEST,
        )
    return rows


def _design(fit: Fit, rows: Turns) -> FloatArray:
    """Return the stored model's design for turns of one direction only."""
    side, size = float(rows.side[0]), np.abs(rows.wheel_deg)
    design = np.outer(size, fit.gain_row(side))
    design -= np.outer(np.nan_to_num(rows.reversed_), fit.lost_row())
    design += np.outer(np.ones(len(rows)), fit.offset_row(side))
    return design


def _dof(u_old: float, dof_old: float, u_new: float, dof_new: float) -> float:
    """Return the effective degrees of freedom of the difference (Welch 1947; Satterthwaite 1946)."""
    total = (u_old**2 + u_new**2) ** 2
    parts = u_old**4 / dof_old + u_new**4 / dof_new
    return total / parts if parts > 0.0 else dof_new


def _verdict(drift: Estimate, margin_deg: float, dof: float) -> str:
    """Return the verdict: two one-sided tests for valid, the interval without 0 for drifted."""
    if drift.u == 0.0:
        return VALID if abs(drift.value) <= margin_deg else DRIFTED
    reach = t_quantile(2.0 * drift.confidence - 1.0, dof) * drift.u
    if abs(drift.value) + reach <= margin_deg:
        return VALID
    return DRIFTED if not drift.low <= 0.0 <= drift.high else UNSURE


def _reason(verdict: str, drift: Estimate, margin_deg: float, n_turns: int) -> str:
    between = f"the drift lies between {drift.low:+.2f} and {drift.high:+.2f} degrees, from {n_turns} turns"
    if verdict == VALID:
        return f"{between}; that is within the margin of {margin_deg:g}"
    if verdict == DRIFTED:
        return f"{between}; 0 is not among them, so the floor, the tyres or the robot have changed"
    return f"{between}; that allows both no drift and one beyond the margin of {margin_deg:g}, so drive more turns"
