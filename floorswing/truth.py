"""Measured turns against the true ones that a rendered clip carries beside it."""

from __future__ import annotations

import csv
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from floorswing.errors import FileError
from floorswing.records import MeasuredTurn
from floorswing.summary import COVERAGE

COLUMNS = ("turn", "commanded_wheel_deg", "heading_change_deg", "start_s", "end_s")


@dataclass(frozen=True, kw_only=True, slots=True)
class TrueTurn:
    """A turn as it was rendered."""

    commanded_wheel_deg: float
    heading_change_deg: float
    start_s: float
    end_s: float


@dataclass(frozen=True, kw_only=True, slots=True)
class TruthCheck:
    """How a measurement compares with the truth.

    Parameters
    ----------
    n_true, n_found, n_invented : int
        Turns rendered, those of them that were measured, and measured turns that never were.
    n_right_command : int
        Found turns matched to the command that made them.
    n_within : int
        Found turns whose true heading change lies within twice the stated standard uncertainty.
    rms_deg, worst_deg : float
        Root mean square and largest error of the heading change; NaN if nothing was found.
    """

    n_true: int
    n_found: int
    n_invented: int
    n_right_command: int
    n_within: int
    rms_deg: float
    worst_deg: float


def read_truth(path: Path) -> tuple[TrueTurn, ...]:
    """Read the true turns of a rendered clip.

    Raises
    ------
    FileError
        If the file cannot be read as such.
    """
    try:
        with path.open(encoding="utf-8", newline="") as file:
            rows = list(csv.DictReader(file))
        names = COLUMNS[1:]
        return tuple(TrueTurn(**{name: float(row[name]) for name in names}) for row in rows)
    except (OSError, ValueError, KeyError, TypeError, csv.Error) as error:
        raise FileError(f"{path}: cannot be read as the truth of a rendered clip ({error!r})") from error


def check_against(turns: Sequence[MeasuredTurn], truth: Sequence[TrueTurn]) -> TruthCheck:
    """Compare measured turns with the true ones that they overlap most in time."""
    pairs: list[tuple[MeasuredTurn, TrueTurn]] = []
    free = list(truth)
    for turn in turns:
        best = max(free, key=lambda true: _overlap_s(turn, true), default=None)
        if best is not None and _overlap_s(turn, best) > 0:
            pairs.append((turn, best))
            free.remove(best)
    errors_deg = [turn.heading_change_deg - true.heading_change_deg for turn, true in pairs]
    known_deg = [error for error in errors_deg if math.isfinite(error)]
    return TruthCheck(
        n_true=len(truth),
        n_found=len(pairs),
        n_invented=len(turns) - len(pairs),
        n_right_command=sum(turn.commanded_wheel_deg == true.commanded_wheel_deg for turn, true in pairs),
        n_within=sum(
            abs(error) <= COVERAGE * turn.u_heading_change_deg
            for (turn, _), error in zip(pairs, errors_deg, strict=True)
        ),
        rms_deg=math.sqrt(math.fsum(e * e for e in known_deg) / len(known_deg)) if known_deg else math.nan,
        worst_deg=max((abs(error) for error in known_deg), default=math.nan),
    )


def _overlap_s(turn: MeasuredTurn, true: TrueTurn) -> float:
    return min(turn.end_s, true.end_s) - max(turn.start_s, true.start_s)
