"""The files of one measured clip: ``turns.csv``, ``events.csv``, ``heading.csv``, ``measurement.json``.

What is written here is read back here, so a table and its reader cannot drift apart. Numbers that could not
be found are empty fields in a table and null in JSON.
"""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import asdict, is_dataclass, replace
from pathlib import Path
from typing import Any, NoReturn, TypeVar

import numpy as np

from floorswing.clip_names import place_of
from floorswing.columns import EVENT_COLUMNS, HEADING_COLUMNS, HEADING_DECIMALS, TURN_COLUMNS, TURN_DECIMALS
from floorswing.errors import FileError, one_line, why
from floorswing.records import ClipSource, MeasuredTurn, Measurement
from floorswing.trial import trial_from_dict
from floorswing.writing import write_folder, write_whole
from vision.records import ClipInfo, Contribution, Event, PoseTrack

__all__ = [
    "heading_csv",
    "measurement_json",
    "plain",
    "read_events",
    "read_heading",
    "read_json",
    "read_measurement",
    "read_turns",
    "turns_csv",
    "write_measurement",
    "write_whole",
]

TURNS_FILE = "turns.csv"
EVENTS_FILE = "events.csv"
HEADING_FILE = "heading.csv"
MEASUREMENT_FILE = "measurement.json"
KIND = "floorswing measurement"
FORMAT = 1


def write_measurement(measurement: Measurement, out: Path | str) -> Measurement:
    """Write the four files of a clip into ``out/<name>/``, all together.

    Returns
    -------
    Measurement
        The same, with its folder.

    Raises
    ------
    FileError
        If they cannot be written; nothing is left half-written.
    """
    if measurement.track is None:
        raise ValueError("a measurement read back without its track cannot be written")
    contents = {
        TURNS_FILE: turns_csv(measurement.turns),
        EVENTS_FILE: events_csv(measurement.events),
        HEADING_FILE: heading_csv(measurement.track),
        MEASUREMENT_FILE: measurement_json(measurement),
    }
    return replace(measurement, folder=write_folder(Path(out), measurement.name, contents, mark=MEASUREMENT_FILE))


def read_measurement(folder: Path | str, *, with_track: bool = False) -> Measurement:
    """Read back what `write_measurement` wrote.

    Parameters
    ----------
    folder : path-like
        The folder of one clip.
    with_track : bool
        Whether to read the pose of every frame too, which takes longest.

    Raises
    ------
    FileError
        If the folder or a file of it is missing or does not hold what it should.
    """
    folder = Path(folder)
    if not folder.is_dir():
        raise FileError(f"{folder}: {'is not a folder' if folder.exists() else 'no such folder'}; {_EXPECTED}")
    path = folder / MEASUREMENT_FILE
    document = read_json(path, KIND, "floorswing measure")
    turns = read_turns(folder)
    events = read_events(folder)
    track = read_heading(folder) if with_track else None
    try:
        return Measurement(
            name=document["name"],
            folder=folder,
            source=_source_of(document["clip"]),
            trial=trial_from_dict(document["trial"]),
            turns=turns,
            events=events,
            track=track,
            plane=document["plane"],
            budget=tuple(_contribution(line) for line in document["budget"]),
            settings=document["settings"],
            versions=document["versions"],
            warnings=tuple(document["warnings"]),
        )
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise FileError(f"{path}: does not hold what `floorswing measure` writes ({error!r}); {_AGAIN}") from error


_EXPECTED = "expected a folder that `floorswing measure` wrote for a clip"
_AGAIN = "measure the clip again"


def _source_of(clip: Mapping[str, Any]) -> ClipSource:
    return ClipSource(path=place_of(clip["path"]), sha256=str(clip["sha256"]), info=ClipInfo(**clip["info"]))


def _contribution(line: Mapping[str, Any]) -> Contribution:
    """Return a budget line; JSON has no infinity, so no degrees of freedom means infinitely many."""
    absent = {"u_deg": math.nan, "degrees_of_freedom": math.inf}
    values: dict[str, Any] = {key: absent.get(key) if value is None else value for key, value in line.items()}
    return Contribution(**values)


