"""Floor cards in the calibration: squares of one size, lying anywhere, on a plane parallel to the deck."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from demo_videos.render import render_frames, spin_motion
from demo_videos.render.scenes import plain_scene
from vision.bundle import calibrate
from vision.card_squares import card_normal, curled, misses_px, squares_of
from vision.foresight import Plan, imagined, prospect_of
from vision.frames import Frame
from vision.glimpse import glimpse_of
from vision.markers import UNIT_CORNERS
from vision.observations import CardLook
from vision.plane import LENS, SHAPE, through_camera
from vision.poses import solve_poses
from vision.records import MarkerSetup
from vision.steady import calibrate_steadied, camera_path

PLACES = ((-2.6, 1.6, 0.3), (2.7, 1.5, -0.7), (-2.7, -1.5, 1.4), (2.6, -1.4, 3.3))
"""Where the cards lie (plane units) and how they are turned (rad)."""


@pytest.fixture(scope="module")
def prospect():
    motion = spin_motion([190.0], start_delay_s=1.0, rest_s=0.5, start=(10.0, 15.0, 35.0))
    pairs = zip(range(4), render_frames(plain_scene(), motion), strict=False)
    frames = [Frame(k, time_s, luma, k == 0) for k, (time_s, luma) in pairs]
    track = glimpse_of(frames, MarkerSetup(marker_side_mm=40.0, card_side_mm=60.0)).track
    return replace(prospect_of(track, key_s=1.0), fresh=0.5, frozen=0.5, moving=1.0)


def looks_at(prospect, *, size=0.42, noise_px=0.02, curl=0.0, seed=3):
    """Return looks at cards through the prospect's camera; the first has two opposite corners bent outwards."""
    rng = np.random.default_rng(seed)
    looks = []
    for number, (x, y, turn) in enumerate(PLACES):
        c, s = np.cos(turn), np.sin(turn)
        points = size * UNIT_CORNERS @ np.array([[c, s], [-s, c]]) + (x, y)
        if number == 0:
            points = points + curl * size * np.array([[-1, -1], [0, 0], [1, 1], [0, 0]]) @ np.array([[c, s], [-s, c]])
        seen, _, _ = through_camera(prospect.p, points)
        px = seen * prospect.units.half_px + prospect.units.centre_px + rng.normal(scale=noise_px, size=(4, 2))
        looks += [CardLook(10 + number, 0.5 * k, px, noise_px) for k in range(3)]
    return tuple(looks)


def test_cards_on_the_right_plane_ask_for_no_step(prospect):
    cards = squares_of(looks_at(prospect, noise_px=1e-6))
    found = card_normal(cards, prospect.p, prospect.units)
    assert_allclose(found.left_px, 0.0, atol=1e-4)
    assert found.cost < 1e-4


def test_the_normal_equations_are_the_slopes_of_the_cost(prospect):
    cards = squares_of(looks_at(prospect, noise_px=0.0))
    p = prospect.p.copy()
    p[SHAPE] += 1e-4 * np.array([1.0, -0.5, 0.7, 2.0, -1.5])
    found = card_normal(cards, p, prospect.units)
    for place in range(SHAPE.start, LENS.stop):
        step = np.zeros_like(p)
        step[place] = 1e-6
        up, down = (card_normal(cards, p + sign * step, prospect.units).cost for sign in (1.0, -1.0))
        assert_allclose((up - down) / 2e-6, -2.0 * found.g[place], rtol=0.03, atol=0.5)
    assert_allclose(found.a, found.a.T, atol=1e-6 * np.abs(found.a).max())
    assert np.linalg.eigvalsh(found.a).min() > -1e-6 * np.abs(found.a).max()


def test_with_little_rotation_the_cards_take_over(prospect):
    plan = Plan(turns_deg=(25.0, -25.0), rest_s=0.8)
    exact = replace(prospect, fresh=0.0, frozen=0.0, moving=0.0)
    long = imagined(exact, Plan(turns_deg=(120.0, 120.0)), np.random.default_rng(0))
    alone, together, us_alone, us_together = [], [], [], []
    for seed in range(8):
        bare = imagined(prospect, plan, np.random.default_rng(seed))
        carded = replace(bare, looks=looks_at(prospect, seed=seed))
        for track, errors, us in ((bare, alone, us_alone), (carded, together, us_together)):
            _, found = calibrate_steadied(track, camera_path(track))
            plane = prospect.p.copy()  # of what is found, the plane and the lens: what the cards bear on
            plane[SHAPE.start : LENS.stop] = found.p[SHAPE.start : LENS.stop]
            seen, truth = (
                solve_poses(long, replace(found, p=p, units=prospect.units)).heading_rad for p in (plane, prospect.p)
            )
            errors.append(np.degrees(np.ptp(np.unwrap(seen) - np.unwrap(truth))))
            us.append(np.sqrt(np.trace(found.cov[SHAPE, SHAPE])))
    assert np.mean(us_together) < 0.7 * np.mean(us_alone)
    assert np.mean(together) < 0.8 * np.mean(alone)


def test_a_full_rotation_is_not_made_worse(prospect):
    plan = Plan(turns_deg=(120.0, 120.0, 120.0), rest_s=0.7)
    ratios = []
    for seed in range(5):
        track = imagined(prospect, plan, np.random.default_rng(seed))
        errors = []
        for cards in (None, squares_of(looks_at(prospect, seed=seed))):
            found = calibrate(track, cards)
            exact = solve_poses(track, replace(found, p=prospect.p, units=prospect.units)).heading_rad
            errors.append(np.ptp(np.unwrap(solve_poses(track, found).heading_rad) - np.unwrap(exact)))
        ratios.append(errors[1] / errors[0])
    assert np.mean(ratios) < 1.1


def test_a_curled_card_is_named_and_left_out(prospect):
    plan = Plan(turns_deg=(100.0, 100.0), rest_s=0.7)
    track = replace(imagined(prospect, plan, np.random.default_rng(1)), looks=looks_at(prospect, curl=0.03))
    cards = squares_of(track.looks)
    found = calibrate(track, cards)
    assert curled(cards, found.p, found.units) == (10,)
    assert misses_px(cards, found.p, found.units)[1:].max() < 0.1
    _, without = calibrate_steadied(track, camera_path(track))
    assert without.left_out == (10,)
    assert without.alone is not None
    flat = squares_of(looks_at(prospect))
    assert curled(flat, prospect.p, prospect.units) == ()


def test_no_cards_change_nothing(prospect):
    track = imagined(prospect, Plan(turns_deg=(90.0,)), np.random.default_rng(1))
    assert squares_of(track.looks) is None
    _, found = calibrate_steadied(track, camera_path(track))
    assert found.alone is None
    assert found.left_out == ()
