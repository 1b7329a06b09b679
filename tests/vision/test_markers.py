import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from vision.align import homography_from_corners
from vision.markers import (
    SMALLEST_SIDE_PX,
    UNIT_CORNERS,
    as_uint8,
    detect,
    dictionary_named,
    dictionary_names,
    printed_modules,
)
from vision.rigid import project, rigid

TRUE_PX = np.array([[60.2, 41.7], [118.4, 52.9], [109.0, 110.3], [48.6, 101.5]])


def picture(dictionary, marker_id, corners_px=TRUE_PX, size=(160, 180)):
    """Draw a printed marker through OpenCV's own generator and warp."""
    side = 40 * (dictionary_named(dictionary).markerSize + 2)
    ink = cv2.aruco.generateImageMarker(dictionary_named(dictionary), marker_id, side, borderBits=1)
    unit = np.array([[0, 0], [side, 0], [side, side], [0, side]], np.float32) - 0.5
    map_ = cv2.getPerspectiveTransform(unit, corners_px.astype(np.float32))
    seen = cv2.warpPerspective(ink, map_, size, flags=cv2.INTER_AREA, borderMode=cv2.BORDER_CONSTANT, borderValue=255)
    return cv2.GaussianBlur(seen, (0, 0), 0.8)


def test_the_names_are_opencvs_own():
    names = dictionary_names()
    assert {"APRILTAG_36h11", "4X4_50", "5X5_1000", "ARUCO_ORIGINAL", "ARUCO_MIP_36h12"} <= set(names)
    assert not any(name.startswith("DICT_") for name in names)
    with pytest.raises(KeyError):
        dictionary_named("10X10_9")


@pytest.mark.parametrize("dictionary", dictionary_names())
def test_a_marker_of_every_dictionary_is_found_where_it_is(dictionary):
    number = len(dictionary_named(dictionary).bytesList) // 2
    found = detect(picture(dictionary, number), dictionary, range(2000))
    assert [item.marker_id for item in found] == [number]
    assert_allclose(found[0].corners_px, TRUE_PX, atol=1.5)  # px, and in the order in which they are printed
    sides = np.hypot(*(np.roll(TRUE_PX, -1, axis=0) - TRUE_PX).T)
    assert_allclose(found[0].side_px, sides.mean(), rtol=0.03)


@pytest.mark.parametrize("dictionary", dictionary_names())
def test_printed_modules_are_those_of_the_picture(dictionary):
    black = printed_modules(dictionary, 1)
    n = dictionary_named(dictionary).markerSize + 2
    assert black.shape == (n, n)
    border = np.ones((n, n), bool)
    border[1:-1, 1:-1] = False
    assert black[border].all()
    centres = (np.arange(n) + 0.5) / n - 0.5
    at = np.stack(np.meshgrid(centres, centres), axis=-1).reshape(-1, 2)
    px = np.round(project(homography_from_corners(TRUE_PX), at)).astype(int)
    assert_array_equal(picture(dictionary, 1)[px[:, 1], px[:, 0]].reshape(n, n) < 128, black)


@pytest.mark.parametrize("turn_deg", [0, 90, 180, 270, 31])
def test_corners_go_round_as_printed_however_the_marker_lies(turn_deg):
    corners_px = project(rigid(np.deg2rad(turn_deg), 80.3, 90.1), UNIT_CORNERS * 52.0)
    (found,) = detect(picture("4X4_50", 7, corners_px), "4X4_50", [7])
    assert_allclose(found.corners_px, corners_px, atol=1.5)


def test_only_wanted_ids_are_reported():
    assert detect(picture("4X4_50", 7), "4X4_50", [3, 4]) == []
    assert detect(np.full((80, 80), 200, np.uint8), "4X4_50", [7]) == []


def test_the_smallest_marker_follows_the_crop():
    """The detector's own limit is a share of the picture given to it; ours is in pixels, crop or not."""
    side = SMALLEST_SIDE_PX + 12.0
    corners_px = UNIT_CORNERS * side + (20.3, 21.2)
    small = picture("4X4_50", 7, corners_px, (44, 44))
    large = np.full((900, 1600), 255, np.uint8)
    large[400:444, 700:744] = small
    for image, shift in ((small, (0, 0)), (large, (700, 400))):
        (found,) = detect(image, "4X4_50", [7])
        assert_allclose(found.corners_px - shift, corners_px, atol=1.0)


def test_deeper_pictures_are_stretched_to_eight_bits():
    eight = picture("4X4_50", 7)
    ten = (64 + eight.astype(np.uint16) * 3).astype(np.uint16)
    assert as_uint8(eight[:, ::-1]).flags["C_CONTIGUOUS"]
    assert as_uint8(ten).dtype == np.uint8
    (found,) = detect(ten, "4X4_50", [7])
    assert_allclose(found.corners_px, TRUE_PX, atol=1.5)


def test_a_mirrored_marker_is_not_that_marker():
    found = detect(np.ascontiguousarray(picture("APRILTAG_36h11", 0)[:, ::-1]), "APRILTAG_36h11", [0])
    assert found == []
