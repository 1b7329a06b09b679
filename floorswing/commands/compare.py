"""``floorswing compare``: whether surfaces, robots, speeds or days differ."""

from __future__ import annotations

import math
from pathlib import Path

import click

from floorswing.options import angle_of


@click.command(short_help="Say whether surfaces, robots, speeds or days differ.")
@click.argument("folders", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="DIR...")
@click.option(
    "--angle", "angles", multiple=True, metavar="DEG", help="Angle to compare at, may be repeated.  [default: 90, -90]"
)
@click.option("--margin-deg", type=float, default=1.0, show_default=True, help="Difference that does not matter.")
@click.option("--by", metavar="COLUMN", help="Compare the values of a further column of the commands file.")
@click.option(
    "--logbook",
    "book",
    type=click.Path(path_type=Path, dir_okay=False),
    help="Logbook that log:... refers to.  [default: the usual one]",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of tables.")
def command(
    folders: tuple[Path, ...],
    angles: tuple[str, ...],
    margin_deg: float,
    by: str | None,
    book: Path | None,
    as_json: bool,
) -> None:
    """Compare what each DIR holds: folders that `measure` wrote for a clip, or folders of such folders.

    The clips in one DIR are runs of one thing; clips of different robots or floors are told apart. Each pair is the
    same within the margin, different, or cannot be told yet, and then how many more turns would tell.

    In place of a DIR, log:surface=cork (or another selection) stands for the trials of the logbook that it selects.
    """
    from floorswing.comparing import compare, comparison_json, comparison_sentences, group_table, pair_table
    from floorswing.logbook.taken import as_folders

    if not (math.isfinite(margin_deg) and margin_deg > 0.0):
        raise click.UsageError(f"--margin-deg: found {margin_deg:g}; accepted: degrees above 0")
    wanted = [angle_of("--angle", text) for text in angles]
    with as_folders(folders, book) as places:
        found = compare(places, wanted_deg=wanted, margin_deg=margin_deg, by=by)
    if as_json:
        click.echo(comparison_json(found), nl=False)
        return
    click.echo(group_table(found) + "\n")
    click.echo(pair_table(found) + "\n")
    for line in comparison_sentences(found):
        click.echo(line)
