"""What a refusal says about the prints that are in view instead."""

import cv2
import numpy as np
import pytest

from vision.markers import printed_modules
from vision.records import MarkerSetup
from vision.strangers import strangers

SETUP = MarkerSetup(marker_side_mm=40.0)


def picture(*prints, mirrored=(), dictionary="APRILTAG_36h11"):
    """Return a grey picture with markers of these ids side by side, some of them mirrored."""
    out = np.full((160, 140 * max(len(prints), 1) + 20), 150, dtype=np.uint8)
    for k, number in enumerate(prints):
        black = np.pad(printed_modules(dictionary, number), 1)
        tile = cv2.resize(np.where(black, 30, 220).astype(np.uint8), (120, 120), interpolation=cv2.INTER_NEAREST)
        tile[:12], tile[-12:], tile[:, :12], tile[:, -12:] = 220, 220, 220, 220
        out[20:140, 20 + 140 * k : 140 + 140 * k] = tile[:, ::-1] if number in mirrored else tile
    return out


@pytest.mark.parametrize(
    ("shown", "lacking", "says"),
    [
        (picture(7, 1), (0,), "marker 7 is in view instead"),
        (picture(7, 1, 300), (0,), "markers 7, 300 are in view instead"),
        (picture(0, 1, mirrored=(0,)), (0,), "a mirrored print of marker 0 is in view"),
        (picture(0, 1, mirrored=(0, 1)), (0, 1), "a mirrored print of markers 0, 1 is in view"),
        (picture(0, 1, dictionary="6X6_50"), (0, 1), "codes of the dictionary 6X6_50 are in view"),
    ],
)
def test_the_mistake_is_named(shown, lacking, says):
    assert (strangers(shown, SETUP, lacking) or "").startswith(says)


@pytest.mark.parametrize("shown", [picture(), picture(1), picture(1, 12)])
def test_where_nothing_strange_is_in_view_nothing_is_said(shown):
    assert strangers(shown, SETUP, (0,)) is None
