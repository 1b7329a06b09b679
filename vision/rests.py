"""Rest and motion: where the robot stands still, judged against the clip's own noise."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from vision.records import FloatArray

SLOPE_WINDOW_S = 0.08
"""Half the stretch over which a rate is estimated."""

POSSIBLY, SURELY = 5.0, 10.0
"""A speed beyond so many standard deviations of its still level may be, and surely is, a motion."""

WHITE_MARGIN = 4.0
"""Coded pictures jump now and then; their slopes are this much noisier than those of white noise."""

SHORTEST_REST_S = 0.2
"""A shorter stillness is a pause within one turn."""

SMALLEST_TURN_DEG = 0.5
"""A smaller rotation is never a commanded turn; it is reported as a nudge."""

SMALLEST_NUDGE_DEG, NUDGE_NOISES = 0.1, 12.0
"""A slow motion counts if it turns the robot by more than this, and by so many times the noise of a frame.

Coded pictures jump by less at key frames.
"""


@dataclass(frozen=True, slots=True)
class Stretch:
    """Frames ``first`` to ``last``, both included, of the seen frames."""

    first: int
    last: int

    @property
    def n_frames(self) -> int:
        """Number of frames."""
        return self.last - self.first + 1


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Motion:
    """Rates of the seen frames and what counts as moving.

    Parameters
    ----------
    rate_deg_s, speed_mm_s : ndarray, shape (N,)
    moving : ndarray of bool, shape (N,)
    noise_deg : float
        Frame-to-frame noise of the heading while still.
    """

    rate_deg_s: FloatArray
    speed_mm_s: FloatArray
    moving: NDArray[np.bool_]
    noise_deg: float


def find_motion(
    time_s: FloatArray, heading_deg: FloatArray, x_mm: FloatArray, y_mm: FloatArray, *, reach_mm: float
) -> Motion:
    """Tell motion from rest.

    Parameters
    ----------
    time_s, heading_deg, x_mm, y_mm : ndarray, shape (N,)
        Seen frames only; heading unwrapped.
    reach_mm : float
        Distance of the markers from the middle of the pair: makes a rotation comparable with a shift.
    """
    rate = _slope(time_s, heading_deg)
    speed = np.hypot(_slope(time_s, x_mm), _slope(time_s, y_mm))
    noise_deg = _still_noise(heading_deg)
    swept_mm_s = np.abs(np.deg2rad(rate)) * reach_mm
    swept_still = min(_still_level(swept_mm_s), _white_level(time_s, np.deg2rad(heading_deg) * reach_mm))
    speed_still = min(_still_level(speed), np.hypot(_white_level(time_s, x_mm), _white_level(time_s, y_mm)))
    top_mm_s = max(_top(swept_mm_s, swept_still), _top(speed, speed_still))
    turning = _significant(swept_mm_s, swept_still, top_mm_s)
    turning |= _adds_up(swept_mm_s, swept_still, top_mm_s, heading_deg, noise_deg)
    sliding = _significant(speed, speed_still, top_mm_s)
    return Motion(rate_deg_s=rate, speed_mm_s=speed, moving=turning | sliding, noise_deg=noise_deg)


def _slope(time_s: FloatArray, value: FloatArray) -> FloatArray:
    """Return the least-squares slope about each frame over a window of equal time."""
    n_frames = len(time_s)
    if n_frames < 3:
        return np.zeros(n_frames)
    first = np.searchsorted(time_s, time_s - SLOPE_WINDOW_S - 1e-9)
    last = np.searchsorted(time_s, time_s + SLOPE_WINDOW_S + 1e-9) - 1
    first = np.maximum(np.minimum(first, np.arange(n_frames) - 1), 0)
    last = np.minimum(np.maximum(last, np.arange(n_frames) + 1), n_frames - 1)
    t, v = time_s - time_s.mean(), value - value.mean()

    def window_sum(a: FloatArray) -> FloatArray:
        total = np.concatenate([[0.0], np.cumsum(a)])
        return np.asarray(total[last + 1] - total[first])

    n = (last - first + 1).astype(float)
    st, sv = window_sum(t), window_sum(v)
    above = window_sum(t * v) - st * sv / n
    below = window_sum(t * t) - st * st / n
    return np.where(below > 1e-12, above / np.maximum(below, 1e-12), 0.0)


def _still_noise(value: FloatArray) -> float:
    """Return the noise of single frames from the smaller half of second differences."""
    second = np.abs(np.diff(value, 2))
    if len(second) == 0:
        return 0.0
    # For a normal variable the first quartile of |x| is 0.3186 sd; a second difference has sqrt(6) the noise.
    return float(np.quantile(second, 0.25) / 0.3186 / np.sqrt(6.0))


def _still_level(size: FloatArray) -> float:
    """Return the standard deviation of a rate while still, from the smaller rates of the clip."""
    if len(size) == 0:
        return 0.0
    return float(np.quantile(size, 0.2) / 0.2533)  # |normal| has its first fifth below 0.2533 sd


def _white_level(time_s: FloatArray, value: FloatArray) -> float:
    """Return the standard deviation of a slope from the value's own noise, for clips that hardly ever rest."""
    steps = np.diff(time_s)
    frame_s = float(np.median(steps)) if len(steps) else 1.0
    half = max(int(SLOPE_WINDOW_S / max(frame_s, 1e-6)), 1)
    spread = np.sqrt(half * (half + 1) * (2 * half + 1) / 3.0)  # root of the sum of squares from -half to half
    return WHITE_MARGIN * _still_noise(value) / (max(frame_s, 1e-6) * float(spread))


def _top(size: FloatArray, still: float) -> float:
    """Return what the faster motions of the clip reach, outliers left out."""
    fast = size[size > SURELY * still]
    return float(np.quantile(fast, 0.75)) if len(fast) else 0.0


def _significant(size: FloatArray, still: float, top: float) -> NDArray[np.bool_]:
    """Return where a speed is above its still level, in stretches that somewhere are surely above it."""
    low, high = max(POSSIBLY * still, 0.01 * top), max(SURELY * still, 0.06 * top)
    above = size > low
    keep = np.zeros(len(size), dtype=bool)
    for stretch in stretches(above):
        part = slice(stretch.first, stretch.last + 1)
        keep[part] = size[part].max() > high
    return keep


def _adds_up(
    size: FloatArray, still: float, top: float, heading_deg: FloatArray, noise_deg: float
) -> NDArray[np.bool_]:
    """Return where a motion is slow beside the clip's turns and yet leaves the robot at another heading."""
    keep = np.zeros(len(size), dtype=bool)
    for stretch in stretches(size > max(POSSIBLY * still, 0.01 * top)):
        change_deg = abs(heading_deg[stretch.last] - heading_deg[stretch.first])
        if change_deg > max(SMALLEST_NUDGE_DEG, NUDGE_NOISES * noise_deg):
            keep[stretch.first : stretch.last + 1] = True
    return keep


def stretches(flag: NDArray[np.bool_]) -> list[Stretch]:
    """Return the runs of True in `flag`."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], flag, [False]]).astype(np.int8)))
    return [Stretch(int(a), int(b) - 1) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def bridge_pauses(moving: NDArray[np.bool_], time_s: FloatArray) -> NDArray[np.bool_]:
    """Return `moving` with stillnesses shorter than a rest filled in, except at the ends of the clip."""
    bridged = moving.copy()
    for pause in stretches(~moving):
        inner = pause.first > 0 and pause.last < len(moving) - 1
        if inner and time_s[pause.last] - time_s[pause.first] < SHORTEST_REST_S:
            bridged[pause.first : pause.last + 1] = True
    return bridged
