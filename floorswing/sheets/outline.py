"""The outline of a printed code: closed loops round its black areas.

A code drawn module by module shows hairlines where neighbouring squares meet; drawn as one outline it has
none, on any screen or printer.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Vertex = tuple[int, int]


def outlines(black: NDArray[np.bool_]) -> list[list[Vertex]]:
    """Return the loops round the black areas, for filling by the even-odd or the non-zero rule.

    Parameters
    ----------
    black : ndarray of bool, shape (n, n)
        True where a module is black; row 0 is the top as printed.

    Returns
    -------
    list of list of (int, int)
        Corners (x right, y down, in modules from the top left) of each loop, only where it bends; black
        lies on its right-hand side as drawn.
    """
    following = _edges(np.pad(black, 1))
    loops = []
    while following:
        start = next(iter(following))
        loop = [start]
        while (corner := _next(following, loop)) != start:
            loop.append(corner)
        loops.append(_bends(loop))
    return loops


def _edges(padded: NDArray[np.bool_]) -> dict[Vertex, list[Vertex]]:
    """Return, for each corner, where the edges between black and white that start there lead."""
    following: dict[Vertex, list[Vertex]] = {}
    for row, column in zip(*(axis.tolist() for axis in np.nonzero(padded)), strict=True):
        x, y = column - 1, row - 1
        sides = (
            (padded[row - 1, column], (x, y), (x + 1, y)),
            (padded[row, column + 1], (x + 1, y), (x + 1, y + 1)),
            (padded[row + 1, column], (x + 1, y + 1), (x, y + 1)),
            (padded[row, column - 1], (x, y + 1), (x, y)),
        )
        for neighbour_is_black, start, end in sides:
            if not neighbour_is_black:
                following.setdefault(start, []).append(end)
    return following


def _next(following: dict[Vertex, list[Vertex]], loop: list[Vertex]) -> Vertex:
    """Take the edge that leads on from the end of the loop; where two black areas touch, turn right."""
    ends = following[loop[-1]]
    chosen = ends[0]
    if len(ends) > 1 and len(loop) > 1:
        (x0, y0), (x1, y1) = loop[-2:]
        right = (x1 - (y1 - y0), y1 + (x1 - x0))
        chosen = right if right in ends else ends[0]
    ends.remove(chosen)
    if not ends:
        del following[loop[-1]]
    return chosen


def _bends(loop: list[Vertex]) -> list[Vertex]:
    """Leave out the corners where the loop runs straight on."""
    before, after = loop[-1:] + loop[:-1], loop[1:] + loop[:1]
    return [b for a, b, c in zip(before, loop, after, strict=True) if (a[0] != c[0]) and (a[1] != c[1])]
