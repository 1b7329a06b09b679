"""Writing a trial file with comments: the questions, and the text made of their answers."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from floorswing.commands_file import MOST_WHEEL_DEG
from floorswing.trial import DEFAULT_AFT, DEFAULT_CARDS, DEFAULT_DICTIONARY, DEFAULT_FORE, MOST_MM

Answer = str | float | tuple[float, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class Question:
    """One thing a trial file needs.

    Parameters
    ----------
    table, key : str
        Where the answer goes.
    explain : str
        What it is, in a line; also the comment in the file.
    convert : callable
        From what was typed to the answer; raises ValueError with what is accepted.
    optional : bool
        Whether it may be left out.
    example : str
        An answer, for the comment of a key left out.
    """

    table: str
    key: str
    explain: str
    convert: Callable[[str], Answer]
    example: str
    optional: bool = False

    @property
    def option(self) -> str:
        """Name of the command-line option."""
        name = f"{self.table}-{self.key}" if self.key == "name" else self.key
        return "--" + name.replace("_", "-")

    @property
    def parameter(self) -> str:
        """Name of the option as a Python parameter."""
        return self.option.removeprefix("--").replace("-", "_")


def text(typed: str) -> str:
    """Return a text for one line of the file."""
    if not typed.strip() or not typed.isprintable():
        raise ValueError("accepted: a text on one line, not blank")
    return typed.strip()


def length_mm(typed: str) -> float:
    """Return a length; a decimal comma and a trailing `mm` are read."""
    number = _number(typed.strip().removesuffix("mm"))
    if not 0 < number <= MOST_MM:
        raise ValueError(f"accepted: a number above 0 and up to {MOST_MM:g} (mm)")
    return number


def wheel_degrees(typed: str) -> tuple[float, ...]:
    """Return a list of commands, separated by spaces, commas or semicolons."""
    words = typed.replace("[", " ").replace("]", " ").replace(",", " ").replace(";", " ").split()
    numbers = tuple(_number(word) for word in words)
    if not numbers or not all(0 < abs(number) <= MOST_WHEEL_DEG for number in numbers):
        raise ValueError(
            f"accepted: numbers other than 0, from {-MOST_WHEEL_DEG:g} to {MOST_WHEEL_DEG:g}, "
            "with spaces between them, such as 190 190 -190 -190"
        )
    return numbers


def _number(typed: str) -> float:
    """Return a finite number, or NaN for what is none."""
    try:
        number = float(typed.strip().replace(",", "."))
    except ValueError:
        return math.nan
    return number if math.isfinite(number) and "_" not in typed else math.nan


QUESTIONS = (
    Question(
        table="robot", key="name", explain="what you call the robot", convert=text, example='"shuttle 2"'
    ),
    Question(
        table="robot",
        key="wheel_diameter_mm",
        explain="driven wheel over the tread, measured with calipers",
        convert=length_mm,
        example="64.0",
    ),
    Question(
        table="robot",
        key="inner_track_mm",
        explain="between the inner edges of the two tyres",
        convert=length_mm,
        example="118.0",
        optional=True,
    ),
    Question(
        table="robot",
        key="tyre_width_mm",
        explain="width of a tyre where it can touch the floor",
        convert=length_mm,
        example="20.0",
        optional=True,
    ),
    Question(
        table="robot",
        key="marker_side_mm",
        explain="outer edge of the black square of the robot's markers, as printed",
        convert=length_mm,
        example="40.0",
    ),
    Question(
        table="floor",
        key="surface",
        explain="what the robot turns on",
        convert=text,
        example='"cork tile"',
    ),
    Question(
        table="floor",
        key="card_side_mm",
        explain="outer edge of the black square of the floor cards; none needed with a fixed camera",
        convert=length_mm,
        example="60.0",
        optional=True,
    ),
    Question(
        table="commands",
        key="wheel_deg",
        explain="wheel degrees in the order driven; positive turns the robot counter-clockwise from above",
        convert=wheel_degrees,
        example="[190, 190, -190, -190]",
    ),
)

MARKERS = (
    (f'# dictionary = "{DEFAULT_DICTIONARY}"', "one of OpenCV's predefined dictionaries"),
    (f"# fore = {DEFAULT_FORE}", "id of the marker towards the front"),
    (f"# aft = {DEFAULT_AFT}", "id of the marker towards the rear"),
    (f"# cards = [{DEFAULT_CARDS[0]}, {DEFAULT_CARDS[1]}]", "first and last id of the floor cards"),
)
"""A table that can be left out: what is in it by default, and what that is."""

CAMERA = (("# line_delay_us = 28.0", "microseconds from one row of a picture to the next; 0 for a global shutter"),)
"""Another one: an example, and what it is."""

SPARE_TABLES = {
    "markers": ("# Only needed for prints other than those of `floorswing sheets`.", MARKERS),
    "camera": ("# Only needed where the camera's rolling shutter is known; else it is found from the clip.", CAMERA),
}


def trial_text(answers: Mapping[tuple[str, str], Answer | None]) -> str:
    """Return the text of a trial file with comments.

    Parameters
    ----------
    answers : mapping of (table, key) to answer
        None, or no entry, for a key left out; it is then there as a comment with an example.
    """
    blocks = ["# A trial for Floorswing: lengths in mm, angles in degrees. Edit it as you like.\n"]
    for table in ("robot", "markers", "floor", "camera", "commands"):
        if table in SPARE_TABLES:
            when, settings = SPARE_TABLES[table]
            lines = [f"[{table}]", when, *(f"{setting:<32}# {words}" for setting, words in settings)]
            blocks.append("\n".join(lines) + "\n")
            continue
        lines = [_line(question, answers) for question in QUESTIONS if question.table == table]
        blocks.append("\n".join([f"[{table}]", *lines]) + "\n")
    return "\n".join(blocks)


def _line(question: Question, answers: Mapping[tuple[str, str], Answer | None]) -> str:
    answer = answers.get((question.table, question.key))
    if answer is None:
        setting = f"# {question.key} = {question.example}"
    else:
        setting = f"{question.key} = {as_toml(answer)}"
    optional = " (optional)" if question.optional else ""
    if len(setting) > 40:
        return f"# {question.explain}{optional}\n{setting}"
    return f"{setting:<31} # {question.explain}{optional}"


def as_toml(answer: Answer) -> str:
    """Return an answer as a TOML value."""
    if isinstance(answer, str):
        return json.dumps(answer, ensure_ascii=False)
    if isinstance(answer, tuple):
        return f"[{', '.join(f'{number:.15g}' for number in answer)}]"
    return repr(answer)
