"""The lag of a coded picture: after a motion a coder leaves the last small displacements uncoded for a while.

The whole robot is then shown a few hundredths of a pixel behind, in the direction it came from; no misfit betrays it,
since all corners lag together. The next key frame is coded afresh and shows the truth, so headings of rests with a key
frame inside are taken from there on. In the other rests the picture is still catching up: the way it made during the
rest says how far it has yet to go. What that leaves open is found from the jumps at key frames.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from vision.turns import Seen

FEWEST_FRAMES = 3
"""Frames before and after a key frame that are needed to see a jump."""

USUAL_LAG_PX = 0.003
"""What is left of the lag once it is put right (type B), at the markers' distance from the middle of the pair.

Over 108 rests of 40 rendered clips (H.264 and HEVC, 1 to 50 Mbit/s) it was 0.0025 px in the root mean square.
"""

USUAL_COUNTS = 2.0
"""How many observed jumps the usual lag counts for: single rests may lag far more than the others."""

SETTLED_S, SETTLED_SHARE = 0.6, 0.75
"""A coded picture settles only some time after the motion has stopped; that much of a rest is passed over."""

ONSET_S, ONSET_SHARE = 0.2, 0.25
"""The catching up is counted from the mean of this first part of a rest."""

YET_TO_GO = 0.5
"""Share of the way made during the rest that is yet to go, known to about as much again (type B).

A coder refines in steps that shrink. In 108 rests without a key frame the best share was 0.51 and the root mean square
of what was left 3.7 instead of 5.5 thousandths of a degree.
"""


@dataclass(frozen=True, slots=True)
class Lag:
    """How far headings at rests without a key frame lag behind, once put right.

    Parameters
    ----------
    u_deg : float
        Standard uncertainty of such a heading from the lag.
    n_jumps : int
        Key frames that it was found from; 0 if it is the usual value alone (type B).
    """

    u_deg: float
    n_jumps: int


def key_place(seen: Seen, frames: NDArray[np.intp]) -> int | None:
    """Return where in the frames of a rest the first usable key frame is; None without one."""
    keys = np.flatnonzero(seen.is_key[frames])
    usable = keys[len(frames) - keys >= FEWEST_FRAMES]
    return int(usable[0]) if len(usable) else None


def settled(seen: Seen, frames: NDArray[np.intp]) -> NDArray[np.intp]:
    """Return the frames at the end of a rest without a key frame, in which most of the lag is gone."""
    since_s = seen.time_s[frames] - seen.time_s[frames[0]]
    late: NDArray[np.intp] = frames[since_s >= min(SETTLED_S, SETTLED_SHARE * since_s[-1])]
    return late


def catching_up_deg(seen: Seen, frames: NDArray[np.intp]) -> float:
    """Return what is to be added to the heading of a rest's settled frames, signed like the turn before; else 0.

    Parameters
    ----------
    seen : Seen
    frames : ndarray of int
        Frames of a rest that follows a motion, up to its key frame if there is one.
    """
    if len(frames) < 2 * FEWEST_FRAMES or frames[0] < 1:
        return 0.0
    came_from = max(int(frames[0]) - 8, 0)
    side = float(np.sign(seen.heading_deg[frames[0]] - seen.heading_deg[came_from]))
    since_s = seen.time_s[frames] - seen.time_s[frames[0]]
    onset, late = frames[since_s <= min(ONSET_S, ONSET_SHARE * since_s[-1])], settled(seen, frames)
    way_deg = side * float(seen.heading_deg[late].mean() - seen.heading_deg[onset].mean())
    # What jitters from frame to frame makes ways too.
    jitter_deg2 = 0.5 * float(np.mean(np.diff(seen.heading_deg[frames]) ** 2))
    noise_deg = math.sqrt(jitter_deg2 * (1.0 / len(onset) + 1.0 / len(late)))
    if way_deg <= noise_deg:
        return 0.0
    return side * YET_TO_GO * way_deg * (1.0 - (noise_deg / way_deg) ** 2)


def coding_lag(seen: Seen, stills: list[NDArray[np.intp]], noise_deg2: float = 0.0) -> Lag:
    """Return the lag of a clip from the jumps at key frames inside its rests.

    Parameters
    ----------
    seen : Seen
    stills : list of ndarray of int
        Frames of each rest that follows a motion.
    noise_deg2 : float
        Variance of a jump from what averaging leaves of noise and coding.
    """
    if np.all(seen.is_key):
        return Lag(0.0, 0)
    squares = [square for frames in stills if (square := _jump_deg2(seen, frames)) is not None]
    usual_deg = float(np.degrees(USUAL_LAG_PX / seen.reach_px)) * _frozen(seen, stills)
    found = max(float(np.sum(squares)) - len(squares) * noise_deg2, 0.0)
    return Lag(float(np.sqrt((found + USUAL_COUNTS * usual_deg**2) / (len(squares) + USUAL_COUNTS))), len(squares))


def _jump_deg2(seen: Seen, frames: NDArray[np.intp]) -> float | None:
    """Return the square of the jump at a rest's key frame, beyond what its catching up explains."""
    place = key_place(seen, frames)
    if place is None or place < FEWEST_FRAMES:
        return None
    before, after = frames[:place], frames[place:]
    yet_deg = catching_up_deg(seen, before)
    jump_deg = float(seen.heading_deg[after].mean() - seen.heading_deg[settled(seen, before)].mean()) - yet_deg
    return max(jump_deg**2 - yet_deg**2, 0.0)


def _frozen(seen: Seen, stills: list[NDArray[np.intp]]) -> float:
    """Return how far the picture at rest is frozen: 0 if every frame has fresh noise, 1 if none has."""
    steps = [np.diff(seen.heading_deg[frames]) for frames in stills if len(frames) > 2]
    if not steps:
        return 1.0
    fresh = float(np.median(np.abs(np.concatenate(steps)))) / 0.6745 / np.sqrt(2.0)
    expected = float(np.median(seen.u_heading_deg))
    return float(np.sqrt(max(1.0 - min(fresh / expected, 1.0) ** 2, 0.0))) if expected > 0.0 else 1.0
