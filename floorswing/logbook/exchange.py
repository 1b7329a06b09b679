"""Everything in a logbook as a folder of open files, and back without loss.

``trials.csv`` lists the trials, ``trials/<digest>/`` holds the files of each, ``fits.csv`` and ``fits/<digest>.json``
the fits. What is computed from them is computed again when they are taken in.
"""

from __future__ import annotations

import csv
import io
import sqlite3
from collections.abc import Iterable, Sequence
from pathlib import Path

from floorswing.errors import FileError, one_line
from floorswing.files import MEASUREMENT_FILE, read_measurement
from floorswing.fitting import read_fit
from floorswing.logbook.store import TEXTS, add_fit_text, add_trial, digest_of, texts_of
from floorswing.writing import write_folder, write_whole

TRIALS, FITS = "trials.csv", "fits.csv"
TRIAL_COLUMNS = ("digest", "name", "robot", "surface", "filmed_on", "added_at", "note")
FIT_COLUMNS = ("digest", "robot", "surface", "fitted_on", "added_at")


def save(connection: sqlite3.Connection, out: Path) -> tuple[int, int]:
    """Write everything into `out`; return how many trials and fits.

    Raises
    ------
    FileError
        If something cannot be written.
    """
    rows = connection.execute(f"SELECT id, {', '.join(TRIAL_COLUMNS)} FROM trial ORDER BY id").fetchall()
    for number, digest, *_ in rows:
        write_folder(out / "trials", digest, texts_of(connection, number), mark=MEASUREMENT_FILE)
    fits = connection.execute(f"SELECT content, {', '.join(FIT_COLUMNS)} FROM fit ORDER BY id").fetchall()
    (out / "fits").mkdir(parents=True, exist_ok=True)
    for content, digest, *_ in fits:
        write_whole(out / "fits" / f"{digest}.json", content)
    # The lists come last: what they name is there.
    write_whole(out / FITS, _table(FIT_COLUMNS, [row[1:] for row in fits]))
    write_whole(out / TRIALS, _table(TRIAL_COLUMNS, [row[1:] for row in rows]))
    return len(rows), len(fits)


def load(connection: sqlite3.Connection, folder: Path) -> tuple[int, int]:
    """Take in what `save` wrote; return how many trials and fits were new.

    Raises
    ------
    FileError
        If a file is missing or is not what the list says.
    """
    n_trials = n_fits = 0
    for row in _rows(folder / TRIALS, TRIAL_COLUMNS):
        place = folder / "trials" / _digest(row["digest"], folder / TRIALS)
        measurement = read_measurement(place)
        texts = {name: (place / name).read_text(encoding="utf-8") for name in TEXTS}
        _check(digest_of(texts), row["digest"], place)
        n_trials += add_trial(
            connection,
            measurement,
            texts,
            filmed_on=row["filmed_on"],
            note=row["note"],
            added_at=row["added_at"],
        )
    for row in _rows(folder / FITS, FIT_COLUMNS):
        place = folder / "fits" / f"{_digest(row['digest'], folder / FITS)}.json"
        read_fit(place)
        content = place.read_text(encoding="utf-8")
        _check(digest_of({"fit.json": content}), row["digest"], place)
        n_fits += add_fit_text(connection, content, fitted_on=row["fitted_on"], added_at=row["added_at"])
    return n_trials, n_fits


def _table(columns: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    buffer = io.StringIO(newline="")
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(rows)
    return buffer.getvalue()


def _rows(path: Path, columns: Sequence[str]) -> list[dict[str, str]]:
    try:
        with path.open(encoding="utf-8", newline="") as file:
            reader = csv.DictReader(file, strict=True)
            rows = list(reader)
    except FileNotFoundError:
        raise FileError(f"{path}: no such file; give a folder that `floorswing logbook save` wrote") from None
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise FileError(f"{path}: cannot be read ({one_line(error)})") from None
    if tuple(reader.fieldnames or ()) != tuple(columns) or any(None in (*row, *row.values()) for row in rows):
        raise FileError(f"{path}: its columns are not {', '.join(columns)}; save again")
    return rows


def _digest(text: str, path: Path) -> str:
    if len(text) != 64 or not set(text) <= set("0123456789abcdef"):
        raise FileError(f"{path}: digest {text[:70]!r}; accepted: 64 hexadecimal digits")
    return text


def _check(found: str, listed: str, place: Path) -> None:
    if found != listed:
        raise FileError(f"{place}: is not what was saved (its digest differs); save again")
