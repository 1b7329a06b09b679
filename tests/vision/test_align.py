import numpy as np
import pytest
from numpy.testing import assert_allclose

from vision.align import Held, fit_corners, homography_from_corners
from vision.markers import UNIT_CORNERS, printed_modules
from vision.rigid import project, rigid, rigid_between
from vision.template import Optics, build_template

BLACK = printed_modules("APRILTAG_36h11", 0)
OPTICS = Optics(blur_px=0.85)
TRUE_PX = np.array([[24.3, 20.6], [61.9, 27.2], [56.8, 64.4], [18.1, 57.5]])
LOW, HIGH = 30.0, 200.0


def picture(corners_px, *, psf_px=0.8, tone=None, fine=15, size=90):
    """Render a marker with a point spread by dense sampling, independently of `vision.template`."""
    import cv2

    place = (np.arange(size * fine) + 0.5) / fine - 0.5
    x, y = np.meshgrid(place, place)
    points = np.stack([x.ravel(), y.ravel()], axis=1)
    unit = project(np.linalg.inv(homography_from_corners(corners_px)), points) + 0.5
    inside = np.all((unit >= 0) & (unit < 1), axis=1)
    cell = np.clip((unit * len(BLACK)).astype(int), 0, len(BLACK) - 1)
    white = np.where(inside & BLACK[cell[:, 1], cell[:, 0]], 0.0, 1.0).reshape(x.shape).astype(np.float32)
    blurred = cv2.GaussianBlur(white, (0, 0), psf_px * fine)
    grey = blurred.reshape(size, fine, size, fine).mean(axis=(1, 3))
    return LOW + (HIGH - LOW) * (grey if tone is None else tone(grey))


def align(image, start_px, template, steps=4):
    corners_px = start_px
    for _ in range(steps):
        fit = fit_corners(image, corners_px, template)
        corners_px = fit.corners_px + fit.move_px
    return corners_px, fit


CLEAN = picture(TRUE_PX)
TEMPLATE = build_template(BLACK, side_px=38.0, optics=OPTICS)


def noisy(rng, sd=2.5):
    return np.clip(np.round(CLEAN + rng.normal(0, sd, CLEAN.shape)), 0, 255).astype(np.uint8)


def test_corners_without_noise():
    found, fit = align(CLEAN.astype(np.float32), TRUE_PX + 0.4, TEMPLATE)
    assert_allclose(found, TRUE_PX, rtol=0, atol=0.012)  # px
    assert fit.explained > 0.999
    assert_allclose(fit.contrast, HIGH - LOW, rtol=0.01)


def test_noise_reaches_the_bound_and_the_bound_is_stated():
    """200 draws: the corners' scatter is within 10 % of Fisher's bound from the same frames (4 sd of that check)."""
    rng = np.random.default_rng(2)
    found, bounds = [], []
    for _ in range(200):
        corners_px, fit = align(noisy(rng), TRUE_PX, TEMPLATE, steps=2)
        found.append(corners_px.ravel())
        bounds.append(np.sqrt(np.diag(np.linalg.inv(fit.information)) * fit.noise_var))
    spread = np.std(found, axis=0, ddof=1)
    assert_allclose(np.mean(spread / np.mean(bounds, axis=0)), 1.0, atol=0.1)


def test_light_that_falls_off_and_a_change_of_gain_do_not_matter():
    y, x = np.mgrid[0:90, 0:90]
    lit = CLEAN * (0.5 + 0.004 * x - 0.001 * y) + 7.0
    found, _ = align(lit.astype(np.float32), TRUE_PX + 0.3, TEMPLATE)
    assert_allclose(found, TRUE_PX, rtol=0, atol=0.02)  # px


def test_a_tone_curve_bends_edges_but_not_angles():
    """What a bent tone curve does to a marker turns with it: the angle is off by the same small amount everywhere."""
    square = UNIT_CORNERS * 38.0
    off_deg = []
    for turn_rad in np.deg2rad([10, 55, 100, 145, 190, 235]):
        true_px = project(rigid(turn_rad, 45.2, 44.7), square)
        found, _ = align(picture(true_px, tone=lambda g: g**0.6).astype(np.float32), true_px, TEMPLATE)
        off_deg.append(np.degrees(rigid_between(true_px, found)[0]))
    assert np.std(off_deg) < 0.02  # a hundredth of a pixel over the marker's side
    assert np.abs(np.mean(off_deg)) < 0.05


def test_a_finger_over_a_corner_is_left_out():
    rng = np.random.default_rng(3)
    image = noisy(rng)
    image[:34, :34] = 90
    plain, _ = align(image, TRUE_PX, TEMPLATE, steps=1)
    sturdy = fit_corners(image, TRUE_PX, TEMPLATE, robust=True)
    found = sturdy.corners_px + sturdy.move_px
    assert np.abs(found - TRUE_PX).max() < 0.15  # px
    assert np.abs(found - TRUE_PX).max() < np.abs(plain - TRUE_PX).max()


def test_holding_on_gives_the_same_answer_as_comparing_again():
    rng = np.random.default_rng(4)
    held = Held(fit_corners(noisy(rng), TRUE_PX, TEMPLATE))
    image = noisy(rng)
    fresh, quick = fit_corners(image, TRUE_PX, TEMPLATE), held.again(image)
    assert_allclose(quick.move_px, fresh.move_px, rtol=0, atol=2e-3)  # px
    assert_allclose(quick.noise_var, fresh.noise_var, rtol=0.02)


def test_nothing_to_hold_on_to():
    assert fit_corners(CLEAN.astype(np.float32), TRUE_PX + 500.0, TEMPLATE) is None
    assert fit_corners(CLEAN.astype(np.float32), np.full((4, 2), np.nan), TEMPLATE) is None
    wrong = fit_corners(np.random.default_rng(0).normal(100, 9, (90, 90)).astype(np.float32), TRUE_PX, TEMPLATE)
    assert wrong is None or wrong.explained < 0.3


@pytest.mark.parametrize("corners_px", [TRUE_PX, TRUE_PX[::-1] * 3.7, UNIT_CORNERS * 40 + 100])
def test_homography_takes_the_unit_square_to_the_corners(corners_px):
    assert_allclose(project(homography_from_corners(corners_px), UNIT_CORNERS), corners_px, atol=1e-9)


def test_homography_against_opencv():
    """Reference library: cv2.getPerspectiveTransform."""
    import cv2

    theirs = cv2.getPerspectiveTransform(UNIT_CORNERS.astype(np.float32), TRUE_PX.astype(np.float32))
    ours = homography_from_corners(TRUE_PX)
    assert_allclose(ours / ours[2, 2], theirs / theirs[2, 2], atol=1e-4)
