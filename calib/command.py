"""Wheel degrees to command for a wanted angle, and where single turns then land."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.errors import NotIdentified
from calib.fit import CONFIDENCE, Fit
from calib.intervals import Estimate
from calib.mixture import Part, mixed_t
from calib.models import SIDE_NAMES
from calib.scatter import LawShare

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True, slots=True)
class Landing:
    """Where turns land under one law of scatter.

    Parameters
    ----------
    weight : float
        How much the law is believed.
    bias_deg : float
        Mean heading change less the wanted one, along the command.
    u_mean_deg : float
        Standard uncertainty of that mean.
    scatter_deg : float
        Standard deviation of single turns.
    """

    weight: float
    bias_deg: float
    u_mean_deg: float
    scatter_deg: float

    @property
    def u_next_deg(self) -> float:
        """Standard uncertainty of the next turn."""
        return math.hypot(self.u_mean_deg, self.scatter_deg)


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
    laws : tuple of Landing
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
    laws: tuple[Landing, ...]


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
    if after_reversal and not any(one.model.dead_band for one in fit.candidates):
        raise NotIdentified(
            "what is lost after a reversal cannot be told from these turns; drive at least two that start against, and "
            "two that start along, the direction of the turn before"
        )
    size = abs(wanted_deg)
    gain = fit.gain_row(side)
    lost = fit.lost_row() * float(after_reversal) - fit.offset_row(side)
    wheel = fit.ratio(lost, gain, confidence, plus=size)
    landing = tuple(_landing(one, fit, gain * wheel.value - lost, size) for one in fit.laws)
    band = mixed_t(
        [Part(weight=one.weight, value=size + one.bias_deg, u=one.u_next_deg) for one in landing], fit.dof, confidence
    )
    row = gain * wheel.value - lost
    low, high = fit.tried_wheel_deg
    return Command(
        wanted_deg=wanted_deg,
        after_reversal=after_reversal,
        wheel_deg=_signed(wheel, side),
        low_deg=min(side * band.low, side * band.high),
        high_deg=max(side * band.low, side * band.high),
        confidence=confidence,
        extrapolated=not 0.98 * low <= wheel.value <= 1.02 * high,
        scatter_deg=fit.scatter_at_deg(size),
        u_mean_deg=math.sqrt(float(row @ fit.cov @ row)),
        dof=fit.dof,
        laws=landing,
    )


def _landing(law: LawShare, fit: Fit, row: FloatArray, size_deg: float) -> Landing:
    return Landing(
        weight=law.weight,
        bias_deg=float(row @ law.coefficients) - size_deg,
        u_mean_deg=math.sqrt(float(row @ law.cov @ row)),
        scatter_deg=law.scatter_at_deg(size_deg, fit.size_deg),
    )


def _signed(wheel: Estimate, side: float) -> Estimate:
    ends = sorted((side * wheel.low, side * wheel.high))
    return Estimate(value=side * wheel.value, u=wheel.u, low=ends[0], high=ends[1], confidence=wheel.confidence)


def tells_reversal(fit: Fit) -> bool:
    """Return whether commands differ between a start along and a start against the turn before."""
    return bool(np.any(fit.lost_row()))
