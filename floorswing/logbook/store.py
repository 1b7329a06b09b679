"""The logbook's file: what is in it, how it is opened, and how trials and fits get in.

The texts that ``measure`` and ``fit`` wrote are kept whole, byte for byte; what is asked for often is kept beside them
in columns. A trial is known by the digest of its texts, so adding it again changes nothing.
"""

from __future__ import annotations

import contextlib
import datetime
import hashlib
import json
import os
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from calib.errors import CalibError
from calib.fit import Fit
from floorswing.errors import FileError, FloorswingError, one_line
from floorswing.files import EVENTS_FILE, MEASUREMENT_FILE, TURNS_FILE, read_measurement
from floorswing.fitting import FIT_FILE, fit_measurements, read_fit, why_not
from floorswing.records import Measurement
from floorswing.writing import write_folder

VERSION = 1
"""Version of the schema, kept in the file's ``user_version``."""

APPLICATION_ID = 0x466C5377
"""Marks a SQLite file as a logbook (its ``application_id``)."""

BUSY_S = 30.0
"""How long one process waits for another that is adding."""

VARIABLE = "FLOORSWING_LOGBOOK"

TEXTS = (TURNS_FILE, EVENTS_FILE, MEASUREMENT_FILE)

SCHEMA = """
CREATE TABLE trial (
    id INTEGER PRIMARY KEY,
    digest TEXT NOT NULL UNIQUE,
    name TEXT NOT NULL,
    robot TEXT NOT NULL,
    surface TEXT NOT NULL,
    filmed_on TEXT NOT NULL,
    added_at TEXT NOT NULL,
    note TEXT NOT NULL,
    clip_sha256 TEXT NOT NULL,
    n_turns INTEGER NOT NULL,
    n_used INTEGER NOT NULL,
    gain REAL,
    u_gain REAL,
    gain_ccw REAL,
    gain_cw REAL,
    lost_deg REAL,
    offset_deg REAL,
    repeatability_deg REAL,
    low_repeatability_deg REAL,
    high_repeatability_deg REAL
);
CREATE INDEX trial_by_date ON trial (filmed_on, id);
CREATE INDEX trial_by_kind ON trial (robot, surface, filmed_on);
CREATE TABLE text (
    trial INTEGER NOT NULL REFERENCES trial (id) ON DELETE CASCADE,
    file TEXT NOT NULL,
    content TEXT NOT NULL,
    PRIMARY KEY (trial, file)
) WITHOUT ROWID;
CREATE TABLE turn (
    trial INTEGER NOT NULL REFERENCES trial (id) ON DELETE CASCADE,
    turn INTEGER NOT NULL,
    commanded_wheel_deg REAL,
    heading_change_deg REAL,
    u_heading_change_deg REAL,
    counts INTEGER NOT NULL,
    PRIMARY KEY (trial, turn)
) WITHOUT ROWID;
CREATE TABLE factor (
    trial INTEGER NOT NULL REFERENCES trial (id) ON DELETE CASCADE,
    name TEXT NOT NULL,
    value TEXT NOT NULL,
    PRIMARY KEY (trial, name, value)
) WITHOUT ROWID;
CREATE INDEX factor_by_value ON factor (name, value, trial);
CREATE TABLE fit (
    id INTEGER PRIMARY KEY,
    digest TEXT NOT NULL UNIQUE,
    robot TEXT NOT NULL,
    surface TEXT NOT NULL,
    fitted_on TEXT NOT NULL,
    added_at TEXT NOT NULL,
    content TEXT NOT NULL
);
CREATE INDEX fit_by_kind ON fit (robot, surface, fitted_on, id);
"""

MIGRATIONS: dict[int, str] = {}
"""Statements that lead from a version to the next, by the version they start from."""


class LogbookError(FloorswingError):
    """The logbook cannot be used, or what was asked of it is not there."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Added:
    """What became of something added."""

    name: str
    kind: str
    is_new: bool


def default_path() -> Path:
    """Return where the logbook is unless told otherwise: the environment variable, or the user's data folder."""
    given = os.environ.get(VARIABLE)
    if given:
        return Path(given)
    from platformdirs import user_data_path

    return user_data_path("floorswing", appauthor=False) / "logbook.sqlite"


