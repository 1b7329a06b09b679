from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.vision.synthetic import seen_from
from vision.budget import (
    STEADY,
    ClipErrors,
    RestHeading,
    ViewNoise,
    change_uncertainty,
    errors_of,
    frozen_share,
    heading_after,
    pooled_share,
    view_noise,
    view_variance_deg2,
)
from vision.lag import YET_TO_GO, Lag, catching_up_deg, coding_lag
from vision.plane import N_GLOBAL
from vision.rests import Stretch

FIRST, SECOND = np.arange(0, 20), np.arange(30, 50)


def rest(frames, *, lags=False):
    return RestHeading(still=Stretch(int(frames[0]), int(frames[-1])), lags=lags, before=frames, after=frames)


def seen_with(shares, *, u_deg=0.0050, lever=0.0):
    """Return 50 frames whose averaged residuals have these shares in the two rests."""
    seen = seen_from(np.arange(50) / 30.0, np.zeros(50), noise_deg=u_deg)
    left = np.zeros((50, 16))
    for frames, share in zip((FIRST, SECOND), shares, strict=True):
        left[frames] = np.sqrt(13.0 * share / 16.0)
    by_global = np.zeros((50, N_GLOBAL))
    by_global[SECOND, 0] = lever
    return replace(seen, left=left, by_global=by_global)


NONE = np.zeros((N_GLOBAL, N_GLOBAL))


def errors(**changes):
    """Return the errors of a clip in which nothing errs but what is given."""
    none = {"cov": NONE, "share": 0.0, "lag": Lag(0.0, 0), "view": STEADY, "n_rests": 2, "plane_freedom": 12.0}
    return ClipErrors(**{**none, **changes})


def test_every_contribution_adds_in_squares():
    seen = seen_with((0.64, 0.36), lever=0.0040)
    cov = NONE.copy()
    cov[0, 0] = 1.0
    share = pooled_share(seen.left, [rest(FIRST), rest(SECOND)])
    assert_allclose(share, 0.50, rtol=1e-12)
    first, second = rest(FIRST), replace(rest(SECOND, lags=True), behind_deg=-0.0020)
    found = change_uncertainty(seen, first, second, errors(cov=cov, share=share, lag=Lag(0.0060, 5)))
    rests = 0.5 * (0.57 + 0.43) * 0.0050**2
    assert_allclose(found.u, np.sqrt(rests + 0.0060**2 + 0.0020**2 + 0.0040**2), rtol=1e-6)
    assert 7.0 < found.degrees_of_freedom < 40.0
    assert found.expanded > 2.0 * found.u


def test_the_camera_s_edges_turn_half_a_revolution_most():
    """A displacement d one way errs by 2 d sin(turn / 2) / reach in the difference of two headings."""

    def u_deg(turn_deg):
        seen = seen_from(np.arange(50) / 30.0, np.where(np.arange(50) < 25, 0.0, turn_deg), noise_deg=1e-9)
        return change_uncertainty(seen, rest(FIRST), rest(SECOND), errors()).u

    assert u_deg(0.0) < 1e-9
    assert_allclose(u_deg(180.0), np.degrees(2.0 * 0.0012 / 60.0), rtol=1e-6)
    assert_allclose(u_deg(60.0), 0.5 * u_deg(180.0), rtol=1e-6)


def test_white_noise_averages_and_frozen_errors_do_not():
    rng = np.random.default_rng(1)
    white = rng.normal(0, 1, (4000, 16))
    assert_allclose(frozen_share(white[:400], np.arange(400)), 16 / 13 / 400, rtol=1.2)  # one chi-square of 16
    frozen = np.broadcast_to(rng.normal(0, 1, 16), (400, 16))
    assert_allclose(frozen_share(frozen, np.arange(400)), np.sum(frozen[0] ** 2) / 13, rtol=1e-12)


