"""A quantity over time: a chart of the trials with limits and signals, changes dated, and the part between days."""

from __future__ import annotations

import math
import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from calib.control_chart import Chart, individuals_chart
from calib.errors import CalibError, NotEnoughTurns
from calib.runs import RunParts, run_parts_of_sums
from floorswing.logbook.selection import LoggedTrial, Selection, some_trials
from floorswing.logbook.store import LogbookError

QUANTITIES = {
    "gain": "gain, deg per wheel deg",
    "repeatability": "repeatability, deg",
    "command": "command, wheel deg",
}


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Trend:
    """A quantity over the trials of a selection.

    Parameters
    ----------
    quantity : str
        A key of `QUANTITIES`.
    wanted_deg : float or None
        The angle commanded for, where the quantity is a command.
    trials : tuple of LoggedTrial, length N
    chart : Chart
    left_out : int
        Trials whose turns do not give the quantity.
    days : RunParts or None
        Scatter of single turns (deg, at their typical size) within and between days; None where it cannot be told.
    notes : tuple of str
    """

    quantity: str
    wanted_deg: float | None
    trials: tuple[LoggedTrial, ...]
    chart: Chart
    left_out: int
    days: RunParts | None
    notes: tuple[str, ...]


def trend(connection: sqlite3.Connection, chosen: Selection, quantity: str, wanted_deg: float = 90.0) -> Trend:
    """Return how a quantity went over the chosen trials.

    Raises
    ------
    LogbookError
        If no trial matches, or fewer than three give the quantity.
    """
    every = some_trials(connection, chosen)
    kept = [(one, value) for one in every if (value := value_of(one, quantity, wanted_deg)) is not None]
    try:
        chart = individuals_chart([value for _, value in kept])
    except NotEnoughTurns as error:
        raise LogbookError(f"{chosen}: {quantity} is known of {error}") from None
    kinds = {(one.robot, one.surface) for one, _ in kept}
    notes = (
        ["the trials are of different robots or surfaces; a signal may be that difference"] if len(kinds) > 1 else []
    )
    return Trend(
        quantity=quantity,
        wanted_deg=wanted_deg if quantity == "command" else None,
        trials=tuple(one for one, _ in kept),
        chart=chart,
        left_out=len(every) - len(kept),
        days=_days(connection, [one for one, _ in kept]),
        notes=tuple(notes),
    )


def value_of(one: LoggedTrial, quantity: str, wanted_deg: float) -> float | None:
    """Return a trial's value of a quantity, None where its turns do not give it."""
    if quantity == "gain":
        return one.gain
    if quantity == "repeatability":
        return one.repeatability_deg
    side = math.copysign(1.0, wanted_deg)
    gain = one.gain_ccw if side > 0.0 else one.gain_cw
    if gain is None or one.offset_deg is None:
        return None
    return side * (abs(wanted_deg) - side * one.offset_deg) / gain


def _days(connection: sqlite3.Connection, kept: Sequence[LoggedTrial]) -> RunParts | None:
    """Return the scatter within and between days of the heading per wheel degree, at the typical size of turn."""
    day = {one.id: one.filmed_on for one in kept}
    if len(set(day.values())) < 2:
        return None
    rows = [
        row
        for row in connection.execute(
            "SELECT trial, commanded_wheel_deg > 0, count(*), sum(heading_change_deg / commanded_wheel_deg), "
            "sum((heading_change_deg / commanded_wheel_deg) * (heading_change_deg / commanded_wheel_deg)), "
            "avg(abs(commanded_wheel_deg)) FROM turn WHERE counts AND commanded_wheel_deg IS NOT NULL "
            "AND heading_change_deg IS NOT NULL GROUP BY 1, 2"
        )
        if row[0] in day
    ]
    if not rows:
        return None
    side, n, total, squares, size = (np.array(column, dtype=float) for column in list(zip(*rows, strict=True))[1:])
    for one in np.unique(side):  # each direction has a gain of its own
        this = side == one
        mean = total[this].sum() / n[this].sum()
        squares[this] += n[this] * mean**2 - 2.0 * mean * total[this]
        total[this] -= n[this] * mean
    typical = float(np.average(size, weights=n))
    names, which = np.unique([day[row[0]] for row in rows], return_inverse=True)
    by_day = [np.bincount(which, weights=one, minlength=len(names)) for one in (n, total, squares)]
    try:
        return run_parts_of_sums(by_day[0], by_day[1] * typical, by_day[2] * typical**2, n_fitted=len(np.unique(side)))
    except CalibError:
        return None


def trend_sentences(found: Trend) -> list[str]:
    """Return in plain sentences what the chart says: its signals, dated."""
    chart, trials = found.chart, found.trials
    what = found.quantity if found.wanted_deg is None else f"{found.quantity} for {found.wanted_deg:+g} degrees"
    said = [
        f"{what} of {len(trials)} trials from {trials[0].filmed_on} to {trials[-1].filmed_on}: centre "
        f"{chart.centre:.5g}, limits {chart.low:.5g} to {chart.high:.5g}."
    ]
    for signal in chart.signals:
        one = trials[signal.index]
        said.append(f"{one.filmed_on}, trial {one.id} ({one.name}): {chart.values[signal.index]:.5g}, {signal.kind}.")
    if not chart.signals:
        said.append("No signal: the trials differ by no more than neighbours do.")
    if found.days is not None:
        within, between = found.days.repeatability, found.days.between
        said.append(
            f"Within a day single turns scatter by {within.value:.2g} degrees, between days by {between.value:.2g} "
            f"(between {between.low:.2g} and {between.high:.2g}); together {found.days.reproducibility.value:.2g}."
        )
    if found.left_out:
        said.append(f"{found.left_out} trials have too few turns for it and are left out.")
    said.extend(f"Note: {note}." for note in found.notes)
    return said
