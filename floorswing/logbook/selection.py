"""Which trials a question is about: by robot, surface, date, factor."""

from __future__ import annotations

import datetime
import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass, replace

from floorswing.logbook.store import LogbookError

KEYS = ("robot", "surface", "since", "until")


@dataclass(frozen=True, kw_only=True, slots=True)
class Selection:
    """A selection of trials; None and empty stand for all.

    Parameters
    ----------
    robots, surfaces : tuple of str
    since, until : str or None
        First and last day, as 2026-11-30.
    factors : tuple of (str, str)
        Column of the commands file and a value in it.
    """

    robots: tuple[str, ...] = ()
    surfaces: tuple[str, ...] = ()
    since: str | None = None
    until: str | None = None
    factors: tuple[tuple[str, str], ...] = ()

    def __str__(self) -> str:
        said = [f"robot={one}" for one in self.robots] + [f"surface={one}" for one in self.surfaces]
        said += [f"since={self.since}"] if self.since else []
        said += [f"until={self.until}"] if self.until else []
        said += [f"{name}={value}" for name, value in self.factors]
        return ", ".join(said) or "all trials"


@dataclass(frozen=True, kw_only=True, slots=True)
class LoggedTrial:
    """A trial as the logbook lists it; None where a fit of it alone was not possible."""

    id: int
    name: str
    robot: str
    surface: str
    filmed_on: str
    note: str
    n_turns: int
    n_used: int
    gain: float | None
    u_gain: float | None
    gain_ccw: float | None
    gain_cw: float | None
    lost_deg: float | None
    offset_deg: float | None
    repeatability_deg: float | None
    low_repeatability_deg: float | None
    high_repeatability_deg: float | None


COLUMNS = tuple(LoggedTrial.__dataclass_fields__)


def parsed(parts: Sequence[str]) -> Selection:
    """Read a selection typed as ``key=value`` parts, or as one text with commas.

    Raises
    ------
    LogbookError
        If a part has no value or a date is none.
    """
    chosen = Selection()
    for part in (one.strip() for text in parts for one in text.split(",")):
        key, sign, value = (piece.strip() for piece in part.partition("="))
        if not sign or not key or not value:
            accepted = ", ".join(f"{name}=..." for name in KEYS)
            raise LogbookError(f"selection {part!r}; accepted: {accepted}, or column=value of a commands file")
        if key == "robot":
            chosen = replace(chosen, robots=(*chosen.robots, value))
        elif key == "surface":
            chosen = replace(chosen, surfaces=(*chosen.surfaces, value))
        elif key == "since":
            chosen = replace(chosen, since=day(value))
        elif key == "until":
            chosen = replace(chosen, until=day(value))
        else:
            chosen = replace(chosen, factors=(*chosen.factors, (key, value)))
    return chosen


def day(text: str) -> str:
    """Return a date as the logbook keeps it.

    Raises
    ------
    LogbookError
        If the text is no date.
    """
    try:
        return datetime.date.fromisoformat(text).isoformat()
    except ValueError:
        raise LogbookError(f"date {text!r}; accepted: year-month-day, such as 2026-11-30") from None


def trials(connection: sqlite3.Connection, chosen: Selection) -> list[LoggedTrial]:
    """Return the chosen trials by date."""
    where, values = _where(chosen)
    rows = connection.execute(
        f"SELECT {', '.join(COLUMNS)} FROM trial WHERE {where} ORDER BY filmed_on, id",
        values,
    )
    return [LoggedTrial(**dict(zip(COLUMNS, row, strict=True))) for row in rows]


def some_trials(connection: sqlite3.Connection, chosen: Selection) -> list[LoggedTrial]:
    """Return the chosen trials by date.

    Raises
    ------
    LogbookError
        If there is none; the message says what there is.
    """
    found = trials(connection, chosen)
    if found:
        return found
    robots, surfaces = (
        ", ".join(row[0] for row in connection.execute(f"SELECT DISTINCT {name} FROM trial ORDER BY 1 LIMIT 12"))
        for name in ("robot", "surface")
    )
    raise LogbookError(
        f"no trial matches {chosen}; the logbook has robots: {robots or 'none'}; surfaces: {surfaces or 'none'}"
    )


def _where(chosen: Selection) -> tuple[str, list[str]]:
    parts: list[str] = ["1"]
    values: list[str] = []
    for name, wanted in (("robot", chosen.robots), ("surface", chosen.surfaces)):
        if wanted:
            parts.append(f"{name} IN ({', '.join('?' * len(wanted))})")
            values.extend(wanted)
    if chosen.since:
        parts.append("filmed_on >= ?")
        values.append(chosen.since)
    if chosen.until:
        parts.append("filmed_on <= ?")
        values.append(chosen.until)
    for name, value in chosen.factors:
        parts.append("id IN (SELECT trial FROM factor WHERE name = ? AND value = ?)")
        values.extend((name, value))
    return " AND ".join(parts), values
