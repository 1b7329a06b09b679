"""Whether an mp4 or mov file is whole, from its outermost boxes (ISO/IEC 14496-12, 4.2): sizes alone, no content.

A recording or a copy that broke off leaves a last box that claims more than there is, or no index (``moov``) at all.
The decoder's own message for the latter says nothing to anybody.
"""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

MOST_BOXES = 100_000
"""A file with more of them at the top is not worth reading on: fragments of a phone last half a second or more."""


@dataclass(frozen=True, slots=True)
class Boxes:
    """What the outermost boxes of a file say.

    Parameters
    ----------
    indexed : bool
        Whether there is an index.
    whole : bool
        Whether the last box ends within the file.
    """

    indexed: bool
    whole: bool


def boxes_of(path: Path) -> Boxes | None:
    """Return what the boxes say; None if the file is not of this kind or cannot be read."""
    try:
        with path.open("rb") as file:
            return _walk(file, os.fstat(file.fileno()).st_size)
    except OSError:
        return None


def _walk(file: BinaryIO, length: int) -> Boxes | None:
    place, indexed = 0, False
    for number in range(MOST_BOXES):
        if place + 8 > length:
            return Boxes(indexed, whole=place == length) if number else None
        file.seek(place)
        head = file.read(16)
        size, kind = int.from_bytes(head[:4], "big"), head[4:8]
        if number == 0 and kind != b"ftyp":
            return None
        indexed |= kind == b"moov"
        if size == 1:
            size = int.from_bytes(head[8:16], "big")
        elif size == 0:
            size = length - place
        if size < 8 or place + size > length:
            return Boxes(indexed, whole=False)
        place += size
    return Boxes(indexed, whole=True)
