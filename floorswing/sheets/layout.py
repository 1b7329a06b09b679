"""What goes on the sheets and where: pieces to cut out, paper, and the rows they stand in. All in mm."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from floorswing.errors import FloorswingError
from floorswing.keys import listed

LABEL_MM = 11.0
"""Height of the strip above a code that holds its label and arrow."""
GAP_MM = 5.0
"""Between two pieces."""
LEAST_QUIET_MM = 4.0
"""A white border narrower than this is soon cut into."""


class DoesNotFit(FloorswingError):
    """A piece is larger than the paper leaves room for."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Paper:
    """A paper size and its margins; the foot holds the bars."""

    name: str
    width_mm: float
    height_mm: float
    side_mm: float = 13.0
    head_mm: float = 17.0
    foot_mm: float = 24.0

    @property
    def room_mm(self) -> tuple[float, float]:
        """Width and height that pieces can use."""
        return self.width_mm - 2 * self.side_mm, self.height_mm - self.head_mm - self.foot_mm


PAPERS = {
    "A4": Paper(name="A4", width_mm=210.0, height_mm=297.0),
    "Letter": Paper(name="Letter", width_mm=215.9, height_mm=279.4),
}
"""ISO 216 A4, and ANSI/ASME Y14.1 size A (8.5 in x 11 in)."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Piece:
    """Something to cut out: a code with its white border and a strip for the label.

    Parameters
    ----------
    marker_id : int
    side_mm : float
        Outer edge of the black square.
    n_modules : int
        Modules along that edge.
    title : str
        ``FORE``, ``AFT`` or ``card``.
    has_arrow : bool
        Whether it has to be mounted one way round.
    """

    marker_id: int
    side_mm: float
    n_modules: int
    title: str
    has_arrow: bool

    @property
    def quiet_mm(self) -> float:
        """Width of the white border, one module or more."""
        return max(self.side_mm / self.n_modules, LEAST_QUIET_MM)

    @property
    def width_mm(self) -> float:
        """Width when cut out."""
        return self.side_mm + 2 * self.quiet_mm

    @property
    def height_mm(self) -> float:
        """Height when cut out."""
        return self.width_mm + LABEL_MM


@dataclass(frozen=True, kw_only=True, slots=True)
class Placed:
    """A piece on a page, by its top left corner from the top left of the paper."""

    piece: Piece
    left_mm: float
    top_mm: float

    @property
    def code_mm(self) -> tuple[float, float]:
        """Top left corner of the black square."""
        quiet_mm = self.piece.quiet_mm
        return self.left_mm + quiet_mm, self.top_mm + LABEL_MM + quiet_mm


def arranged(groups: Sequence[Sequence[Piece]], paper: Paper) -> list[list[Placed]]:
    """Place the pieces in rows, page by page; each group starts a row and stays in its order.

    Raises
    ------
    DoesNotFit
        If a piece is larger than the paper; says how large it may be.
    """
    width_mm, height_mm = paper.room_mm
    pages: list[list[Placed]] = [[]]
    top_mm = 0.0
    for row in (row for group in groups for row in _rows(group, width_mm)):
        tallest_mm = max(piece.height_mm for piece in row)
        _check_fits(row, paper)
        if top_mm + tallest_mm > height_mm and pages[-1]:
            pages.append([])
            top_mm = 0.0
        left_mm = 0.0
        for piece in row:
            pages[-1].append(
                Placed(piece=piece, left_mm=paper.side_mm + left_mm, top_mm=paper.head_mm + top_mm)
            )
            left_mm += piece.width_mm + GAP_MM
        top_mm += tallest_mm + GAP_MM
    return pages


def _rows(group: Sequence[Piece], width_mm: float) -> list[list[Piece]]:
    rows: list[list[Piece]] = []
    used_mm = 0.0
    for piece in group:
        if not rows or used_mm + piece.width_mm > width_mm:
            rows.append([])
            used_mm = 0.0
        rows[-1].append(piece)
        used_mm += piece.width_mm + GAP_MM
    return rows


def _check_fits(row: Sequence[Piece], paper: Paper) -> None:
    width_mm, height_mm = paper.room_mm
    for piece in row:
        if piece.width_mm > width_mm or piece.height_mm > height_mm:
            room_mm = min(width_mm, height_mm - LABEL_MM)
            largest_mm = room_mm * piece.n_modules / (piece.n_modules + 2)
            raise DoesNotFit(
                f"a {piece.title} marker of {piece.side_mm:g} mm does not fit on {paper.name}; "
                f"accepted: up to {int(largest_mm)} mm with this dictionary"
            )


def paper_named(name: str) -> Paper:
    """Return the paper of that name, in any letter case.

    Raises
    ------
    DoesNotFit
        If it is not known.
    """
    for known, paper in PAPERS.items():
        if known.casefold() == name.casefold():
            return paper
    raise DoesNotFit(f"paper {name!r} is not known; accepted: {listed(list(PAPERS))}")
