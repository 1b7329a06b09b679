"""``floorswing measure``: clips in, tables of turns out."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import click

from floorswing.cli import EXIT_SOME_FAILED, EXIT_WRONG
from floorswing.errors import one_line
from floorswing.progress import Bars


@click.command(short_help="Measure the turns in clips filmed from above.")
@click.argument("clips", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="CLIP...")
@click.option("--trial", required=True, type=click.Path(path_type=Path), help="Trial file (TOML) of these clips.")
@click.option(
    "--out",
    required=True,
    type=click.Path(path_type=Path),
    help="Folder to write into; each clip gets a folder of its own there.",
)
@click.option("--continued", is_flag=True, help="The commands run on from one clip to the next, in this order.")
@click.option("--json", "as_json", is_flag=True, help="Print the turns as JSON instead of tables.")
def command(clips: tuple[Path, ...], trial: Path, out: Path, continued: bool, as_json: bool) -> None:
    """Measure the turns in each CLIP and write them to a folder named after it.

    The folder holds turns.csv (one row a turn), events.csv (what was not a turn), heading.csv (one row a
    frame) and measurement.json (settings, estimates, uncertainty budget, warnings).
    """
    from floorswing.measuring import Failure, measure_each
    from floorswing.records import Measurement

    measured: list[Measurement] = []
    failed: list[Failure] = []
    with Bars() as progress:
        for outcome in measure_each(clips, trial, out, continued=continued, progress=progress):
            progress.clear()
            if isinstance(outcome, Failure):
                failed.append(outcome)
                click.echo(f"Error: {about(outcome.clip, outcome.error)}", err=True)
                continue
            measured.append(replace(outcome, track=None))  # long clips have long tracks
            _report(outcome, as_json)
    if as_json:
        click.echo(json.dumps([_document(one) for one in measured], indent=2, ensure_ascii=False))
    if failed:
        all_wrong = not measured and all(failure.is_wrong_file for failure in failed)
        raise click.exceptions.Exit(EXIT_WRONG if all_wrong else EXIT_SOME_FAILED)


def about(clip: Path, message: object) -> str:
    """Return the message on one line, with the clip's whole path in front and its name only once."""
    line = one_line(message)
    for said in (f"{clip}: ", f"{clip.name}: "):
        line = line.removeprefix(said)
    return f"{clip}: {line}"


def _report(one: Any, as_json: bool) -> None:
    from floorswing.summary import sentence, turns_table

    for warning in one.warnings:
        click.echo(f"Warning: {about(one.source.path, warning)}", err=True)
    if (one.folder / "fit.json").exists():
        click.echo(f"Warning: {one.folder / 'fit.json'} is of an earlier measurement; fit again", err=True)
    if as_json:
        return
    click.echo(turns_table(one.turns))
    click.echo(sentence(one))
    click.echo(f"Written to {one.folder}\n")


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
