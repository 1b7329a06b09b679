"""Measured turns as the tables that consistency and comparison work on."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from calib.table import FloatArray, TurnTable
from calib.turns import Turns
from floorswing.records import MeasuredTurn, Measurement

WANTED_COLUMN = "wanted_deg"
"""The factor column that holds the heading change wanted of each command, if the trial has it."""


def table_of(measurements: Sequence[Measurement], turns: Turns, used: Sequence[tuple[str, int]]) -> TurnTable:
    """Return the table of the usable turns of some clips.

    Each clip is a run, and has a floor frame of its own: cards and camera may have been moved between clips.

    Parameters
    ----------
    measurements : sequence of Measurement
    turns : Turns
        The usable turns of all of them.
    used : sequence of (str, int)
        Clip and number of each.
    """
    found = {(one.name, turn.turn): (turn, n) for one in measurements for n, turn in enumerate(one.turns)}
    rows = [found[key] for key in used]
    names = dict.fromkeys(name for turn, _ in rows for name in turn.factors if name != WANTED_COLUMN)
    clips = tuple(clip for clip, _ in used)
    return TurnTable(
        turns=turns,
        run=clips,
        number=np.array([n for _, n in rows], dtype=float),
        frame=clips,
        start_heading_deg=_column(rows, "start_heading_deg"),
        x_mm=_column(rows, "centre_x_mm"),
        y_mm=_column(rows, "centre_y_mm"),
        wanted_deg=np.array([number(turn.factors.get(WANTED_COLUMN, "")) for turn, _ in rows], dtype=float),
        factors={name: tuple(turn.factors.get(name, "") for turn, _ in rows) for name in names},
    )


def _column(rows: Sequence[tuple[MeasuredTurn, int]], name: str) -> FloatArray:
    return np.array([getattr(turn, name) for turn, _ in rows], dtype=float)


def number(text: str) -> float:
    """Return a number as people write it, with a decimal point or comma; NaN for anything else."""
    try:
        value = float(text.strip().replace(",", "."))
    except ValueError:
        return math.nan
    return value if math.isfinite(value) else math.nan
