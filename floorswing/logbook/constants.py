"""Constants for the robot's program: commands per angle and direction as CSV, JSON, C header and Python module."""

from __future__ import annotations

import csv
import io
import json
import math
import re
import sqlite3
import tempfile
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path

from calib.command import command_for, tells_reversal
from calib.errors import CalibError
from floorswing.files import read_measurement
from floorswing.fitting import fit_measurements
from floorswing.logbook.selection import LoggedTrial, Selection, some_trials
from floorswing.logbook.store import write_trials
from floorswing.writing import write_whole

FILES = ("commands.csv", "commands.json", "floorswing_commands.h", "floorswing_commands.py")


@dataclass(frozen=True, kw_only=True, slots=True)
class Constant:
    """What to command for one angle on one surface with one robot.

    Parameters
    ----------
    robot, surface : str
    wanted_deg : float
    start : str
        ``same way`` or ``reversed``.
    wheel_deg, u_wheel_deg, low_wheel_deg, high_wheel_deg : float
        The limits are None where the turns set none.
    single_turn_low_deg, single_turn_high_deg : float
        Band in which 95 % of single turns land.
    extrapolated : bool
    n_turns : int
    first_day, last_day : str
    trial_ids : tuple of int
    """

    robot: str
    surface: str
    wanted_deg: float
    start: str
    wheel_deg: float
    u_wheel_deg: float
    low_wheel_deg: float | None
    high_wheel_deg: float | None
    single_turn_low_deg: float
    single_turn_high_deg: float
    extrapolated: bool
    n_turns: int
    first_day: str
    last_day: str
    trial_ids: tuple[int, ...]


def constants(
    connection: sqlite3.Connection, chosen: Selection, wanted_deg: Sequence[float]
) -> tuple[list[Constant], list[str]]:
    """Return the commands for each robot and surface of a selection, each fitted anew over its trials.

    Returns
    -------
    constants : list of Constant
    problems : list of str
        What could not be given, a sentence each.
    """
    kinds: dict[tuple[str, str], list[LoggedTrial]] = {}
    for one in some_trials(connection, chosen):
        kinds.setdefault((one.robot, one.surface), []).append(one)
    found: list[Constant] = []
    problems: list[str] = []
    for (robot, surface), trials in kinds.items():
        try:
            found.extend(_of_kind(connection, robot, surface, trials, wanted_deg))
        except CalibError as error:
            problems.append(f"{robot} on {surface}: left out, {error}")
    return found, problems


def _of_kind(
    connection: sqlite3.Connection, robot: str, surface: str, trials: list[LoggedTrial], wanted_deg: Sequence[float]
) -> list[Constant]:
    with tempfile.TemporaryDirectory() as folder:
        places = write_trials(connection, [one.id for one in trials], Path(folder))
        fit = fit_measurements([read_measurement(place) for place in places]).fit
    found = []
    for wanted in wanted_deg:
        if math.copysign(1.0, wanted) not in fit.sides:
            continue
        for reversed_ in (False, True) if tells_reversal(fit) else (False,):
            one = command_for(fit, wanted, after_reversal=reversed_)
            wheel = one.wheel_deg
            found.append(
                Constant(
                    robot=robot,
                    surface=surface,
                    wanted_deg=wanted,
                    start="reversed" if reversed_ else "same way",
                    wheel_deg=wheel.value,
                    u_wheel_deg=wheel.u,
                    low_wheel_deg=wheel.low if math.isfinite(wheel.low) else None,
                    high_wheel_deg=wheel.high if math.isfinite(wheel.high) else None,
                    single_turn_low_deg=one.low_deg,
                    single_turn_high_deg=one.high_deg,
                    extrapolated=one.extrapolated,
                    n_turns=fit.n_turns,
                    first_day=trials[0].filmed_on,
                    last_day=trials[-1].filmed_on,
                    trial_ids=tuple(trial.id for trial in trials),
                )
            )
    return found


def write_constants(found: Sequence[Constant], out: Path) -> list[Path]:
    """Write the four files into `out`, each whole or not at all."""
    out.mkdir(parents=True, exist_ok=True)
    texts = (as_csv(found), as_json(found), *(_rendered(name, found) for name in ("commands.h.j2", "commands.py.j2")))
    return [write_whole(out / name, text) for name, text in zip(FILES, texts, strict=True)]


def as_json(found: Sequence[Constant]) -> str:
    """Return the commands as JSON."""
    document = {"kind": "floorswing commands", "format": 1, "commands": [asdict(one) for one in found]}
    return json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def as_csv(found: Sequence[Constant]) -> str:
    """Return the commands as a table."""
    buffer = io.StringIO(newline="")
    names = list(Constant.__dataclass_fields__)
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(names)
    for one in found:
        row = asdict(one) | {"trial_ids": ";".join(map(str, one.trial_ids))}
        writer.writerow(["" if row[name] is None else row[name] for name in names])
    return buffer.getvalue()


def _rendered(template: str, found: Sequence[Constant]) -> str:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("floorswing.logbook", "templates"),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        autoescape=False,
    )
    environment.filters["comment"] = comment
    environment.filters["number"] = repr
    return environment.get_template(template).render(groups=_groups(found))


@dataclass(frozen=True, kw_only=True, slots=True)
class _Group:
    """The commands of one robot on one surface, with a name that a program can use."""

    name: str
    first: Constant
    rows: tuple[Constant, ...]


def _groups(found: Sequence[Constant]) -> list[_Group]:
    kinds: dict[tuple[str, str], list[Constant]] = {}
    for one in found:
        kinds.setdefault((one.robot, one.surface), []).append(one)
    groups, used = [], set()
    for (robot, surface), rows in kinds.items():
        base = name = identifier(f"{robot}_on_{surface}")
        number = 1
        while name in used:
            number += 1
            name = f"{base}_{number}"
        used.add(name)
        groups.append(_Group(name=name, first=rows[0], rows=tuple(rows)))
    return groups


def identifier(text: str) -> str:
    """Return a name that C and Python take, from whatever somebody typed."""
    plain = re.sub(r"[^a-z0-9]+", "_", text.casefold()).strip("_")[:60].strip("_")
    return f"n_{plain}" if not plain or plain[0].isdigit() else plain


def comment(text: str) -> str:
    """Return a text that can stand in a comment: on one line, unable to end it, plain characters only."""
    line = " ".join(text.split()).encode("ascii", "backslashreplace").decode("ascii")
    return line.replace("*/", "* /").replace("/*", "/ *").replace("\\", "|").replace("??", "? ?")[:120]
