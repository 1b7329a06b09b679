"""A short new trial against a stored fit."""

from __future__ import annotations

import sqlite3
import tempfile
from collections.abc import Sequence
from pathlib import Path

from calib.fit import Fit
from calib.update import DRIFTED, VALID, Check, check_fit
from floorswing.errors import FileError
from floorswing.files import read_measurement
from floorswing.fitting import FIT_FILE, fit_measurements, measured_folders, read_fit, usable_turns
from floorswing.logbook.selection import Selection, trials
from floorswing.logbook.store import LogbookError, write_trials
from floorswing.records import Measurement


def check_folders(
    connection: sqlite3.Connection,
    folders: Sequence[Path],
    wanted_deg: Sequence[float],
    *,
    margin_deg: float,
    against: Selection | None = None,
) -> tuple[str, list[Check]]:
    """Judge the stored fit of the robot and surface of some measured folders by their turns.

    Parameters
    ----------
    connection : Connection
    folders : sequence of Path
        The new trial, one robot on one surface.
    wanted_deg : sequence of float
    margin_deg : float
    against : Selection, optional
        Trials to fit anew and check; by default the latest stored fit, or else all stored trials, of the same robot and
        surface.

    Returns
    -------
    basis : str
        What was checked, in words.
    checks : list of Check, one for each wanted angle

    Raises
    ------
    LogbookError
        If there is nothing to check against.
    """
    new = [read_measurement(folder) for folder in measured_folders(folders)]
    kinds = {(one.trial.robot.name, one.trial.floor.surface) for one in new}
    if len(kinds) > 1:
        raise FileError("the folders are of different robots or surfaces; check one at a time")
    robot, surface = kinds.pop()
    basis, fit = _stored(connection, robot, surface, against)
    turns, _, _ = usable_turns(new)
    return basis, [check_fit(fit, turns, angle, margin_deg=margin_deg) for angle in wanted_deg]


def _stored(connection: sqlite3.Connection, robot: str, surface: str, against: Selection | None) -> tuple[str, Fit]:
    row = connection.execute(
        "SELECT id, fitted_on, content FROM fit WHERE robot = ? AND surface = ? "
        "ORDER BY fitted_on DESC, id DESC LIMIT 1",
        (robot, surface),
    ).fetchone()
    with tempfile.TemporaryDirectory() as folder:
        if against is None and row is not None:
            path = Path(folder) / FIT_FILE
            path.write_text(row[2], encoding="utf-8")
            return f"fit {row[0]} of {row[1]}", read_fit(path)
        chosen = against or Selection(robots=(robot,), surfaces=(surface,))
        found = trials(connection, chosen)
        if not found:
            raise LogbookError(f"nothing in the logbook to check against ({chosen}); add a fit or trials first")
        ids = [one.id for one in found]
        measured: list[Measurement] = [read_measurement(one) for one in write_trials(connection, ids, Path(folder))]
        return f"a fit of {len(ids)} stored trials ({chosen})", fit_measurements(measured).fit


def check_sentences(basis: str, checks: Sequence[Check]) -> list[str]:
    """Return in plain sentences what the checks say and what to command now."""
    said = [f"Checked: {basis}."]
    for one in checks:
        said.append(f"{one.wanted_deg:+g} degrees: {one.verdict}; {one.reason}.")
        if one.verdict == VALID:
            said.append(f"  Keep {one.old_wheel_deg:+.1f} wheel degrees.")
            continue
        why = "the new turns outweigh the old" if one.verdict == DRIFTED else "old and new turns weighed together"
        said.append(
            f"  Command {one.now_wheel_deg:+.1f} wheel degrees now (u {one.u_now_wheel_deg:.1f}; before "
            f"{one.old_wheel_deg:+.1f}); {why}: the {one.n_turns} new ones count {one.weight:.0%}."
        )
    return said