@contextlib.contextmanager
def opened(path: Path | str, *, must_exist: bool = True) -> Iterator[sqlite3.Connection]:
    """Open a logbook, making or migrating it if need be.

    Parameters
    ----------
    path : path-like
    must_exist : bool
        Whether a missing file is an error; otherwise an empty logbook is made.

    Raises
    ------
    LogbookError
        If the file is missing, is no logbook, is damaged, or was made by a newer version.
    """
    path = Path(path)
    if must_exist and not path.exists():
        raise LogbookError(f"{path}: no logbook there; add a measured folder with `floorswing logbook add` first")
    if path.is_dir():
        raise LogbookError(f"{path}: is a folder; give the logbook's file")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        connection = sqlite3.connect(path, timeout=BUSY_S, isolation_level=None)
    except (OSError, sqlite3.Error) as error:
        raise LogbookError(f"{path}: cannot be opened ({one_line(error)})") from None
    try:
        _make_ready(connection, path)
        yield connection
    except sqlite3.DatabaseError as error:
        raise LogbookError(f"{path}: {_damage(error)}") from None
    finally:
        connection.close()


def _damage(error: sqlite3.DatabaseError) -> str:
    text = one_line(error)
    if isinstance(error, sqlite3.OperationalError) and "locked" in text:
        return f"in use by another program for more than {BUSY_S:g} s; try again"
    if isinstance(error, sqlite3.OperationalError) and ("readonly" in text or "unable to open" in text):
        return f"cannot be written ({text}); check its permissions"
    return f"is damaged or is no logbook ({text}); use a copy, or `floorswing logbook load` from saved files"


def _make_ready(connection: sqlite3.Connection, path: Path) -> None:
    connection.execute(f"PRAGMA busy_timeout = {int(1e3 * BUSY_S)}")
    connection.execute("PRAGMA foreign_keys = ON")
    version = _version(connection, path)
    if version > VERSION:
        raise LogbookError(
            f"{path}: made by a newer version (schema {version}, this one reads {VERSION}); update floorswing"
        )
    if version < VERSION:
        _build(connection, path)
    connection.execute("PRAGMA journal_mode = WAL")
    connection.execute("PRAGMA synchronous = FULL")  # what has been said to be added survives a power cut


def _version(connection: sqlite3.Connection, path: Path) -> int:
    mark = connection.execute("PRAGMA application_id").fetchone()[0]
    version = int(connection.execute("PRAGMA user_version").fetchone()[0])
    n_tables = connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]
    if mark != APPLICATION_ID and (n_tables or version):
        raise LogbookError(f"{path}: is an SQLite file, but no logbook; choose another file")
    return version


def _build(connection: sqlite3.Connection, path: Path) -> None:
    """Make the tables of an empty file, or lead an older one up to this version, a copy kept beside it."""
    with _writing(connection):
        version = _version(connection, path)  # another process may have done it meanwhile
        if version == 0:
            _run(connection, SCHEMA)
        elif version < VERSION:
            _keep_copy(path, version)
            for step in range(version, VERSION):
                _run(connection, MIGRATIONS[step])
        connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        connection.execute(f"PRAGMA user_version = {max(version, VERSION)}")


def _keep_copy(path: Path, version: int) -> None:
    """Copy what is committed, however it lies in the file and its log."""
    copy = sqlite3.connect(path.with_name(f"{path.name}.version-{version}"))
    with contextlib.closing(copy), contextlib.closing(sqlite3.connect(path)) as reader:
        reader.backup(copy)


def _run(connection: sqlite3.Connection, statements: str) -> None:
    for statement in statements.split(";"):
        if statement.strip():
            connection.execute(statement)


@contextlib.contextmanager
def _writing(connection: sqlite3.Connection) -> Iterator[None]:
    """Do all or nothing, alone."""
    connection.execute("BEGIN IMMEDIATE")
    try:
        yield
    except BaseException:
        connection.execute("ROLLBACK")
        raise
    connection.execute("COMMIT")


