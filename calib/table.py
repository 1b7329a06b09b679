"""A table of turns with all that their consistency is judged by: run, place, headings, wanted angles, factors."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from calib.turns import Turns

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class TurnTable:
    """Usable turns of one robot on one floor, in the order driven, run after run (N turns).

    Parameters
    ----------
    turns : Turns
    run : tuple of str
        The run (clip) that each is of.
    number : ndarray, shape (N,)
        Place of the turn among all turns of its run.
    frame : tuple of str
        The floor frame in which its headings and place are given; equal for turns that share one.
    start_heading_deg, x_mm, y_mm : ndarray, shape (N,)
        Heading before the turn and place of its centre in that frame; NaN where not known.
    wanted_deg : ndarray, shape (N,)
        Heading change that was wanted; NaN where the trial does not say.
    factors : mapping of str to tuple of str
        Further columns, a value a turn.
    """

    turns: Turns
    run: tuple[str, ...]
    number: FloatArray
    frame: tuple[str, ...]
    start_heading_deg: FloatArray
    x_mm: FloatArray
    y_mm: FloatArray
    wanted_deg: FloatArray
    factors: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name in ("number", "start_heading_deg", "x_mm", "y_mm", "wanted_deg"):
            values = np.array(getattr(self, name), dtype=float)
            values.setflags(write=False)
            object.__setattr__(self, name, values)
        columns = [self.run, self.frame, self.number, self.start_heading_deg, self.x_mm, self.y_mm, self.wanted_deg]
        if any(len(column) != len(self.turns) for column in (*columns, *self.factors.values())):
            raise ValueError("the columns of the table differ in length")

    def __len__(self) -> int:
        return len(self.turns)

    def take(self, chosen: NDArray[np.bool_]) -> TurnTable:
        """Return some of the turns."""
        places = np.flatnonzero(chosen)
        return TurnTable(
            turns=self.turns.take(chosen),
            run=tuple(self.run[n] for n in places),
            number=self.number[chosen],
            frame=tuple(self.frame[n] for n in places),
            start_heading_deg=self.start_heading_deg[chosen],
            x_mm=self.x_mm[chosen],
            y_mm=self.y_mm[chosen],
            wanted_deg=self.wanted_deg[chosen],
            factors={name: tuple(values[n] for n in places) for name, values in self.factors.items()},
        )


def plain_table(turns: Turns, run: tuple[str, ...] | None = None) -> TurnTable:
    """Return a table of turns of which nothing more is known than their order, and their run if it is given."""
    n = len(turns)
    nothing = np.full(n, np.nan)
    return TurnTable(
        turns=turns,
        run=run or ("",) * n,
        number=np.arange(n, dtype=float),
        frame=("",) * n,
        start_heading_deg=nothing,
        x_mm=nothing,
        y_mm=nothing,
        wanted_deg=nothing,
    )