def test_a_view_held_by_cards_scatters_afresh_and_slowly():
    rng = np.random.default_rng(3)
    rests = [np.arange(50 * k, 50 * k + 20) for k in range(40)]
    seen = seen_from(np.arange(2000) / 30.0, np.zeros(2000), noise_deg=0.02)
    fresh = view_noise(seen, rests)
    assert_allclose(fresh.fresh, 0.02**2, rtol=0.15)
    assert fresh.slow < 0.15 * fresh.fresh
    drift = np.repeat(rng.normal(0.0, 0.02, 200), 10)  # another error every third of a second
    slow = view_noise(replace(seen, heading_deg=seen.heading_deg + drift), rests)
    assert slow.slow > 2.0 * fresh.slow + 1e-4
    variance = view_variance_deg2(seen, np.arange(19), ViewNoise(4e-4, 9e-4, 100))
    assert_allclose(variance, 4e-4 / 19 + 9e-4 / 2.0, rtol=1e-9)  # 0.6 s are two stretches


def test_a_camera_in_the_hand_adds_its_own_scatter():
    seen = seen_with((0.5, 0.5))
    pair = rest(FIRST), rest(SECOND)
    still, moved = (errors_of(seen, pair, NONE, Lag(0.0, 0), camera_still=still) for still in (True, False))
    assert change_uncertainty(seen, *pair, moved).u > change_uncertainty(seen, *pair, still).u


def catching_up(*, rate=0.5, behind_deg=0.04, n=20, noise_deg=1e-6, side=1.0):
    """Return frames 10 to 10 + n of a rest after a turn, in which a frozen picture catches up by halves."""
    time_s = np.arange(60) / 30.0
    since = np.clip(time_s - 10 / 30.0, 0.0, None)
    heading = np.where(time_s < 10 / 30.0 - 1e-9, -1.0, -behind_deg * rate ** (since / 0.25))
    return seen_from(time_s, side * heading, noise_deg=noise_deg), np.arange(10, 10 + n)


@pytest.mark.parametrize("side", [1.0, -1.0])
def test_a_picture_that_catches_up_has_some_way_to_go(side):
    seen, frames = catching_up(side=side)
    found = catching_up_deg(seen, frames)
    assert np.sign(found) == side
    late = seen.heading_deg[frames[-5:]].mean()
    assert abs(late + found) < 0.6 * abs(late)
    way = abs(late - seen.heading_deg[frames[:5]].mean())
    assert_allclose(abs(found), YET_TO_GO * way, rtol=0.05)
    with_it = replace(rest(frames[-5:], lags=True), behind_deg=found)
    assert_allclose(heading_after(seen, with_it), late + found, rtol=1e-12)


def test_a_heading_that_jitters_or_creeps_the_other_way_is_not_corrected():
    seen, frames = catching_up(behind_deg=0.0, noise_deg=0.02)
    assert abs(catching_up_deg(seen, frames)) < 0.02
    swung, frames = catching_up(behind_deg=-0.04)
    assert catching_up_deg(swung, frames) == 0.0


def test_lag_from_the_jumps_at_key_frames():
    time_s = np.arange(90) / 30.0
    heading = np.where(time_s > 1.0, 0.02, 0.0)
    keys = np.zeros(90, bool)
    keys[31] = True
    seen = replace(seen_from(time_s, heading, noise_deg=1e-6), is_key=keys, u_heading_deg=np.full(90, 0.01))
    found = coding_lag(seen, [np.arange(15, 60)])
    usual = np.degrees(0.003 / seen.reach_px)
    assert found.n_jumps == 1
    # One jump of 0.02, and the usual lag counted twice; frozen headings make the usual lag count in full.
    assert_allclose(found.u_deg, np.sqrt((0.02**2 + 2.0 * usual**2) / 3.0), rtol=0.01)
    less = coding_lag(seen, [np.arange(15, 60)], 0.01**2)
    assert_allclose(less.u_deg, np.sqrt((0.02**2 - 0.01**2 + 2.0 * usual**2) / 3.0), rtol=0.01)


@pytest.mark.parametrize("keys", [True, False])
def test_a_clip_of_key_frames_alone_has_no_lag(keys):
    seen = seen_from(np.arange(60) / 30.0, np.zeros(60))
    seen = replace(seen, is_key=np.full(60, keys))
    lag = coding_lag(seen, [np.arange(60)])
    assert (lag.u_deg == 0.0) == keys
