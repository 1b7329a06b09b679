"""What is in view instead of the robot's markers: other ids, a mirrored print, codes of another dictionary.

Asked once, when a clip is refused, so that the refusal names the mistake and not only its effect.
"""

from __future__ import annotations

import numpy as np

from vision.frames import LumaImage
from vision.markers import detect, dictionary_named, dictionary_names
from vision.records import MarkerSetup

MOST_NAMED = 4
ALIKE = 2
"""So many different codes of another dictionary are no accident: floor textures look like one now and then."""


def strangers(image: LumaImage, setup: MarkerSetup, lacking: tuple[int, ...]) -> str | None:
    """Return, in a few words, what the picture shows instead of the markers that were not found; None if nothing.

    Parameters
    ----------
    image : ndarray, shape (height, width)
    setup : MarkerSetup
    lacking : tuple of int
        The robot's markers that were not found.
    """
    mirrored = sorted({item.marker_id for item in detect(np.fliplr(image), setup.dictionary, lacking)})
    if mirrored:
        return f"a mirrored print of {_named(mirrored)} is in view: print it as it is, not mirrored"
    known = {setup.fore_id, setup.aft_id, *setup.card_ids}
    every = range(_size(setup.dictionary))
    others = sorted({item.marker_id for item in detect(image, setup.dictionary, every)} - known)
    if others:
        return f"{_named(others)} is in view instead" if len(others) == 1 else f"{_named(others)} are in view instead"
    return _of_another_dictionary(image, setup, every_lacking=len(lacking) == 2)


def _of_another_dictionary(image: LumaImage, setup: MarkerSetup, *, every_lacking: bool) -> str | None:
    if not every_lacking:
        return None
    best: tuple[int, str] = (0, "")
    for name in sorted(dictionary_names(), key=_size):  # the larger ones of a family hold the smaller
        if name.lower() == setup.dictionary.lower():  # some have two spellings
            continue
        ids = {item.marker_id for item in detect(image, name, (setup.fore_id, setup.aft_id, *setup.card_ids))}
        best = max(best, (len(ids), name), key=lambda item: item[0])
    return f"codes of the dictionary {best[1]} are in view" if best[0] >= ALIKE else None


def _size(dictionary: str) -> int:
    return len(dictionary_named(dictionary).bytesList)


def _named(ids: list[int]) -> str:
    shown = [str(number) for number in ids[:MOST_NAMED]]
    more = len(ids) - len(shown)
    words = ", ".join(shown) + (f" and {more} more" if more else "")
    return f"marker {words}" if len(ids) == 1 else f"markers {words}"