def measurement_json(measurement: Measurement) -> str:
    """Return the text of ``measurement.json``."""
    document = {
        "kind": KIND,
        "format": FORMAT,
        "name": measurement.name,
        "clip": measurement.source,
        "trial": measurement.trial.as_dict(),
        "settings": measurement.settings,
        "versions": measurement.versions,
        "turns": len(measurement.turns),
        "plane": measurement.plane,
        "budget": measurement.budget,
        "warnings": measurement.warnings,
    }
    return json.dumps(plain(document), indent=2, allow_nan=False, ensure_ascii=False) + "\n"


def plain(value: object) -> Any:
    """Return `value` as what JSON can hold: records as objects, arrays as lists, NaN and infinity as null."""
    if is_dataclass(value) and not isinstance(value, type):
        return plain(asdict(value))
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, list | tuple | set | frozenset):
        return [plain(item) for item in value]
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, bool | int):
        return value
    return str(value).encode("utf-8", "replace").decode("utf-8")  # a file's name may be no text


def read_json(path: Path, kind: str, command: str) -> dict[str, Any]:
    """Read one of our JSON files.

    Parameters
    ----------
    path : Path
        The file.
    kind : str
        What its key ``kind`` must say.
    command : str
        The command that writes such files, for the message.

    Raises
    ------
    FileError
        If it is missing, not JSON, or of another kind.
    """
    try:
        document = json.loads(_text_of(path))
    except (ValueError, RecursionError) as error:
        raise FileError(f"{path}: not JSON ({one_line(error)}); write it again with `{command}`") from None
    if not isinstance(document, dict) or document.get("kind") != kind:
        raise FileError(f'{path}: not a file that `{command}` writes; its key kind is not "{kind}"')
    if document.get("format") != FORMAT:
        raise FileError(f"{path}: format {document.get('format')!r} where {FORMAT} is read; use `{command}` again")
    return document


def turns_csv(turns: Iterable[MeasuredTurn]) -> str:
    """Return the text of ``turns.csv``; factors follow the fixed columns in the order they first appear."""
    turns = tuple(turns)
    factors = tuple(dict.fromkeys(name for turn in turns for name in turn.factors))
    rows = []
    for turn in turns:
        cells = [_cell(getattr(turn, name), decimals) for name, decimals in TURN_DECIMALS.items()]
        rows.append([*cells, *(turn.factors.get(name, "") for name in factors)])
    return _csv((*TURN_COLUMNS, *factors), rows)


def events_csv(events: Iterable[Event]) -> str:
    """Return the text of ``events.csv``."""
    return _csv(EVENT_COLUMNS, [[_cell(e.start_s, 5), _cell(e.end_s, 5), e.kind, e.detail] for e in events])


def heading_csv(track: PoseTrack) -> str:
    """Return the text of ``heading.csv``."""
    columns = [[_cell(value, n) for value in getattr(track, name).tolist()] for name, n in HEADING_DECIMALS.items()]
    return _csv(HEADING_COLUMNS, zip(*columns, track.state, strict=True))


def _cell(value: object, decimals: int | None) -> str:
    """Return one field: fixed decimals, or the shortest text that reads back as the same number."""
    if isinstance(value, tuple):
        return ";".join(value)
    if isinstance(value, int) and decimals is None:
        return str(value)
    number = float(value)  # type: ignore[arg-type]
    if not math.isfinite(number):
        return ""
    if decimals is None:
        return repr(number).removesuffix(".0")
    text = f"{number:.{decimals}f}"
    return text.lstrip("-") if float(text) == 0 else text


def _csv(header: Iterable[str], rows: Iterable[Iterable[str]]) -> str:
    buffer = io.StringIO(newline="")
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(list(header))
    writer.writerows(list(row) for row in rows)
    return buffer.getvalue()


T = TypeVar("T")