def digest_of(texts: Mapping[str, str]) -> str:
    """Return what a trial or fit is known by: the digest of its texts and their names."""
    total = hashlib.sha256()
    for name in sorted(texts):
        total.update(f"{name}\0{len(texts[name].encode())}\0".encode())
        total.update(texts[name].encode())
    return total.hexdigest()


def add_folder(
    connection: sqlite3.Connection, folder: Path, *, filmed_on: datetime.date | None = None, note: str = ""
) -> Added:
    """Take in the folder of one measured clip.

    Parameters
    ----------
    connection : Connection
    folder : Path
    filmed_on : date, optional
        By default the day on which the folder was written.
    note : str

    Raises
    ------
    FileError
        If the folder does not hold what ``measure`` writes.
    """
    measurement = read_measurement(folder)
    texts = {name: (folder / name).read_text(encoding="utf-8") for name in TEXTS}
    if filmed_on is None:
        filmed_on = datetime.date.fromtimestamp((folder / MEASUREMENT_FILE).stat().st_mtime)
    is_new = add_trial(connection, measurement, texts, filmed_on=filmed_on.isoformat(), note=note, added_at=now())
    return Added(name=measurement.name, kind="trial", is_new=is_new)


def now() -> str:
    """Return the present time as the logbook keeps it."""
    return datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds")


def add_trial(
    connection: sqlite3.Connection,
    measurement: Measurement,
    texts: Mapping[str, str],
    *,
    filmed_on: str,
    note: str,
    added_at: str,
) -> bool:
    """Take in one trial; return whether it was new."""
    digest = digest_of(texts)
    known = "SELECT 1 FROM trial WHERE digest = ?"
    if connection.execute(known, (digest,)).fetchone():
        return False
    row = {
        "digest": digest,
        "name": measurement.name,
        "robot": measurement.trial.robot.name,
        "surface": measurement.trial.floor.surface,
        "filmed_on": filmed_on,
        "added_at": added_at,
        "note": note,
        "clip_sha256": measurement.source.sha256,
        "n_turns": len(measurement.turns),
        **_summary(measurement),
    }
    marks = ", ".join(f":{name}" for name in row)
    with _writing(connection):
        if connection.execute(known, (digest,)).fetchone():
            return False
        made = connection.execute(f"INSERT INTO trial ({', '.join(row)}) VALUES ({marks})", row)
        trial = made.lastrowid
        connection.executemany("INSERT INTO text VALUES (?, ?, ?)", [(trial, *item) for item in texts.items()])
        connection.executemany(
            "INSERT INTO turn VALUES (?, ?, ?, ?, ?, ?)",
            [
                (
                    trial,
                    turn.turn,
                    turn.commanded_wheel_deg,
                    turn.heading_change_deg,
                    turn.u_heading_change_deg,
                    why_not(turn) is None,
                )
                for turn in measurement.turns
            ],
        )
        factors = {(trial, name, value) for turn in measurement.turns for name, value in turn.factors.items()}
        connection.executemany("INSERT INTO factor VALUES (?, ?, ?)", sorted(factors))
    return True


def _summary(measurement: Measurement) -> dict[str, float | int | None]:
    """Return what a fit of the trial by itself says, as far as it allows one."""
    names = ("gain", "u_gain", "gain_ccw", "gain_cw", "lost_deg", "offset_deg", "repeatability_deg")
    blank: dict[str, float | int | None] = dict.fromkeys((*names, "low_repeatability_deg", "high_repeatability_deg"))
    blank["n_used"] = 0
    try:
        fit = fit_measurements([measurement]).fit
    except CalibError:
        return blank
    spread, gain = fit.repeatability_deg(), fit.gain()
    return {
        "n_used": fit.n_turns,
        "gain": gain.value,
        "u_gain": gain.u,
        "gain_ccw": _gain(fit, 1.0),
        "gain_cw": _gain(fit, -1.0),
        "lost_deg": float(fit.lost_row() @ fit.coefficients),
        "offset_deg": float(fit.coefficients[-1]) if fit.model.offset else 0.0,
        "repeatability_deg": spread.value,
        "low_repeatability_deg": spread.low,
        "high_repeatability_deg": spread.high,
    }


