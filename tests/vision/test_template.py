import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from vision.markers import printed_modules
from vision.template import QUIET_MODULES, Optics, build_template

BLACK = printed_modules("APRILTAG_36h11", 3)
SIDE_PX = 44.0


def grid(template):
    """Return where the samples lie, in sides, along one axis."""
    return template.unit_from_sample[0, 0] * np.arange(template.channels.shape[0]) + template.unit_from_sample[0, 2]


def dense(unit, blur_sides, fine=9):
    """Return the blurred print at these places by supersampling and a wide Gaussian, without `vision.template`."""
    step = (unit[1] - unit[0]) / fine
    n = len(unit)
    place = unit[0] + (np.arange(-12 * fine, (n + 12) * fine) - (fine - 1) / 2) * step
    cell = np.floor((place + 0.5) * len(BLACK)).astype(int)
    inside = (cell >= 0) & (cell < len(BLACK))
    ink = BLACK[np.clip(cell, 0, len(BLACK) - 1)][:, np.clip(cell, 0, len(BLACK) - 1)] & inside[:, None] & inside
    soft = cv2.GaussianBlur(1.0 - ink.astype(np.float64), (0, 0), blur_sides / step)
    middle = 12 * fine + (fine - 1) // 2
    return soft[middle : middle + n * fine : fine, middle : middle + n * fine : fine]


@pytest.mark.parametrize("blur_px", [0.7, 1.1])
def test_blurred_print_against_supersampling(blur_px):
    """Reference library: cv2.GaussianBlur on a nine times finer grid."""
    template = build_template(BLACK, side_px=SIDE_PX, optics=Optics(blur_px))
    expected = dense(grid(template), blur_px / SIDE_PX)
    edge = 3
    ours = template.channels[edge:-edge, edge:-edge, 0]
    assert_allclose(ours, expected[edge:-edge, edge:-edge], atol=0.012)
    assert np.sqrt(np.mean((ours - expected[edge:-edge, edge:-edge]) ** 2)) < 0.003


@pytest.mark.parametrize("optics", [Optics(0.9), Optics(0.9, tone=0.4), Optics(0.9, halo=0.5, halo_px=1.3)])
def test_slopes_are_those_of_the_picture(optics):
    template = build_template(BLACK, side_px=SIDE_PX, optics=optics)
    step = template.unit_from_sample[0, 0]
    grey = template.channels[..., 0].astype(float)
    along_x = (grey[:, 2:] - grey[:, :-2]) / (2 * step)
    along_y = (grey[2:] - grey[:-2]) / (2 * step)
    slope_x, slope_y = template.channels[:, 1:-1, 1].astype(float), template.channels[1:-1, :, 2].astype(float)
    # Differences over two samples cut the steepest places by a few per cent.
    top = np.abs(slope_x).max()
    inner = slice(4, -4)
    assert np.abs(along_x - slope_x)[inner, inner].max() < 0.06 * top
    assert np.abs(along_y - slope_y)[inner, inner].max() < 0.06 * top


def test_black_and_white_and_the_quiet_zone():
    template = build_template(BLACK, side_px=200.0, optics=Optics(0.5))
    unit = grid(template)
    assert_allclose(template.margin, QUIET_MODULES / len(BLACK))
    assert_allclose([unit[0], unit[-1]], [-0.5 - template.margin, 0.5 + template.margin], atol=0.02)
    centres = (np.arange(len(BLACK)) + 0.5) / len(BLACK) - 0.5
    at = np.abs(unit[:, None] - centres).argmin(axis=0)
    assert_allclose(template.channels[np.ix_(at, at)][..., 0], 1.0 - BLACK, atol=1e-3)
    assert_allclose(template.channels[0, :, 0], 1.0, atol=1e-3)
    assert np.all(template.channels[..., 3] == 1.0)


def test_tone_curve_bends_greys_and_keeps_black_and_white():
    plain = build_template(BLACK, side_px=SIDE_PX, optics=Optics(0.9)).channels[..., 0]
    bent = build_template(BLACK, side_px=SIDE_PX, optics=Optics(0.9, tone=0.5)).channels[..., 0]
    assert_allclose(bent, plain + 0.5 * plain * (1.0 - plain), atol=1e-6)


def test_halo_is_an_unsharp_mask():
    """Reference library: cv2.GaussianBlur for the wide copy that is taken away."""
    optics = Optics(0.9, halo=0.6, halo_px=1.5)
    plain = build_template(BLACK, side_px=SIDE_PX, optics=Optics(0.9))
    sharp = build_template(BLACK, side_px=SIDE_PX, optics=optics).channels[..., 0]
    sigma = 1.5 / SIDE_PX / plain.unit_from_sample[0, 0]
    grey = np.ascontiguousarray(plain.channels[..., 0])
    wide = cv2.GaussianBlur(grey, (0, 0), sigma, borderType=cv2.BORDER_REPLICATE)
    assert_allclose(sharp, grey + 0.6 * (grey - wide), atol=1e-4)
    assert sharp.max() > 1.05
