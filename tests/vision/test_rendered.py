"""Corners from rendered, noisy, never coded pictures against where the renderer put them."""

from dataclasses import replace

import cv2
import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import Sensor
from demo_videos.render.scenes import phone_sensor
from tests.vision.rendered import SETUP, resting_frames, true_corners_px
from vision.track import find_pair, track_pair

N_FRAMES = 150
PLAIN, PHONE = Sensor(exposure_s=0.0), replace(phone_sensor(), exposure_s=0.0)


@pytest.fixture(scope="module", params=[PLAIN, PHONE], ids=["plain", "phone"])
def seen(request):
    scene, frames = resting_frames(N_FRAMES, sensor=request.param)
    return request.param, true_corners_px(scene), frames, track_pair(iter(frames), SETUP)


def stated_u_px(track):
    cov = np.linalg.inv(track.information.reshape(-1, 8, 8).astype(float))
    return np.sqrt(np.diagonal(cov, axis1=1, axis2=2)).reshape(-1, 2, 4, 2)


def test_corners_within_their_uncertainty(seen):
    _, true_px, _, track = seen
    errors = np.abs(track.corners_px - true_px) / stated_u_px(track)
    # 2400 normal deviates: the largest is expected at 3.5 u; a bias of a few thousandths of a pixel adds to that.
    assert errors.max() < 5.0
    assert np.mean(errors < 4.0) > 0.999


def test_corners_have_no_bias(seen):
    _, true_px, _, track = seen
    mean_px = track.corners_px.mean(axis=0) - true_px
    # The mean of 150 frames has a noise of about 0.0015 px of its own.
    assert_allclose(mean_px, 0.0, atol=0.012)  # px
    assert np.sqrt(np.mean(mean_px**2)) < 0.008


def test_noise_is_that_of_the_bound(seen):
    """The scatter over 150 frames against Fisher's bound from the same frames: 16 coordinates, 4 sd of their mean."""
    sensor, _, _, track = seen
    ratio = float(np.mean(track.corners_px.std(axis=0, ddof=1) / stated_u_px(track).mean(axis=0)))
    allowed = 4.0 / np.sqrt(2.0 * (N_FRAMES - 1) * 6.0)  # 16 coordinates, of which about 6 vary on their own
    if sensor is PLAIN:
        assert abs(ratio - 1.0) < allowed
    else:  # sharpening makes neighbouring noise alike, against which white noise is the careful assumption
        assert 0.5 < ratio < 1.0 + allowed


def test_sharpening_and_tone_curve_are_found(seen):
    sensor, _, _, track = seen
    optics = track.optics
    assert_allclose(optics.blur_px, np.hypot(0.8, np.sqrt(1 / 12)), atol=0.02)  # px, the pixel's own box included
    if sensor is PLAIN:
        assert (optics.tone, optics.halo) == (0.0, 0.0)
    else:
        assert 0.2 < optics.tone < 0.9
        assert 0.1 < optics.halo < 1.5


def test_detected_corners_are_far_coarser(seen):
    """What alignment gains over the corners it starts from: an order of magnitude at least."""
    _, true_px, frames, track = seen
    found = np.array([find_pair(frame.luma, SETUP)[0] for frame in frames[:20]])
    coarse = np.sqrt(np.mean((found - true_px) ** 2))
    assert coarse > 10.0 * np.sqrt(np.mean((track.corners_px - true_px) ** 2))


def test_gain_and_offset_do_not_move_corners(seen):
    _, _, frames, track = seen
    dim = [replace_luma(frame, 0.45, 20.0) for frame in frames[:30]]
    again = track_pair(iter(dim), SETUP)
    # Grey levels are rounded to whole numbers anew, which is a little noise of its own.
    assert_allclose(again.corners_px.mean(axis=0), track.corners_px[:30].mean(axis=0), atol=0.015)  # px


def replace_luma(frame, gain, offset):
    return type(frame)(frame.index, frame.time_s, np.round(frame.luma * gain + offset).astype(np.uint8), frame.is_key)


def test_homographies_of_aligned_corners_against_opencv(seen):
    """Reference library: cv2.getPerspectiveTransform; the four corners give one marker's map exactly."""
    _, true_px, _, track = seen
    unit = np.array([[0, 0], [1, 0], [1, 1], [0, 1]], np.float32)
    for m in range(2):
        theirs = cv2.getPerspectiveTransform(unit, track.corners_px.mean(axis=0)[m].astype(np.float32))
        truth = cv2.getPerspectiveTransform(unit, true_px[m].astype(np.float32))
        middle = np.array([[[0.5, 0.5]]], np.float32)
        assert_allclose(
            cv2.perspectiveTransform(middle, theirs), cv2.perspectiveTransform(middle, truth), atol=0.01
        )  # px: the marker's centre