class _Table:
    """A CSV file of ours, row by row, with the place of the field being read for the messages."""

    def __init__(self, path: Path, columns: tuple[str, ...], *, more: bool = False) -> None:
        self.path = path
        reader = csv.reader(io.StringIO(_text_of(path), newline=""), strict=True)
        try:
            lines = [(reader.line_num, row) for row in reader]
        except csv.Error as error:
            self._refuse(reader.line_num, f"not a CSV line ({error})")
        if not lines:
            self._refuse(1, "the file is empty")
        self.header = lines[0][1]
        if tuple(self.header[: len(columns)]) != columns or (len(self.header) > len(columns) and not more):
            missing = [name for name in columns if name not in self.header]
            what = f"the column {missing[0]} is missing" if missing else "the columns are not in their order"
            self._refuse(1, f"{what}; expected {','.join(columns)}{' and factors' if more else ''}")
        self.rows = lines[1:]
        for line, row in self.rows:
            if len(row) != len(self.header):
                self._refuse(line, f"{len(row)} fields where the header has {len(self.header)}")

    def _refuse(self, line: int, what: str) -> NoReturn:
        raise FileError(f"{self.path}: line {line}: {what}; {_AGAIN}, or put the line right")

    def records(self) -> Iterable[tuple[int, dict[str, str]]]:
        """Yield the line number and the fields by name."""
        for line, row in self.rows:
            yield line, dict(zip(self.header, row, strict=True))

    def number(self, line: int, fields: Mapping[str, str], name: str) -> float:
        """Return a field as a number, NaN if it is empty."""
        if not fields[name]:
            return math.nan
        number = self._converted(line, fields, name, float, "a number")
        if not math.isfinite(number):
            self._refuse(line, f"{name} is {fields[name]!r}, expected a finite number or nothing")
        return number

    def count(self, line: int, fields: Mapping[str, str], name: str) -> int:
        """Return a field as a whole number from 1."""
        number = self._converted(line, fields, name, int, "a whole number")
        if number < 1:
            self._refuse(line, f"{name} is {number}, expected a whole number from 1")
        return number

    def _converted(
        self, line: int, fields: Mapping[str, str], name: str, convert: Callable[[str], T], expected: str
    ) -> T:
        try:
            return convert(fields[name])
        except ValueError:
            self._refuse(line, f"{name} is {fields[name]!r}, expected {expected}")


def _text_of(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; {_EXPECTED}") from None
    except UnicodeDecodeError:
        raise FileError(f"{path}: not UTF-8 text; {_AGAIN}") from None
    except (OSError, ValueError) as error:
        raise FileError(f"{path}: cannot be read ({why(error)})") from None


def _file_in(path: Path | str, name: str) -> Path:
    path = Path(path)
    return path / name if path.is_dir() else path


def read_turns(path: Path | str) -> tuple[MeasuredTurn, ...]:
    """Read ``turns.csv``.

    Parameters
    ----------
    path : path-like
        The file, or the folder of a clip.

    Raises
    ------
    FileError
        If it is missing or a line of it cannot be used; names file, line and column.
    """
    table = _Table(_file_in(path, TURNS_FILE), TURN_COLUMNS, more=True)
    factors = table.header[len(TURN_COLUMNS) :]
    numbers = [name for name in TURN_COLUMNS if name not in ("turn", "flags")]
    return tuple(
        MeasuredTurn(
            turn=table.count(line, fields, "turn"),
            flags=tuple(flag for flag in fields["flags"].split(";") if flag),
            factors={name: fields[name] for name in factors},
            **{name: table.number(line, fields, name) for name in numbers},
        )
        for line, fields in table.records()
    )


def read_events(path: Path | str) -> tuple[Event, ...]:
    """Read ``events.csv``; the same rules as `read_turns`."""
    table = _Table(_file_in(path, EVENTS_FILE), EVENT_COLUMNS)
    return tuple(
        Event(
            start_s=table.number(line, fields, "start_s"),
            end_s=table.number(line, fields, "end_s"),
            kind=fields["kind"],
            detail=fields["detail"],
        )
        for line, fields in table.records()
    )


def read_heading(path: Path | str) -> PoseTrack:
    """Read ``heading.csv``; the same rules as `read_turns`."""
    table = _Table(_file_in(path, HEADING_FILE), HEADING_COLUMNS)
    records = list(table.records())
    columns = {
        name: np.array([table.number(line, fields, name) for line, fields in records]) for name in HEADING_DECIMALS
    }
    return PoseTrack(state=tuple(fields["state"] for _, fields in records), **columns)
