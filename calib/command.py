"""Wheel degrees to command for a wanted angle, and where single turns then land."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from calib.errors import NotIdentified
from calib.fit import CONFIDENCE, Fit
from calib.intervals import Estimate, ratio_estimate, t_quantile
from calib.models import SIDE_NAMES


@dataclass(frozen=True, kw_only=True, slots=True)
class Command:
    """What to command for a wanted angle.

    Parameters
    ----------
    wanted_deg : float
        Counter-clockwise positive.
    after_reversal : bool
        Whether the turn before went the other way.
    wheel_deg : Estimate
        Signed like the wanted angle; the interval is Fieller's.
    low_deg, high_deg : float
        Band in which a single turn lands with probability `confidence` (prediction interval).
    confidence : float
    extrapolated : bool
        Whether the command lies outside the sizes that were tried.
    scatter_deg : float
        Standard deviation of single turns of this size.
    u_mean_deg : float
        Standard uncertainty of the mean heading change at this command.
    dof : int
    """

    wanted_deg: float
    after_reversal: bool
    wheel_deg: Estimate
    low_deg: float
    high_deg: float
    confidence: float
    extrapolated: bool
    scatter_deg: float
    u_mean_deg: float
    dof: int


def command_for(
    fit: Fit, wanted_deg: float, *, after_reversal: bool = False, confidence: float = CONFIDENCE
) -> Command:
    """Return the wheel degrees that turn the robot by `wanted_deg` on average.

    Raises
    ------
    NotIdentified
        If the direction was never driven, or a dead band is asked for that the turns cannot tell.
    ValueError
        If the wanted angle is 0 or not finite.
    """
    if not math.isfinite(wanted_deg) or wanted_deg == 0.0:
        raise ValueError(f"wanted angle {wanted_deg}; accepted: any finite angle other than 0")
    side = math.copysign(1.0, wanted_deg)
    if side not in fit.sides:
        raise NotIdentified(
            f"no turn of the fit is {SIDE_NAMES[side]}, so nothing is known for {wanted_deg:g} deg; drive some"
        )
    size = abs(wanted_deg)
    gain = fit.gain_row(side)
    lost = fit.lost_row() * float(after_reversal) - fit.offset_row(side)
    wheel = ratio_estimate(
        size + float(lost @ fit.coefficients),
        float(gain @ fit.coefficients),
        var_above=float(lost @ fit.cov @ lost),
        var_below=float(gain @ fit.cov @ gain),
        cov=float(lost @ fit.cov @ gain),
        dof=fit.dof,
        confidence=confidence,
    )
    row = gain * wheel.value - lost
    scatter_deg, u_mean_deg = fit.scatter_at_deg(size), math.sqrt(float(row @ fit.cov @ row))
    half = t_quantile(confidence, fit.dof) * math.hypot(scatter_deg, u_mean_deg)
    low, high = fit.tried_wheel_deg
    return Command(
        wanted_deg=wanted_deg,
        after_reversal=after_reversal,
        wheel_deg=_signed(wheel, side),
        low_deg=min(side * (size - half), side * (size + half)),
        high_deg=max(side * (size - half), side * (size + half)),
        confidence=confidence,
        extrapolated=not 0.98 * low <= wheel.value <= 1.02 * high,
        scatter_deg=scatter_deg,
        u_mean_deg=u_mean_deg,
        dof=fit.dof,
    )


def _signed(wheel: Estimate, side: float) -> Estimate:
    ends = sorted((side * wheel.low, side * wheel.high))
    return Estimate(value=side * wheel.value, u=wheel.u, low=ends[0], high=ends[1], confidence=wheel.confidence)


def tells_reversal(fit: Fit) -> bool:
    """Return whether commands differ between a start along and a start against the turn before."""
    return bool(np.any(fit.lost_row()))