def _gain(fit: Fit, side: float) -> float | None:
    return fit.gain(side).value if side in fit.sides else None


def add_fit(connection: sqlite3.Connection, path: Path) -> Added:
    """Take in a ``fit.json``.

    Raises
    ------
    FileError
        If the file does not hold a fit.
    """
    read_fit(path)
    content = path.read_text(encoding="utf-8")
    fitted_on = datetime.date.fromtimestamp(path.stat().st_mtime).isoformat()
    return Added(
        name=str(path), kind="fit", is_new=add_fit_text(connection, content, fitted_on=fitted_on, added_at=now())
    )


def add_fit_text(connection: sqlite3.Connection, content: str, *, fitted_on: str, added_at: str) -> bool:
    """Take in the text of a ``fit.json`` that was read before; return whether it was new."""
    document = json.loads(content)
    row = (digest_of({FIT_FILE: content}), document["robot"]["name"], document["surface"], fitted_on, added_at, content)
    with _writing(connection):
        made = connection.execute(
            "INSERT INTO fit (digest, robot, surface, fitted_on, added_at, content) VALUES (?, ?, ?, ?, ?, ?) "
            "ON CONFLICT (digest) DO NOTHING",
            row,
        )
        return made.rowcount == 1


def add(
    path: Path | str,
    folders: Sequence[Path | str],
    *,
    filmed_on: datetime.date | None = None,
    note: str = "",
) -> list[Added]:
    """Take measured folders, and the fits found beside them, into the logbook at `path`.

    Raises
    ------
    FileError
        If a folder holds nothing that ``measure`` or ``fit`` wrote.
    LogbookError
        If the logbook cannot be used.
    """
    clips, fits = found_in([Path(folder) for folder in folders])
    with opened(path, must_exist=False) as connection:
        added = [add_folder(connection, clip, filmed_on=filmed_on, note=note) for clip in clips]
        return [*added, *(add_fit(connection, fit) for fit in fits)]


def found_in(folders: Sequence[Path]) -> tuple[list[Path], list[Path]]:
    """Return the folders of measured clips and the fits in or below what was named."""
    clips: dict[Path, None] = {}
    fits: dict[Path, None] = {}
    for folder in folders:
        if folder.is_file() and folder.name.endswith(".json"):
            fits[folder] = None
            continue
        if not folder.is_dir():
            raise FileError(f"{folder}: no such folder; give one that `floorswing measure` wrote, or a fit.json")
        places = [folder, *sorted(one for one in folder.iterdir() if one.is_dir() and not one.name.startswith("."))]
        inside = [one for one in places if (one / MEASUREMENT_FILE).is_file()]
        beside = [one / FIT_FILE for one in places if (one / FIT_FILE).is_file()]
        if not inside and not beside:
            raise FileError(f"{folder}: no measured clip or fit in it; give a folder that `floorswing measure` wrote")
        clips |= dict.fromkeys(inside)
        fits |= dict.fromkeys(beside)
    return list(clips), list(fits)


def texts_of(connection: sqlite3.Connection, trial: int) -> dict[str, str]:
    """Return the files of a trial as they were taken in."""
    return dict(connection.execute("SELECT file, content FROM text WHERE trial = ? ORDER BY file", (trial,)))


def write_trials(connection: sqlite3.Connection, trials: Sequence[int], out: Path) -> list[Path]:
    """Write the folders of some trials again, one below `out` for each, named by its number and name."""
    names = [f"{trial}-{_name(connection, trial)}" for trial in trials]
    return [
        write_folder(out, name, texts_of(connection, trial), mark=MEASUREMENT_FILE)
        for trial, name in zip(trials, names, strict=True)
    ]


def _name(connection: sqlite3.Connection, trial: int) -> str:
    return str(connection.execute("SELECT name FROM trial WHERE id = ?", (trial,)).fetchone()[0])
