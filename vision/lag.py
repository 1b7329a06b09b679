"""The lag of a coded picture: after a motion a coder leaves the last small displacements uncoded for a while.

The whole robot is then shown a few hundredths of a pixel behind, in the direction it came from; no misfit betrays it,
since all corners lag together. The next key frame is coded afresh and shows the truth. Rests with a key frame inside
therefore need no correction, and their jumps at the key frame tell how large the lag of the other rests is.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from vision.turns import Seen

FEWEST_FRAMES = 3
"""Frames before and after a key frame that are needed to see a jump."""

USUAL_LAG_PX = 0.0075
"""What coders usually leave of a displacement (type B), at the markers' distance from the middle of the pair.

Over 31 clips of development (H.264 and HEVC, 1 to 50 Mbit/s) jumps at key frames were 0.005 px in the root mean square.
"""

USUAL_COUNTS = 1.0
"""How many observed jumps the usual lag counts for: single rests may lag far more than the others."""


@dataclass(frozen=True, slots=True)
class Lag:
    """How far headings at rests without a key frame lag behind.

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


def coding_lag(seen: Seen, stills: list[NDArray[np.intp]], settle_s: float) -> Lag:
    """Return the lag of a clip from the jumps at key frames inside its rests.

    Parameters
    ----------
    seen : Seen
    stills : list of ndarray of int
        Frames of each rest that follows a motion.
    settle_s : float
        Time after the motion from which headings of rests without a key frame are used.
    """
    if np.all(seen.is_key):
        return Lag(0.0, 0)
    jumps = [jump for frames in stills if (jump := _jump_deg(seen, frames, settle_s)) is not None]
    usual_deg = float(np.degrees(USUAL_LAG_PX / seen.reach_px)) * _frozen(seen, stills)
    square = np.sum(np.square(jumps)) + USUAL_COUNTS * usual_deg**2
    return Lag(float(np.sqrt(square / (len(jumps) + USUAL_COUNTS))), len(jumps))


def _jump_deg(seen: Seen, frames: NDArray[np.intp], settle_s: float) -> float | None:
    place = key_place(seen, frames)
    if place is None or place < FEWEST_FRAMES:
        return None
    before, after = frames[:place], frames[place:]
    since_s = seen.time_s[before] - seen.time_s[before[0]]
    late = before[since_s >= min(settle_s, 0.5 * since_s[-1])]
    return float(seen.heading_deg[after].mean() - seen.heading_deg[late].mean())


def _frozen(seen: Seen, stills: list[NDArray[np.intp]]) -> float:
    """Return how far the picture at rest is frozen: 0 if every frame has fresh noise, 1 if none has."""
    steps = [np.diff(seen.heading_deg[frames]) for frames in stills if len(frames) > 2]
    if not steps:
        return 1.0
    fresh = float(np.median(np.abs(np.concatenate(steps)))) / 0.6745 / np.sqrt(2.0)
    expected = float(np.median(seen.u_heading_deg))
    return float(np.sqrt(max(1.0 - min(fresh / expected, 1.0) ** 2, 0.0))) if expected > 0.0 else 1.0
