"""``floorswing sheets``: markers and floor cards to print."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from floorswing.errors import FileError
from floorswing.keys import listed

if TYPE_CHECKING:
    from floorswing.sheets.making import SheetOrder

SMALLEST_MM = 15.0
LARGEST_MM = 250.0
SIDE = click.FloatRange(SMALLEST_MM, LARGEST_MM)


@click.command(short_help="Make the sheets to print: robot markers and floor cards in true scale.")
@click.option(
    "--paper",
    type=click.Choice(["A4", "Letter"], case_sensitive=False),
    default="A4",
    show_default=True,
    help="Paper in the printer.",
)
@click.option(
    "--marker-mm",
    "marker_mm",
    type=SIDE,
    multiple=True,
    default=(30.0, 40.0, 60.0),
    show_default=True,
    help="Side of the robot's markers; give it again for a pair in another size.",
)
@click.option("--card-mm", type=SIDE, default=60.0, show_default=True, help="Side of the floor cards.")
@click.option(
    "--cards",
    "n_cards",
    type=click.IntRange(0, 20),
    default=6,
    show_default=True,
    help="How many floor cards.",
)
@click.option(
    "--dictionary",
    default=None,
    help="Code dictionary, by OpenCV's name less DICT_.  [default: APRILTAG_36h11]",
)
@click.option(
    "--trial",
    type=click.Path(path_type=Path),
    default=None,
    help="Trial file to take the dictionary and the ids from.",
)
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    default=None,
    help="PDF file to write.  [default: floorswing-sheets-PAPER.pdf here]",
)
@click.option("--overwrite", is_flag=True, help="Replace the PDF file if it exists.")
def command(
    paper: str,
    marker_mm: tuple[float, ...],
    card_mm: float,
    n_cards: int,
    dictionary: str | None,
    trial: Path | None,
    out: Path | None,
    overwrite: bool,
) -> None:
    """Make a PDF with the two robot markers in a few sizes, floor cards, and short advice.

    Every sheet has a 150 mm and a 100 mm bar to check the print with a ruler; the first one says what to
    enter in the trial file if they measure otherwise. Codes are outlines, sharp at any resolution.
    """
    from floorswing.sheets.layout import paper_named
    from floorswing.sheets.making import make_sheets
    from floorswing.writing import write_whole

    chosen = paper_named(paper)
    path = out or Path(f"floorswing-sheets-{chosen.name}.pdf")
    if path.exists() and not overwrite:
        raise FileError(f"{path}: is there already; use --overwrite to replace it, or another --out")
    order = _order(marker_mm, card_mm, n_cards, dictionary, trial)
    write_whole(path, make_sheets(order, chosen))
    click.echo(f"Wrote {path} for {chosen.name}: {_contents(order)}.")
    click.echo("Print it at 100 %, check both bars with a ruler, and read the first sheet.")


def _order(
    marker_mm: tuple[float, ...], card_mm: float, n_cards: int, dictionary: str | None, trial: Path | None
) -> SheetOrder:
    from floorswing.sheets.making import SheetOrder
    from floorswing.trial import DEFAULT_DICTIONARY, Markers, dictionary_sizes, read_trial

    if trial is not None and dictionary is not None:
        raise click.UsageError("--dictionary and --trial both say which codes to print; give one of them.")
    markers = read_trial(trial).markers if trial else Markers(dictionary=dictionary or DEFAULT_DICTIONARY)
    if markers.dictionary not in dictionary_sizes():
        known = listed(list(dictionary_sizes()))
        raise click.BadParameter(
            f"{markers.dictionary!r} is not known; accepted: {known}.", param_hint="--dictionary"
        )
    first, last = markers.cards or (0, -1)
    return SheetOrder(
        dictionary=markers.dictionary,
        fore_id=markers.fore,
        aft_id=markers.aft,
        card_ids=range(first, last + 1)[:n_cards],
        marker_sides_mm=sorted(set(marker_mm)),
        card_side_mm=card_mm,
    )


def _contents(order: SheetOrder) -> str:
    """Return what is on the sheets, in words."""
    sides = listed([f"{side_mm:g}" for side_mm in order.marker_sides_mm])
    robot = (
        f"robot markers of {sides} mm (ids {order.fore_id} fore and {order.aft_id} aft, {order.dictionary})"
    )
    if not order.card_ids:
        return f"{robot}, no floor cards"
    first, last = order.card_ids[0], order.card_ids[-1]
    return f"{robot}, floor cards of {order.card_side_mm:g} mm (ids {first} to {last})"
