"""``floorswing logbook``: trials and fits over months, and questions to them."""

from __future__ import annotations

import datetime
import json
from dataclasses import asdict
from pathlib import Path
from typing import Any

import click

from floorswing.options import angle_of

SELECTION = click.argument("selection", nargs=-1, metavar="[KEY=VALUE]...")
AS_JSON = click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")


@click.group(short_help="Keep trials over months, and ask them.")
@click.option(
    "--file",
    "path",
    type=click.Path(path_type=Path, dir_okay=False),
    help="The logbook's file.  [default: $FLOORSWING_LOGBOOK, or one in the user's data folder]",
)
@click.pass_context
def command(context: click.Context, path: Path | None) -> None:
    """Keep measured trials and fits, and ask them.

    KEY=VALUE selects trials: robot=..., surface=..., since=2026-01-31, until=..., or a column of the commands file.
    """
    from floorswing.logbook.store import default_path

    context.obj = path if path is not None else default_path()


@command.command()
@click.argument("folders", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="DIR...")
@click.option("--date", "date", metavar="YYYY-MM-DD", help="Day of filming.  [default: when it was measured]")
@click.option("--note", default="", help="A remark kept with the trials.")
@click.pass_obj
def add(path: Path, folders: tuple[Path, ...], date: str | None, note: str) -> None:
    """Take in what `measure` and `fit` wrote; adding twice changes nothing."""
    from floorswing.logbook.selection import day
    from floorswing.logbook.store import add as add_all

    filmed_on = datetime.date.fromisoformat(day(date)) if date is not None else None
    added = add_all(path, folders, filmed_on=filmed_on, note=note)
    for one in added:
        click.echo(f"{one.kind} {one.name}: {'added' if one.is_new else 'already there'}")
    click.echo(f"{sum(one.is_new for one in added)} added to {path}", err=True)


@command.command(name="list")
@SELECTION
@AS_JSON
@click.pass_obj
def list_(path: Path, selection: tuple[str, ...], as_json: bool) -> None:
    """List trials."""
    from floorswing.logbook.selection import parsed, some_trials
    from floorswing.logbook.store import opened
    from floorswing.tables import table

    with opened(path) as connection:
        found = some_trials(connection, parsed(selection))
    if as_json:
        _print_json([asdict(one) for one in found])
        return
    header = ["trial", "day", "robot", "surface", "clip", "turns", "gain, deg per wheel deg", "repeatability, deg"]
    rows = [
        [
            str(one.id),
            one.filmed_on,
            one.robot,
            one.surface,
            one.name,
            f"{one.n_used} of {one.n_turns}",
            "-" if one.gain is None else f"{one.gain:.4f} (u {one.u_gain:.4f})",
            "-" if one.repeatability_deg is None else f"{one.repeatability_deg:.2f}",
        ]
        for one in found
    ]
    click.echo(table(header, rows))


@command.command()
@SELECTION
@click.option(
    "--of", "quantity", type=click.Choice(["gain", "repeatability", "command"]), default="gain", show_default=True
)
@click.option("--angle", default="90", show_default=True, metavar="DEG", help="Wanted angle of the command.")
@AS_JSON
@click.pass_obj
def trend(path: Path, selection: tuple[str, ...], quantity: str, angle: str, as_json: bool) -> None:
    """Chart a quantity over time, with limits; name what does not look like the rest."""
    from floorswing.files import plain
    from floorswing.logbook.selection import parsed
    from floorswing.logbook.store import opened
    from floorswing.logbook.trend import trend as trend_of
    from floorswing.logbook.trend import trend_sentences

    with opened(path) as connection:
        found = trend_of(connection, parsed(selection), quantity, angle_of("--angle", angle))
    if as_json:
        _print_json(plain(found))
        return
    for line in trend_sentences(found):
        click.echo(line)


@command.command()
@click.argument("folders", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="DIR...")
@click.option(
    "--angle", "angles", multiple=True, metavar="DEG", help="Wanted angle, may be repeated.  [default: 90, -90]"
)
@click.option(
    "--margin-deg",
    type=click.FloatRange(0.0, min_open=True),
    default=1.0,
    show_default=True,
    help="Drift that does not matter.",
)
@click.option("--against", "against", multiple=True, metavar="KEY=VALUE", help="Stored trials to check.")
@AS_JSON
@click.pass_obj
def check(
    path: Path,
    folders: tuple[Path, ...],
    angles: tuple[str, ...],
    margin_deg: float,
    against: tuple[str, ...],
    as_json: bool,
) -> None:
    """Say whether the stored fit still holds, by a short new trial, and what to command now."""
    from floorswing.files import plain
    from floorswing.logbook.checks import check_folders, check_sentences
    from floorswing.logbook.selection import parsed
    from floorswing.logbook.store import opened

    wanted = [angle_of("--angle", text) for text in angles] or [90.0, -90.0]
    with opened(path) as connection:
        basis, found = check_folders(
            connection, folders, wanted, margin_deg=margin_deg, against=parsed(against) if against else None
        )
    if as_json:
        _print_json({"checked": basis, "checks": [plain(one) for one in found]})
        return
    for line in check_sentences(basis, found):
        click.echo(line)


@command.command()
@click.argument("out", type=click.Path(path_type=Path, file_okay=False), metavar="OUT")
@SELECTION
@click.option("--angle", "angles", multiple=True, metavar="DEG", help="Wanted angle, may be repeated.")
@click.pass_obj
def export(path: Path, out: Path, selection: tuple[str, ...], angles: tuple[str, ...]) -> None:
    """Write commands for the robot's program into OUT: CSV, JSON, C header, Python module.

    Without --angle, for 45, 90, 180 and 360 degrees each way.
    """
    from floorswing.logbook.constants import constants, write_constants
    from floorswing.logbook.selection import parsed
    from floorswing.logbook.store import LogbookError, opened

    usual = [side * size for size in (45.0, 90.0, 180.0, 360.0) for side in (1.0, -1.0)]
    wanted = [angle_of("--angle", text) for text in angles] or usual
    with opened(path) as connection:
        found, problems = constants(connection, parsed(selection), wanted)
    for problem in problems:
        click.echo(f"Warning: {problem}", err=True)
    if not found:
        raise LogbookError("nothing to export: no robot and surface of these trials has a relation for those angles")
    for file in write_constants(found, out):
        click.echo(str(file))


@command.command()
@click.argument("out", type=click.Path(path_type=Path, file_okay=False), metavar="OUT")
@click.pass_obj
def save(path: Path, out: Path) -> None:
    """Write everything into OUT as open files (CSV and JSON)."""
    from floorswing.logbook.exchange import save as save_all
    from floorswing.logbook.store import opened

    with opened(path) as connection:
        n_trials, n_fits = save_all(connection, out)
    click.echo(f"{n_trials} trials and {n_fits} fits in {out}")


@command.command()
@click.argument("folder", type=click.Path(path_type=Path, file_okay=False), metavar="DIR")
@click.pass_obj
def load(path: Path, folder: Path) -> None:
    """Take in everything that `save` wrote into DIR."""
    from floorswing.logbook.exchange import load as load_all
    from floorswing.logbook.store import opened

    with opened(path, must_exist=False) as connection:
        n_trials, n_fits = load_all(connection, folder)
    click.echo(f"{n_trials} new trials and {n_fits} new fits in {path}")


def _print_json(document: Any) -> None:
    click.echo(json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False))
