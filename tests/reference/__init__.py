"""Published data, each file with its source in README.md."""

import csv
from pathlib import Path

HERE = Path(__file__).resolve().parent


def columns(name, **where):
    """Return the columns of a data file as lists of text, for rows in which the named columns have these values."""
    with (HERE / name).open(newline="", encoding="utf-8") as file:
        rows = [row for row in csv.DictReader(file) if all(row[key] == value for key, value in where.items())]
    return {key: [row[key] for row in rows] for key in rows[0]}


def numbers(name, **where):
    """Return the same as lists of float, leaving out columns that are not numbers."""
    found = {}
    for key, texts in columns(name, **where).items():
        try:
            found[key] = [float(text) for text in texts]
        except ValueError:
            continue
    return found
