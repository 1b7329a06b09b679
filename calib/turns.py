"""The turns that a fit is made of, and what the wheels' slack was when each began."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Turns:
    """Usable turns in the order driven (N turns).

    Parameters
    ----------
    wheel_deg : ndarray, shape (N,)
        Commanded rotation of each wheel, counter-clockwise turns positive; never 0.
    heading_deg : ndarray, shape (N,)
        Heading change.
    u_deg : ndarray, shape (N,)
        Standard uncertainty of each heading change from its measurement.
    reversed_ : ndarray, shape (N,)
        1 if the wheels started against their previous direction, 0 if along it, NaN if that is not known.
    """

    wheel_deg: FloatArray
    heading_deg: FloatArray
    u_deg: FloatArray
    reversed_: FloatArray

    def __post_init__(self) -> None:
        for name in ("wheel_deg", "heading_deg", "u_deg", "reversed_"):
            values = np.array(getattr(self, name), dtype=float)
            values.setflags(write=False)
            object.__setattr__(self, name, values)
        n = len(self.wheel_deg)
        if any(len(getattr(self, name)) != n for name in ("heading_deg", "u_deg", "reversed_")):
            raise ValueError("the columns of turns differ in length")
        if not np.all(np.isfinite(self.heading_deg)) or not np.all(np.abs(self.wheel_deg) > 0.0):
            raise ValueError("a usable turn has a command other than 0 and a finite heading change")

    def __len__(self) -> int:
        return len(self.wheel_deg)

    @property
    def side(self) -> FloatArray:
        """+1 for counter-clockwise commands, -1 for clockwise ones."""
        return np.sign(self.wheel_deg)

    def take(self, chosen: NDArray[np.bool_]) -> Turns:
        """Return some of the turns."""
        return Turns(
            wheel_deg=self.wheel_deg[chosen],
            heading_deg=self.heading_deg[chosen],
            u_deg=self.u_deg[chosen],
            reversed_=self.reversed_[chosen],
        )


def reversals(wheel_deg: ArrayLike, *, slack_known: ArrayLike) -> FloatArray:
    """Return for each turn whether the wheels started against the direction of the turn before.

    Parameters
    ----------
    wheel_deg : array_like, shape (N,)
        Commands of all turns driven, in order; NaN for a turn without a command.
    slack_known : array_like of bool, shape (N,)
        False for the first turn of a run and for turns after the robot was handled.

    Returns
    -------
    ndarray, shape (N,)
        1, 0, or NaN where it cannot be known.
    """
    side = np.sign(np.asarray(wheel_deg, dtype=float))
    known = np.asarray(slack_known, dtype=bool)
    out = np.full(len(side), np.nan)
    for n in range(1, len(side)):
        if known[n] and np.isfinite(side[n]) and np.isfinite(side[n - 1]):
            out[n] = float(side[n] != side[n - 1])
    return out
