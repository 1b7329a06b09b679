"""``floorswing measure``: clips in, tables of turns out."""

from __future__ import annotations

import json
import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import click

from floorswing.cli import EXIT_SOME_FAILED, EXIT_WRONG
from floorswing.errors import one_line
from floorswing.progress import Board

MOST_TABLES = 6
"""More clips than these are reported by a sentence each, without their tables of turns."""


def numbers(ctx: click.Context, param: click.Parameter, value: str | None) -> tuple[int, ...]:
    """Return whole numbers from 1 that were given with commas between them."""
    parts = value.split(",") if value is not None else []
    if not all(re.fullmatch(r" *0*[1-9][0-9]{0,8} *", part) for part in parts):
        raise click.BadParameter(f"{value!r}; accepted: whole numbers from 1 with commas between them, such as 3,7")
    return tuple(sorted({int(part) for part in parts}))


@click.command(short_help="Measure the turns in clips filmed from above.")
@click.argument("clips", nargs=-1, required=True, metavar="CLIP...")
@click.option("--trial", required=True, type=click.Path(path_type=Path), help="Trial file (TOML) of these clips.")
@click.option(
    "--out",
    required=True,
    type=click.Path(path_type=Path),
    help="Folder to write into; each clip gets a folder of its own there.",
)
@click.option("--continued", is_flag=True, help="The commands run on from one clip to the next, in this order.")
@click.option(
    "--from-command",
    type=click.IntRange(min=1),
    default=1,
    metavar="N",
    help="The first turn filmed answers command N (counted from 1) or a later one.",
)
@click.option("--undriven", callback=numbers, metavar="N,N", help="Commands that were never driven.")
@click.option(
    "--stray-turns",
    callback=numbers,
    metavar="N,N",
    help="Turns, as numbered in turns.csv, that answer no command.",
)
@click.option("--again", is_flag=True, help="Measure even what was measured before with nothing changed since.")
@click.option("--sparse", is_flag=True, help="Pass over long still stretches undecoded: faster, a little less is seen.")
@click.option(
    "--workers",
    type=click.IntRange(min=1),
    help="Clips measured side by side, each in a process of its own; by default as many as there are cores.",
)
@click.option(
    "--scheduler",
    metavar="ADDRESS",
    help="Measure on the workers of this Dask scheduler (tcp://host:8786); they open the paths and URLs.",
)
@click.option("--json", "as_json", is_flag=True, help="Print the turns as JSON instead of tables.")
def command(
    clips: tuple[str, ...],
    trial: Path,
    out: Path,
    continued: bool,
    from_command: int,
    undriven: tuple[int, ...],
    stray_turns: tuple[int, ...],
    again: bool,
    sparse: bool,
    workers: int | None,
    scheduler: str | None,
    as_json: bool,
) -> None:
    """Measure the turns in each CLIP and write them to a folder named after it.

    A CLIP is a video file, or a folder of them. The folder written holds turns.csv (one row a turn), events.csv
    (what was not a turn), heading.csv (one row a frame) and measurement.json (settings, estimates, uncertainty
    budget, warnings).

    What the output folder holds already from the same clip, trial, settings and program is kept, so that a batch
    that was stopped goes on where it was. A clip that fails does not stop the others; the exit code is then 1.
    """
    from floorswing.batch import Batch
    from floorswing.matching import Remedies

    if scheduler is not None and workers is not None:
        raise click.UsageError("--workers and --scheduler: give one of them; a scheduler has its own workers")
    remedies = Remedies(from_command=from_command, undriven=undriven or (), stray_turns=stray_turns or ())
    batch = Batch(
        clips,
        trial,
        out,
        continued=continued,
        again=again,
        workers=workers,
        scheduler=scheduler,
        remedies=remedies,
    )
    told = _Told(len(batch.names), as_json)
    with Board(batch.names) as board:
        for outcome in batch.run(board):
            board.finish(outcome.name)
            told.hear(outcome)
    told.sum_up()
    if told.failed:
        all_wrong = not told.measured and all(failure.is_wrong_file for failure in told.failed)
        raise click.exceptions.Exit(EXIT_WRONG if all_wrong else EXIT_SOME_FAILED)


class _Told:
    """What the outcomes are told as: lines while they come, and a table at the end."""

    def __init__(self, n_clips: int, as_json: bool) -> None:
        self._n_clips = n_clips
        self._as_json = as_json
        self.measured: list[Any] = []
        self.failed: list[Any] = []
        self._n_kept = 0

    def hear(self, outcome: Any) -> None:
        """Print what is to be said about one clip."""
        from floorswing.batch import Kept
        from floorswing.clip_job import Failure

        if isinstance(outcome, Failure):
            self.failed.append(outcome)
            click.echo(f"Error: {about(outcome.clip, outcome.error)}", err=True)
            return
        kept = isinstance(outcome, Kept)
        one = outcome.measurement if isinstance(outcome, Kept) else outcome
        self._n_kept += kept
        self.measured.append(replace(one, track=None))  # long clips have long tracks
        self._report(one, kept)

    def _report(self, one: Any, kept: bool) -> None:
        from floorswing.summary import sentence, turns_table

        for warning in one.warnings:
            click.echo(f"Warning: {about(one.source.path, warning)}", err=True)
        if not kept and (one.folder / "fit.json").exists():
            click.echo(f"Warning: {one.folder / 'fit.json'} is of an earlier measurement; fit again", err=True)
        if self._as_json:
            return
        if self._n_clips <= MOST_TABLES:
            click.echo(turns_table(one.turns))
        click.echo(sentence(one))
        if kept:
            click.echo(f"Kept from before in {one.folder}; nothing has changed since (--again measures anew)\n")
        else:
            click.echo(f"Written to {one.folder}\n")

    def sum_up(self) -> None:
        """Print the JSON document, or after several clips a table with the failures first."""
        from floorswing.summary import batch_table

        if self._as_json:
            click.echo(json.dumps([_document(one) for one in self.measured], indent=2, ensure_ascii=False))
        elif self._n_clips > 1:
            failures = [(failure.name, about(failure.clip, failure.error)) for failure in self.failed]
            click.echo(batch_table(failures, self.measured, self._n_kept))


def about(clip: Path | str, message: object) -> str:
    """Return the message on one line, with the clip's whole path in front and its name only once."""
    line = one_line(message)
    for name in (str(clip), str(clip).rpartition("/")[2], Path(clip).name):
        line = line.removeprefix(f"{one_line(name)}: ")
    return f"{one_line(clip)}: {line}"


def _document(one: Any) -> dict[str, Any]:
    from floorswing.files import plain

    document: dict[str, Any] = plain(
        {
            "name": one.name,
            "clip": one.source.path,
            "sha256": one.source.sha256,
            "folder": one.folder,
            "turns": one.turns,
            "events": one.events,
            "warnings": one.warnings,
        }
    )
    return document
