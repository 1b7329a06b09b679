"""``floorswing new``: a trial file from a few questions."""

from __future__ import annotations

import sys
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import click

from floorswing.errors import FileError, FloorswingError
from floorswing.keys import listed
from floorswing.new_trial import QUESTIONS, Answer, Question, trial_text


def _with_questions(function: Callable[..., None]) -> Callable[..., None]:
    """Give a command one option for each question."""
    for question in reversed(QUESTIONS):
        optional = " Optional." if question.optional else ""
        words = f"{question.explain[0].upper()}{question.explain[1:]}.{optional}"
        option = click.option(question.option, question.parameter, default=None, help=words, metavar="VALUE")
        function = option(function)
    return function


@click.command(short_help="Write a trial file, asking for what it needs.")
@click.argument("path", type=click.Path(path_type=Path), default=Path("trial.toml"), metavar="[FILE]")
@_with_questions
@click.option("--overwrite", is_flag=True, help="Replace the file if it exists.")
def command(path: Path, overwrite: bool, **typed: str | None) -> None:
    """Write a trial file to FILE (trial.toml), with a comment on every line.

    In a terminal, what is not given as an option is asked for, with a line on what it is; an empty answer
    leaves out what is optional. Elsewhere everything that is not optional has to be given.
    """
    from floorswing.trial import trial_from_text
    from floorswing.writing import write_whole

    if path.exists() and not overwrite:
        raise FileError(f"{path}: is there already; use --overwrite to replace it, or give another name")
    given = {question: _given(question, typed[question.parameter]) for question in QUESTIONS}
    content = trial_text(_asked(given) if is_conversation() else _complete(given))
    trial = trial_from_text(content, path)
    write_whole(path, content)
    count = len(trial.commands.wheel_deg)
    click.echo(f"Wrote {path}: {trial.robot.name} on {trial.floor.surface}, {count} commands.")


def is_conversation() -> bool:
    """Return whether somebody is there to answer."""
    return sys.stdin is not None and sys.stdin.isatty()


def _given(question: Question, typed: str | None) -> Answer | None:
    """Return the answer given as an option."""
    if typed is None:
        return None
    try:
        return question.convert(typed)
    except ValueError as error:
        raise FloorswingError(f"{question.option}: found {typed!r}; {error}") from None


def _complete(given: Mapping[Question, Answer | None]) -> dict[tuple[str, str], Answer | None]:
    """Return the answers, once none that is needed is missing."""
    missing = [q.option for q, answer in given.items() if answer is None and not q.optional]
    if missing:
        raise FloorswingError(f"{listed(missing)} missing; give them, or run this in a terminal to be asked")
    return {(question.table, question.key): answer for question, answer in given.items()}


def _asked(given: Mapping[Question, Answer | None]) -> dict[tuple[str, str], Answer | None]:
    """Ask for what was not given."""
    return {
        (question.table, question.key): _ask(question) if answer is None else answer
        for question, answer in given.items()
    }


def _ask(question: Question) -> Answer | None:
    """Ask until the answer can be used; nothing leaves out what is optional."""
    optional = " (Enter to leave out)" if question.optional else ""
    click.echo(f"\n{question.explain[0].upper()}{question.explain[1:]}.")
    while True:
        typed: Any = click.prompt(f"{question.key}{optional}", default="", show_default=False)
        if not typed.strip() and question.optional:
            return None
        try:
            return question.convert(typed)
        except ValueError as error:
            click.echo(f"  found {typed!r}; {error}")
