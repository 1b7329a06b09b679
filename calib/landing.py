"""Where turns land for a command: tolerance band, hit rate, and closure after several turns.

All follow from the fitted law: the mean heading change at the command with its uncertainty, and the scatter of single
turns with its degrees of freedom.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import special

from calib.command import Command
from calib.intervals import Estimate, t_quantile
from calib.tolerance import tolerance_factor

GRID = 240
"""Points to a side of the grid of equal probability that stands for what is not known of mean and scatter."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Band:
    """An interval of heading, with what it holds.

    Parameters
    ----------
    low_deg, high_deg : float
    coverage : float or None
        Share of all turns that it holds; None for a band that holds the next value.
    confidence : float
    """

    low_deg: float
    high_deg: float
    coverage: float | None
    confidence: float


def tolerance_band(command: Command, coverage: float = 0.95, confidence: float = 0.95) -> Band:
    """Return the band that holds a share of all turns with a stated confidence (ISO 16269-6).

    Parameters
    ----------
    command : Command
    coverage, confidence : float
    """
    if command.scatter_deg == 0.0:
        half = t_quantile(confidence, command.dof) * command.u_mean_deg
    else:
        n = (command.scatter_deg / max(command.u_mean_deg, 1e-9 * command.scatter_deg)) ** 2
        half = tolerance_factor(n, command.dof, coverage, confidence) * command.scatter_deg
    return Band(
        low_deg=command.wanted_deg - half,
        high_deg=command.wanted_deg + half,
        coverage=coverage,
        confidence=confidence,
    )


def hit_rate(command: Command, tolerance_deg: float, confidence: float = 0.95) -> Estimate:
    """Return the share of turns that land within a tolerance of the wanted angle.

    The interval is that of the fiducial distribution of mean and scatter (generalized confidence interval).

    Parameters
    ----------
    command : Command
    tolerance_deg : float
        Largest error that counts as a hit.
    confidence : float

    References
    ----------
    Weerahandi (1993), Generalized confidence intervals, JASA 88, 899-905.
    """
    if not tolerance_deg > 0.0 or not math.isfinite(tolerance_deg):
        raise ValueError(f"tolerance {tolerance_deg}; accepted: an angle above 0")
    if command.scatter_deg == 0.0:
        return Estimate(value=1.0, u=0.0, low=1.0, high=1.0, confidence=confidence)
    middle = (np.arange(GRID) + 0.5) / GRID
    scatter = command.scatter_deg * np.sqrt(command.dof / special.chdtri(command.dof, 1.0 - middle))[:, None]
    bias = command.u_mean_deg / command.scatter_deg * scatter * special.ndtri(middle)[None, :]
    shares = special.ndtr((tolerance_deg - bias) / scatter) - special.ndtr((-tolerance_deg - bias) / scatter)
    low, high = np.quantile(shares, [0.5 - 0.5 * confidence, 0.5 + 0.5 * confidence])
    value = float(special.erf(tolerance_deg / command.scatter_deg / math.sqrt(2.0)))
    return Estimate(value=value, u=float(np.std(shares)), low=float(low), high=float(high), confidence=confidence)


def closure(command: Command, n_turns: int, confidence: float = 0.95) -> Band:
    """Return the band of the heading error after several such turns, one after the other the same way.

    The error of the mean is the same in each, so it grows with the count; scatter grows with its root.
    """
    if n_turns < 1:
        raise ValueError(f"{n_turns} turns; accepted: 1 or more")
    half = t_quantile(confidence, command.dof) * math.hypot(
        math.sqrt(n_turns) * command.scatter_deg, n_turns * command.u_mean_deg
    )
    return Band(low_deg=-half, high_deg=half, coverage=None, confidence=confidence)
