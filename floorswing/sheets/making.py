"""Which pieces to print for a set of markers, and the PDF of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from floorswing.sheets.drawing import sheets_pdf
from floorswing.sheets.layout import Paper, Piece, arranged
from vision.markers import printed_modules


@dataclass(frozen=True, kw_only=True, slots=True)
class SheetOrder:
    """What to print.

    Parameters
    ----------
    dictionary : str
        Name of an OpenCV predefined dictionary without the ``DICT_`` prefix.
    fore_id, aft_id : int
        Ids of the robot's markers.
    card_ids : sequence of int
        Ids of the floor cards; empty for none.
    marker_sides_mm : sequence of float
        A pair of robot markers is printed in each of these sizes.
    card_side_mm : float
        Size of the floor cards.
    """

    dictionary: str
    fore_id: int
    aft_id: int
    card_ids: Sequence[int]
    marker_sides_mm: Sequence[float]
    card_side_mm: float


def make_sheets(order: SheetOrder, paper: Paper) -> bytes:
    """Return the sheets as a PDF.

    Raises
    ------
    DoesNotFit
        If a marker is larger than the paper.
    """
    n_modules = len(printed_modules(order.dictionary, order.fore_id))
    pairs = [
        [
            Piece(marker_id=marker_id, side_mm=side_mm, n_modules=n_modules, title=title, has_arrow=True)
            for title, marker_id in (("FORE", order.fore_id), ("AFT", order.aft_id))
        ]
        for side_mm in order.marker_sides_mm
    ]
    cards = [
        Piece(
            marker_id=marker_id,
            side_mm=order.card_side_mm,
            n_modules=n_modules,
            title="card",
            has_arrow=False,
        )
        for marker_id in order.card_ids
    ]
    pages = [("Robot markers", page) for page in arranged(pairs, paper)]
    if cards:
        pages += [("Floor cards", page) for page in arranged([cards], paper)]
    return sheets_pdf(pages, paper, order.dictionary)
