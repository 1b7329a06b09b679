"""The commands of a trial as a table: ``wheel_deg`` and any further columns (factors).

Spreadsheets write such files in several dialects, so a byte order mark, either line ending, and commas,
semicolons or tabs between the fields are all read; with semicolons, a decimal comma too.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import NoReturn

from floorswing.errors import TrialError, why
from floorswing.keys import listed, shown
from floorswing.small_file import read_small_text

COMMAND_COLUMN = "wheel_deg"
MOST_WHEEL_DEG = 36_000.0
"""A hundred revolutions of the wheel: far beyond any turn worth commanding, near enough to catch a slip."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Commands:
    """The commands of a trial, in the order driven.

    Parameters
    ----------
    wheel_deg : tuple of float
        Rotation of each drive wheel, positive for a counter-clockwise turn of the robot.
    factors : tuple of (str, tuple of str)
        Name and values of each further column, one value a command, as written.
    file : str or None
        The file they came from, as the trial file names it.
    """

    wheel_deg: tuple[float, ...]
    factors: tuple[tuple[str, tuple[str, ...]], ...] = ()
    file: str | None = None

    def factors_of(self, index: int) -> dict[str, str]:
        """Return the factors of one command, counted from 0."""
        return {name: values[index] for name, values in self.factors}


def read_commands_file(path: Path, reserved: Sequence[str], file: str) -> Commands:
    """Read a commands file.

    Parameters
    ----------
    path : Path
        Where it is.
    reserved : sequence of str
        Column names that a factor may not have, because ``turns.csv`` uses them.
    file : str
        The name to keep in the result.

    Raises
    ------
    TrialError
        If the file cannot be read or a line of it cannot be used; names the line.
    """
    text = _text_of(path)
    separator = _separator_of(text)
    rows = _rows_of(path, text, separator)
    if not rows:
        raise TrialError(
            path, "", "the file is empty", f"expected a header line with the column {COMMAND_COLUMN}"
        )
    header = _checked_header(path, rows[0], reserved)
    body = rows[1:]
    if not body:
        raise TrialError(path, "", "no commands below the header", "expected one line a command")
    for line, cells in body:
        if len(cells) != len(header):
            _refuse(path, line, f"{len(cells)} fields", f"expected {len(header)}, as in the header")
    columns = {name: [cells[i] for _, cells in body] for i, name in enumerate(header)}
    lines = [line for line, _ in body]
    texts = columns.pop(COMMAND_COLUMN)
    return Commands(
        wheel_deg=tuple(
            _wheel_deg(path, line, text, separator) for line, text in zip(lines, texts, strict=True)
        ),
        factors=tuple((name, tuple(values)) for name, values in columns.items()),
        file=file,
    )


def _refuse(path: Path, line: int, found: str, accepted: str) -> NoReturn:
    raise TrialError(path, f"line {line}", found, accepted)


def _text_of(path: Path) -> str:
    try:
        return read_small_text(path)
    except UnicodeDecodeError:
        raise TrialError(path, "", "not UTF-8 text", "save it as CSV in UTF-8") from None
    except (OSError, ValueError) as error:
        raise TrialError(
            path, "", f"cannot be read ({why(error)})", "check [commands] file in the trial file"
        ) from None


def _separator_of(text: str) -> str:
    """Return the separator that the header line uses."""
    header = text.lstrip().splitlines()[0] if text.strip() else ""
    return max(",;\t", key=header.count)


def _rows_of(path: Path, text: str, separator: str) -> list[tuple[int, list[str]]]:
    """Return the lines that are not blank, with their numbers."""
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator, strict=True)
    rows = []
    try:
        for cells in reader:
            stripped = [cell.strip() for cell in cells]
            if any(stripped):
                rows.append((reader.line_num, stripped))
    except csv.Error as error:
        _refuse(path, reader.line_num, f"not a CSV line ({error})", "expected separated fields")
    return rows


def _checked_header(path: Path, row: tuple[int, list[str]], reserved: Sequence[str]) -> list[str]:
    """Return the column names, once they are known to be usable."""
    line, names = row
    if COMMAND_COLUMN not in names:
        found = listed([shown(name) for name in names])
        _refuse(path, line, f"no column {COMMAND_COLUMN}", f"found the columns {found[:200]}")
    for position, name in enumerate(names, start=1):
        if not name or not name.isprintable():
            _refuse(path, line, f"column {position} has no usable name", "expected a name on one line")
        if name in names[: position - 1]:
            _refuse(path, line, f"two columns are called {shown(name)}", "expected each name once")
        if name in reserved:
            _refuse(
                path, line, f"a column is called {shown(name)}", "turns.csv uses that name; choose another"
            )
    return names


def _wheel_deg(path: Path, line: int, text: str, separator: str) -> float:
    """Return one command as a number."""
    plain = text.replace(",", ".") if separator != "," else text
    try:
        number = math.nan if "_" in plain else float(plain)
    except ValueError:
        number = math.nan
    if not 0 < abs(number) <= MOST_WHEEL_DEG:
        most = f"{MOST_WHEEL_DEG:g}"
        accepted = f"accepted: a number other than 0, from -{most} to {most}"
        _refuse(path, line, f"{COMMAND_COLUMN} is {shown(text)}", accepted)
    return number
