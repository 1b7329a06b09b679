"""Which terms a relation can have, and how each is laid out as a linear model along the command's direction."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from calib.scatter import LAWS
from calib.turns import Turns

FloatArray = NDArray[np.float64]

SIDES = (1.0, -1.0)
SIDE_NAMES = {1.0: "counter-clockwise", -1.0: "clockwise"}
SIZES_APART = 0.2
"""Commands differ in size if smallest and largest are apart by more than this share of the largest."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Model:
    """Which terms a relation has.

    Parameters
    ----------
    separate_gains : bool
        A gain for each direction.
    dead_band : bool
    law : str
        How the scatter grows with the turn, a key of `calib.scatter.LAWS`.
    offset : bool
        A heading added to every turn whatever its direction.
    """

    separate_gains: bool
    dead_band: bool
    law: str
    offset: bool = False

    def __str__(self) -> str:
        gains = "a gain for each direction" if self.separate_gains else "one gain"
        band = "with dead band" if self.dead_band else "no dead band"
        offset = ", with offset" if self.offset else ""
        return f"{gains}, {band}{offset}, {self.law} scatter"


@dataclass(frozen=True, kw_only=True, slots=True)
class Candidate:
    """A model that was tried, with its corrected information criterion (smaller is better)."""

    model: Model
    aicc: float


def sides_of(turns: Turns) -> tuple[float, ...]:
    """Return the directions that the turns have."""
    return tuple(side for side in SIDES if np.any(turns.side == side))


def can_tell_dead_band(turns: Turns) -> bool:
    """Return whether at least two turns start against, and two along, the direction of the turn before."""
    return bool(np.sum(turns.reversed_ == 1.0) >= 2 and np.sum(turns.reversed_ == 0.0) >= 2)


def sizes_differ(turns: Turns) -> bool:
    """Return whether the commands differ in size enough to tell how things grow with it."""
    size = np.abs(turns.wheel_deg)
    return bool(np.ptp(size) > SIZES_APART * size.max())


def possible_models(turns: Turns, *, dead_band: bool) -> list[Model]:
    """Return the models whose terms these turns can tell apart, the plainest first."""
    both = len(sides_of(turns)) == 2 and min(np.sum(turns.side == s) for s in SIDES) >= 2
    sizes = sizes_differ(turns)
    return [
        Model(separate_gains=separate, dead_band=band, offset=offset, law=law)
        for separate, band, offset, law in itertools.product(
            (False, True) if both else (False,),
            (False, True) if dead_band else (False,),
            (False, True) if both and sizes else (False,),
            LAWS if sizes else ("constant",),
        )
    ]


def design_of(turns: Turns, model: Model) -> FloatArray:
    """Return the design matrix for heading changes along the command's direction, shape (N, P)."""
    size = np.abs(turns.wheel_deg)
    if model.separate_gains:
        columns = [np.where(turns.side == side, size, 0.0) for side in sides_of(turns)]
    else:
        columns = [size]
    if model.dead_band:
        columns.append(-turns.reversed_)
    if model.offset:
        columns.append(turns.side)
    return np.column_stack(columns)


def all_columns(turns: Turns) -> FloatArray:
    """Return columns of which every model's terms are some, shape (N, 4); see `columns_taken`."""
    size, side = np.abs(turns.wheel_deg), turns.side
    return np.column_stack([size, size * side, -turns.reversed_, side])


def columns_taken(model: Model) -> tuple[bool, bool, bool, bool]:
    """Return which of `all_columns` span a model's terms."""
    return True, model.separate_gains, model.dead_band, model.offset


def aicc(log_likelihood: float, n_terms: int, n_turns: int) -> float:
    """Return the corrected information criterion; infinite where too few turns are left to correct it.

    References
    ----------
    Hurvich and Tsai (1989), Regression and time series model selection in small samples, Biometrika 76, 297-307.
    """
    n_free = n_terms + 1
    spare = n_turns - n_free - 1
    if spare <= 0:
        return np.inf
    return -2.0 * log_likelihood + 2.0 * n_free + 2.0 * n_free * (n_free + 1) / spare
