"""``floorswing fit``: how far the robot turns for what it is told."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from floorswing.fitting import FitResult

LABELS = {
    "gain_deg_per_wheel_deg": ("gain, deg per wheel deg", 5),
    "dead_band_wheel_deg": ("dead band, wheel deg", 2),
    "effective_track_mm": ("effective track, mm", 2),
    "contact_fraction": ("contact fraction", 3),
    "repeatability_deg": ("repeatability, deg", 3),
}


@click.command(short_help="Fit heading change against commanded wheel degrees.")
@click.argument("folders", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="DIR...")
@click.option("--out", type=click.Path(path_type=Path), help="File to write.  [default: fit.json in the first DIR]")
@click.option("--keep-strays", is_flag=True, help="Keep turns far from all others in the fit.")
@click.option("--json", "as_json", is_flag=True, help="Print fit.json instead of tables.")
def command(folders: tuple[Path, ...], out: Path | None, as_json: bool, keep_strays: bool = False) -> None:
    """Fit the relation to the measured clips in each DIR: folders that `measure` wrote.

    All clips must be of one robot on one floor. Written are gain, dead band, effective track, contact fraction and
    repeatability, each with its uncertainty and 95 % interval, and which turns were left out and why.
    """
    from floorswing.consistency_report import consistency_sentences, consistency_table
    from floorswing.fitting import FIT_FILE, fit, fit_json, sentences

    target = out or folders[0] / FIT_FILE
    result = fit(folders, target, keep_strays=keep_strays)
    if as_json:
        click.echo(fit_json(result), nl=False)
        return
    click.echo(_table(result) + "\n")
    for line in sentences(result):
        click.echo(line)
    if result.consistency is not None:
        click.echo("\n" + consistency_table(result.consistency) + "\n")
        for line in consistency_sentences(result.consistency):
            click.echo(line)
    for one in result.left_out:
        click.echo(f"Left out: turn {one.turn} of {one.clip}, since {one.reason}.")
    click.echo(f"Written to {target}")


def _table(result: FitResult) -> str:
    from calib.models import SIDE_NAMES
    from floorswing.fitting import quantities
    from floorswing.tables import table

    sides: list[tuple[str, float | None]] = [("both directions", None)]
    if result.fit.model.separate_gains:
        sides = [(SIDE_NAMES[side], side) for side in result.fit.sides] + sides
    columns = [quantities(result, side) for _, side in sides]
    rows = [
        [label, *(_cell(column[name], decimals) for column in columns)]
        for name, (label, decimals) in LABELS.items()
        if any(column[name] is not None for column in columns)
    ]
    return table(["", *(name for name, _ in sides)], rows)


def _cell(one: dict[str, Any] | None, decimals: int) -> str:
    if one is None:
        return "-"
    low, high = ("none" if one[end] is None else f"{one[end]:.{decimals}f}" for end in ("low", "high"))
    return f"{one['value']:.{decimals}f} [{low}, {high}]"
