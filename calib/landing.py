"""Where turns land for a command: tolerance band, hit rate, and closure after several turns.

All follow from the fitted law: the mean heading change at the command with its uncertainty, and the scatter of single
turns with its degrees of freedom.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from calib.command import Command, Landing
from calib.intervals import Estimate, t_quantile
from calib.mixture import Part, mixed_t
from calib.tolerance import HalfBand, tolerance_half_width

SCATTER_NODES, SCATTER_WEIGHTS = (np.asarray(one) for one in np.polynomial.legendre.leggauss(256))
MEAN_NODES, MEAN_WEIGHTS = (np.asarray(one) for one in np.polynomial.legendre.leggauss(48))
"""Gauss-Legendre nodes of the probabilities that stand for what is not known of scatter and mean; they lie closer
towards the tails."""


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
    laws = [
        HalfBand(weight=one.weight, u_centre=math.hypot(one.u_mean_deg, one.bias_deg), sd=one.scatter_deg)
        for one in command.laws
    ]
    if command.scatter_deg == 0.0:
        half = t_quantile(confidence, command.dof) * command.u_mean_deg
    else:
        half = tolerance_half_width(laws, command.dof, coverage, confidence)
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
        sure = tolerance_deg >= t_quantile(confidence, command.dof) * command.u_mean_deg
        return Estimate(value=1.0, u=0.0, low=float(sure), high=1.0, confidence=confidence)
    shares, weights = [], []
    for law in command.laws:
        shares.append(_shares(law, command.dof, tolerance_deg).ravel())
        weights.append(law.weight * 0.25 * np.outer(SCATTER_WEIGHTS, MEAN_WEIGHTS).ravel())
    value, weight = np.concatenate(shares), np.concatenate(weights)
    mean = float(weight @ value)
    tail = 0.5 - 0.5 * confidence
    order = np.argsort(value)
    places = np.cumsum(weight[order]) - 0.5 * weight[order]
    low, high = np.interp([tail, 1.0 - tail], places, value[order])
    return Estimate(
        value=sum(one.weight * _share(one, tolerance_deg) for one in command.laws),
        u=math.sqrt(float(weight @ (value - mean) ** 2)),
        low=float(low),
        high=float(high),
        confidence=confidence,
    )


def _share(law: Landing, tolerance_deg: float) -> float:
    """Return the share within the tolerance if mean and scatter were what they are estimated to be."""
    ends = np.array([tolerance_deg - law.bias_deg, -tolerance_deg - law.bias_deg]) / law.scatter_deg
    return float(special.ndtr(ends[0]) - special.ndtr(ends[1]))


def _shares(law: Landing, dof: float, tolerance_deg: float) -> NDArray[np.float64]:
    """Return the shares under pairs of scatter and mean, shape (J, K), as likely as their weights say."""
    scatter_at, mean_at = 0.5 * (SCATTER_NODES + 1.0), 0.5 * (MEAN_NODES + 1.0)
    scatter = law.scatter_deg * np.sqrt(dof / special.chdtri(dof, 1.0 - scatter_at))[:, None]
    bias = law.bias_deg + law.u_mean_deg / law.scatter_deg * scatter * special.ndtri(mean_at)[None, :]
    within: NDArray[np.float64] = special.ndtr((tolerance_deg - bias) / scatter) - special.ndtr(
        (-tolerance_deg - bias) / scatter
    )
    return within


def closure(command: Command, n_turns: int, confidence: float = 0.95) -> Band:
    """Return the band of the heading error after several such turns, one after the other the same way.

    The error of the mean is the same in each, so it grows with the count; scatter grows with its root.
    """
    if n_turns < 1:
        raise ValueError(f"{n_turns} turns; accepted: 1 or more")
    parts = [
        Part(
            weight=one.weight,
            value=n_turns * one.bias_deg,
            u=math.hypot(math.sqrt(n_turns) * one.scatter_deg, n_turns * one.u_mean_deg),
        )
        for one in command.laws
    ]
    error = mixed_t(parts, command.dof, confidence)
    side = math.copysign(1.0, command.wanted_deg)
    low, high = sorted((side * error.low, side * error.high))
    return Band(low_deg=low, high_deg=high, coverage=None, confidence=confidence)
