"""Which stretches of a clip need not be decoded in full: those between two key frames in which nothing moved.

A key frame costs a fraction of what a second of film costs, and shows whether anything has moved since the one before.
If nothing has, the frames between the two are passed over, all but a few next to a motion. A whole excursion between
two key frames, out and back to the same place within the noise, would be lost; a push that leaves its trace is not.
Two things are watched against that: no stretch longer than `LONGEST_S` is passed over, and none in which the coder
spent far more on a frame than in the quietest one; where coded noise drowns what a motion costs, that says nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

LONGEST_S = 2.5
"""A longer time between key frames is always decoded in full."""

KEPT_S = 0.35
"""So much of a still stretch next to a motion is decoded after its key frame."""

LOOK_BACK_S = 0.15
"""Whether the picture moves is judged from frames that far apart."""

EVERY_PX = 3
BLOCK = 8
"""Pictures are compared at every third pixel, in blocks of so many of these."""

MOVED_NOISES, MOVED_GREY = 3.0, 1.5
"""A block has moved if it differs by more than so many times what blocks usually do, and by this."""

DEAR, DEAR_BYTES = 2.0, 50
"""A frame that took more than so many times what the dearest frame of the quietest group took, and this, may move."""



@dataclass(eq=False, slots=True)
class Group:
    """The packets from one key frame to the next, and what is known of them.

    Parameters
    ----------
    packets : list
        In the order of decoding; the first is a key frame.
    times_s : list of float
        When each is shown.
    closed : bool
        Whether the group needs no other, that is, no packet is shown before its key frame.
    key : object
        The decoded key frame, once it is known.
    moved : bool
        Whether anything moves in it, or may.
    """

    packets: list[Any]
    times_s: list[float]
    closed: bool
    key: Any = None
    moved: bool = True
    sizes: list[int] = field(default_factory=list)


def grouped(packets: Iterable[Any], time_of: Callable[[Any], float]) -> Iterator[Group]:
    """Yield the packets in groups that start with a key frame."""
    kept: list[Any] = []
    for packet in packets:
        if packet.is_keyframe and kept:
            yield _group(kept, time_of)
            kept = []
        kept.append(packet)
    if kept:
        yield _group(kept, time_of)


def _group(packets: list[Any], time_of: Callable[[Any], float]) -> Group:
    times_s = [time_of(packet) for packet in packets]
    closed = bool(packets[0].is_keyframe) and all(time_s >= times_s[0] for time_s in times_s)
    return Group(packets, times_s, closed, sizes=[packet.size for packet in packets])


def picture_moved(before: NDArray[Any], after: NDArray[Any]) -> bool:
    """Return whether anything in the picture moved between two frames, shape (height, width) each.

    Differences of blocks are compared with what they usually are, so that noise and coding, which are everywhere, do
    not count and a small robot does.
    """
    a = np.ascontiguousarray(before[::EVERY_PX, ::EVERY_PX])
    b = np.ascontiguousarray(after[::EVERY_PX, ::EVERY_PX])
    if a.shape != b.shape:
        return True
    apart = cv2.absdiff(a, b).astype(np.float32)
    deep = 1.0 if a.dtype == np.uint8 else 4.0  # 10 bits hold grey values four times as fine
    size = (max(a.shape[1] // BLOCK, 1), max(a.shape[0] // BLOCK, 1))
    blocks = cv2.resize(apart, size, interpolation=cv2.INTER_AREA)
    usual = float(np.median(blocks))
    return bool(blocks.max() > max(MOVED_NOISES * usual, MOVED_GREY * deep))


def may_be_passed_over(group: Group, following: Group) -> bool:
    """Return whether a group is of the kind that can be passed over at all."""
    length_s = following.times_s[0] - group.times_s[0]
    return group.closed and following.closed and 0.0 < length_s <= LONGEST_S


def n_kept(group: Group) -> int:
    """Return how many packets of a still group to decode where it lies next to a motion."""
    return max(sum(time_s <= group.times_s[0] + KEPT_S for time_s in group.times_s), 1)


def dearest(group: Group) -> float:
    """Return the size of the largest packet of a group but its key frame, in bytes; infinite if there is none."""
    return float(max(group.sizes[1:], default=np.inf))


def is_dear(group: Group, quiet: float) -> bool:
    """Return whether the coder spent far more on some frame than it needs for a still one: something may move there.

    Parameters
    ----------
    group : Group
    quiet : float
        `dearest` of the quietest group so far.
    """
    return bool(group.sizes[1:]) and dearest(group) > DEAR * quiet + DEAR_BYTES


def time_unread(passed_over: Sequence[tuple[float, float]], time_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return how much of the time between neighbouring frames was passed over, shape (N - 1,)."""
    unread = np.zeros(max(len(time_s) - 1, 0))
    for start_s, end_s in passed_over:
        inside = np.minimum(time_s[1:], end_s) - np.maximum(time_s[:-1], start_s)
        unread += np.maximum(inside, 0.0)
    return unread
