from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.vision.synthetic import seen_from
from vision.budget import RestHeading, change_uncertainty, frozen_share, pooled_share
from vision.lag import Lag, coding_lag
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


def test_the_worked_example_of_the_documentation():
    seen = seen_with((0.64, 0.36), lever=0.0040)
    cov = np.zeros((N_GLOBAL, N_GLOBAL))
    cov[0, 0] = 1.0
    share = pooled_share(seen.left, [rest(FIRST), rest(SECOND)])
    u = change_uncertainty(seen, rest(FIRST), rest(SECOND, lags=True), cov, share, Lag(0.0060, 5), camera_still=True)
    print(f"u = {u:.4f} deg, expanded {2 * u:.3f} deg")
    assert_allclose(share, 0.50, rtol=1e-12)
    assert_allclose(u, np.sqrt(77.00e-6), rtol=1e-12)


def test_white_noise_averages_and_frozen_errors_do_not():
    rng = np.random.default_rng(1)
    white = rng.normal(0, 1, (4000, 16))
    assert_allclose(frozen_share(white[:400], np.arange(400)), 16 / 13 / 400, rtol=1.2)  # one chi-square of 16
    frozen = np.broadcast_to(rng.normal(0, 1, 16), (400, 16))
    assert_allclose(frozen_share(frozen, np.arange(400)), np.sum(frozen[0] ** 2) / 13, rtol=1e-12)


def test_a_camera_in_the_hand_adds_its_own_scatter():
    seen = seen_with((0.5, 0.5))
    pair = rest(FIRST), rest(SECOND)
    none = np.zeros((N_GLOBAL, N_GLOBAL))
    still = change_uncertainty(seen, *pair, none, 0.5, Lag(0.0, 0), camera_still=True)
    moved = change_uncertainty(seen, *pair, none, 0.5, Lag(0.0, 0), camera_still=False)
    assert moved > still


def test_lag_from_the_jumps_at_key_frames():
    time_s = np.arange(90) / 30.0
    heading = np.where(time_s > 1.0, 0.02, 0.0)
    keys = np.zeros(90, bool)
    keys[31] = True
    seen = replace(seen_from(time_s, heading, noise_deg=1e-6), is_key=keys, u_heading_deg=np.full(90, 0.01))
    found = coding_lag(seen, [np.arange(15, 60)], 0.4)
    usual = np.degrees(0.0075 / seen.reach_px)
    assert found.n_jumps == 1
    # One jump of 0.02, and the usual lag counted once; frozen headings make the usual lag count in full.
    assert_allclose(found.u_deg, np.sqrt((0.02**2 + usual**2) / 2), rtol=0.01)


@pytest.mark.parametrize("keys", [True, False])
def test_a_clip_of_key_frames_alone_has_no_lag(keys):
    seen = seen_from(np.arange(60) / 30.0, np.zeros(60))
    seen = replace(seen, is_key=np.full(60, keys))
    lag = coding_lag(seen, [np.arange(60)], 0.4)
    assert (lag.u_deg == 0.0) == keys
