"""Plain-text tables."""

from __future__ import annotations

from collections.abc import Sequence


def table(header: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Return rows under a header, the first column to the left and the others to the right."""
    widths = [max(len(row[k]) for row in (header, *rows)) for k in range(len(header))]
    lines = []
    for row in (header, *rows):
        first, *rest = (
            cell.ljust(width) if k == 0 else cell.rjust(width)
            for k, (cell, width) in enumerate(zip(row, widths, strict=True))
        )
        lines.append("  ".join([first, *rest]).rstrip())
    return "\n".join(lines)
