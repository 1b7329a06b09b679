"""Corner tracks and pose series without pictures: exact geometry and known noise."""

import numpy as np

from vision.observations import CornerTrack
from vision.pair import body_from_corners
from vision.plane import AFT_SIZE, BASE, LIFT, N_GLOBAL, SHAPE, project_pair, units_for
from vision.template import Optics
from vision.turns import Seen

IMAGE_PX = (1920, 1080)
SIDE_MM, BASE_MM = 40.0, 130.0


def truth(*, k1=-0.06, lift=(0.0, 0.0), size=1.0):
    """Return global parameters of an ordinary scene, and its units."""
    units = units_for(IMAGE_PX, side_mm=SIDE_MM, length_mm=BASE_MM)
    p = np.zeros(N_GLOBAL)
    p[SHAPE] = 0.118, 0.004, 0.114, -0.004, 0.021
    p[5], p[BASE], p[AFT_SIZE], p[LIFT] = k1, 1.0, size, lift
    return p, units


def corner_track(headings_deg, *, p, units, noise_px=0.02, seed=0, place=(1.2, -0.6)):
    """Return a track of the pair at these headings (counter-clockwise), with white noise on the corners."""
    n = len(headings_deg)
    poses = np.column_stack([-np.deg2rad(headings_deg), np.full(n, place[0]), np.full(n, -place[1])])
    exact = project_pair(p, poses, units).corners_px
    corners_px = (exact + np.random.default_rng(seed).normal(0.0, noise_px, exact.shape)).reshape(n, 2, 4, 2)
    body = body_from_corners(exact[0].reshape(2, 4, 2), SIDE_MM)
    assert body is not None
    return CornerTrack(
        time_s=np.arange(n) / 30.0,
        is_key=np.arange(n) % 30 == 0,
        corners_px=corners_px,
        information=np.broadcast_to(np.eye(8, dtype=np.float32) / noise_px**2, (n, 2, 8, 8)).copy(),
        noise_var=np.full((n, 2), 1e-4),
        explained=np.full((n, 2), 0.99),
        smear_px=np.zeros(n),
        repeat=np.zeros(n, dtype=bool),
        body=body,
        optics=Optics(0.85),
        exposure_s=0.0,
        image_px=IMAGE_PX,
    )


def profile(turns_deg, *, rate_deg_s=90.0, rest_s=0.8, frame_s=1 / 30.0, start_deg=0.0, ramp_s=0.15):
    """Return times and headings of spins at a constant rate, with linear ramps, between rests."""
    headings = [np.full(round(rest_s / frame_s), start_deg)]
    now = start_deg
    for turn in turns_deg:
        length_s = max(abs(turn) / rate_deg_s, ramp_s) + ramp_s
        t = np.arange(1, int(np.ceil(length_s / frame_s)) + 1) * frame_s
        pace = np.clip(np.minimum(t, length_s - t) / ramp_s, 0.0, 1.0)
        share = np.cumsum(pace) / pace.sum()
        headings += [now + turn * share, np.full(round(rest_s / frame_s), now + turn)]
        now += turn
    heading = np.concatenate(headings)
    return np.arange(len(heading)) * frame_s, heading


def seen_from(time_s, heading_deg, *, noise_deg=0.003, seed=0, keep=None, x_mm=0.0, scale=1.0):
    """Return what `vision.turns` splits, from a heading series; `keep` chooses the frames that are seen."""
    n = len(time_s)
    rng = np.random.default_rng(seed)
    keep = np.ones(n, bool) if keep is None else keep
    turn = np.deg2rad(heading_deg)
    return Seen(
        index=np.flatnonzero(keep),
        time_s=time_s[keep],
        gap_s=np.diff(time_s[keep]),
        heading_deg=(heading_deg + rng.normal(0, noise_deg, n))[keep],
        x_mm=(x_mm + 12.0 * np.cos(turn) + rng.normal(0, 0.01, n))[keep],
        y_mm=(12.0 * np.sin(turn) + rng.normal(0, 0.01, n))[keep],
        scale=(scale + rng.normal(0, 1e-4, n))[keep],
        residual_px=np.full(n, 0.03)[keep],
        u_heading_deg=np.full(n, noise_deg)[keep],
        by_global=np.zeros((n, N_GLOBAL))[keep],
        left=rng.normal(0, 1, (n, 16))[keep],
        clear=np.ones(n, bool)[keep],
        is_key=np.ones(n, bool)[keep],
        reach_mm=65.0,
        reach_px=60.0,
        end_s=float(time_s[-1]),
        frame_s=float(np.median(np.diff(time_s))),
    )
