"""Stills: the robot at rest before and after every turn, rectified, cropped, with the fitted pair drawn in.

A still shows the floor as seen from straight above, x to the right and y up as in all tables. Outlines and heading are
drawn from the reported pose through the fitted plane, lens and mounting; the picture underneath is not touched.
"""

from __future__ import annotations

import base64
import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from floorswing.clip_names import is_url
from floorswing.errors import FileError
from floorswing.fingerprint import sha256_of
from floorswing.records import Measurement
from floorswing.report.sight import Sight, Sighter
from vision.errors import VisionError
from vision.frames import Clip, Frame
from vision.markers import as_uint8
from vision.records import FloatArray
from vision.rests import Stretch, stretches

SIDE_PX = 240
"""Side of a still."""
SMALLEST_SIDE_PX, MANY = 150, 60
"""With more than so many stills they shrink, down to this side, so that the page stays small enough to mail."""
FINER = 2
"""A still is taken this many times finer and then averaged, so that nothing flickers."""
COARSE = 16
"""Pixels between the nodes of the map of a still."""
QUALITY = 78
MARGIN = 1.12


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Still:
    """The robot at one rest.

    Parameters
    ----------
    time_s : float
        Of the frame shown.
    jpeg : str
        The picture in base64.
    side_px : int
    outlines : tuple of four corners, each (x, y)
        In the still's pixels: fore marker, aft marker.
    middle : (x, y)
        Middle between the markers.
    heading_deg : float
        As reported for this rest.
    drawn_from : str
        As in `Sight`.
    """

    time_s: float
    jpeg: str
    side_px: int
    outlines: tuple[tuple[tuple[float, float], ...], ...]
    middle: tuple[float, float]
    heading_deg: float
    drawn_from: str


@dataclass(frozen=True, eq=False, kw_only=True, slots=True)
class Evidence:
    """The stills of one clip.

    Parameters
    ----------
    stills : mapping of int to Still
        By number of the rest.
    before, after : mapping of int to int
        Number of the rest before and after each turn.
    missing : str
        Why there are none; empty if there are.
    """

    stills: Mapping[int, Still]
    before: Mapping[int, int]
    after: Mapping[int, int]
    missing: str = ""


def nothing(reason: str) -> Evidence:
    """Return evidence without stills."""
    return Evidence(stills={}, before={}, after={}, missing=reason)


def find_clip(one: Measurement, clips: Path | None) -> Path | str:
    """Return where the measured clip is, or why it cannot be shown.

    Parameters
    ----------
    one : Measurement
    clips : Path or None
        A folder in which to look for a clip of that name; by default its own path.
    """
    kept = one.source.path
    if is_url(kept) and clips is None:
        return f"the clip was measured at {kept} and is not fetched again for pictures; --clips names a folder with it"
    path = clips / Path(str(kept)).name if clips is not None else Path(kept)
    if not path.is_file():
        return (
            f"the clip {path.name} is no longer at {path}, so its pictures cannot be shown; --clips names the folder "
            "where it is now"
        )
    try:
        digest = sha256_of(path)
    except FileError as error:
        return f"{error}; so its pictures cannot be shown"
    if digest != one.source.sha256:
        return (
            f"the file at {path} is not the clip that was measured (its SHA-256 begins {digest[:12]}, that of the clip "
            f"measured {one.source.sha256[:12]}), so its pictures would prove nothing and are left out"
        )
    return path


def collect(one: Measurement, clip: Path | str, progress: Callable[[float], None] | None = None) -> Evidence:
    """Take the stills of a measured clip in one pass.

    Parameters
    ----------
    one : Measurement
        With its track.
    clip : Path or str
        The clip, or why it cannot be shown.
    progress : callable, optional
        Called with the share that is done.
    """
    if isinstance(clip, str):
        return nothing(clip)
    if one.track is None or not one.turns:
        return nothing("no turn was measured in this clip")
    rests, before, after = rests_of(one)
    try:
        sighter = Sighter(one)
    except (KeyError, TypeError, ValueError):
        return nothing("this folder was written by a version that kept no way to draw outlines; measure the clip again")
    stills: dict[int, Still] = {}
    side_px = SIDE_PX if len(rests) <= MANY else max(SMALLEST_SIDE_PX, int(SIDE_PX * math.sqrt(MANY / len(rests))))
    heading = _headings(one, before, after)
    try:
        with Clip(clip) as opened:
            for done, (number, frame) in enumerate(_frames(opened, one, rests)):
                sight = sighter(frame, heading.get(number)) if frame is not None else None
                if frame is not None and sight is not None:
                    stills[number] = _still(frame, sight, MARGIN * sighter.reach_mm, side_px)
                if progress is not None:
                    progress((done + 1) / len(rests))
    except VisionError as error:
        return nothing(f"the clip cannot be read any more: {error}")
    return Evidence(stills=stills, before=before, after=after)


def rests_of(one: Measurement) -> tuple[list[Stretch], dict[int, int], dict[int, int]]:
    """Return the rests that touch a turn, and which of them comes before and after each turn."""
    track = one.track
    assert track is not None
    still = np.array([state == "rest" for state in track.state]) & np.isfinite(track.heading_deg)
    found = stretches(still)
    used: dict[int, int] = {}
    before, after = {}, {}
    for turn in one.turns:
        earlier = [k for k, rest in enumerate(found) if track.time_s[rest.first] < turn.start_s - 1e-3]
        later = [k for k, rest in enumerate(found) if track.time_s[rest.last] > turn.end_s + 1e-3]
        if earlier:
            before[turn.turn] = used.setdefault(earlier[-1], len(used))
        if later:
            after[turn.turn] = used.setdefault(later[0], len(used))
    order = sorted(used, key=lambda k: used[k])
    return [found[k] for k in order], before, after


def _headings(one: Measurement, before: Mapping[int, int], after: Mapping[int, int]) -> dict[int, float]:
    """Return the reported heading of each rest."""
    heading: dict[int, float] = {}
    for turn in one.turns:
        for numbers, value in ((before, turn.start_heading_deg), (after, turn.end_heading_deg)):
            if turn.turn in numbers and math.isfinite(value):
                heading.setdefault(numbers[turn.turn], value)
    return heading


def _frames(clip: Clip, one: Measurement, rests: Sequence[Stretch]) -> Iterator[tuple[int, Frame | None]]:
    """Yield a frame from inside each rest, in order of time."""
    assert one.track is not None
    time_s = one.track.time_s
    order = sorted(range(len(rests)), key=lambda n: rests[n].first)
    spans = []
    for n in order:
        start_s, end_s = float(time_s[rests[n].first]), float(time_s[rests[n].last])
        edge_s = 0.15 * (end_s - start_s)
        spans.append((start_s + edge_s, max(end_s - edge_s, start_s + edge_s)))
    yield from zip(order, clip.frame_in_each(spans), strict=True)


def _rectified(
    frame: Frame,
    to_px: Callable[[FloatArray], FloatArray],
    middle: FloatArray,
    reach_mm: float,
    side_px: int,
) -> NDArray[np.uint8]:
    """Return the floor about a point as seen from straight above, shape (side_px, side_px)."""
    place = _places(to_px, middle, reach_mm, side_px * FINER)
    x0, y0 = np.floor(place.reshape(-1, 2).min(axis=0)).astype(int) - 2
    x1, y1 = np.ceil(place.reshape(-1, 2).max(axis=0)).astype(int) + 3
    x0, y0 = max(x0, 0), max(y0, 0)
    cut = as_uint8(frame.luma[y0 : max(y1, y0 + 1), x0 : max(x1, x0 + 1)])
    if cut.size == 0:
        return np.full((side_px, side_px), 128, np.uint8)
    x, y = np.moveaxis(place - np.array([x0, y0], np.float32), -1, 0)
    fine = cv2.remap(
        cut, x.copy(), y.copy(), cv2.INTER_LINEAR, borderMode=cv2.BORDER_CONSTANT, borderValue=(128.0,)
    )  # fmt: skip
    return np.asarray(cv2.resize(fine, (side_px, side_px), interpolation=cv2.INTER_AREA), dtype=np.uint8)


def _places(to_px: Callable[[FloatArray], FloatArray], middle: FloatArray, reach_mm: float, n: int) -> FloatArray:
    """Return where each pixel of a still of n by n lies in the picture, shape (n, n, 2).

    The map is asked at every `COARSE`-th pixel, one ring beyond the still, and is straight enough in between.
    """
    n_nodes = -(-n // COARSE) + 2
    step = ((np.arange(n_nodes) - 0.5) * COARSE) / n * 2.0 - 1.0
    across, down = np.meshgrid(middle[0] + step * reach_mm, middle[1] - step * reach_mm)
    nodes = to_px(np.stack([across, down], axis=-1)).astype(np.float32)
    fine = cv2.resize(nodes, (n_nodes * COARSE, n_nodes * COARSE), interpolation=cv2.INTER_LINEAR)
    return np.asarray(fine[COARSE : COARSE + n, COARSE : COARSE + n])


def _still(frame: Frame, sight: Sight, reach_mm: float, side_px: int) -> Still:
    picture = _rectified(frame, sight.to_px, sight.middle_mm, reach_mm, side_px)
    scale, centre = side_px / (2.0 * reach_mm), 0.5 * side_px

    def drawn(point: FloatArray) -> tuple[float, float]:
        x, y = point - sight.middle_mm
        return round(centre + scale * float(x), 1), round(centre - scale * float(y), 1)

    good, data = cv2.imencode(".jpg", picture, [cv2.IMWRITE_JPEG_QUALITY, QUALITY])
    return Still(
        time_s=frame.time_s,
        jpeg=base64.b64encode(data.tobytes()).decode("ascii") if good else "",
        side_px=side_px,
        outlines=tuple(tuple(drawn(corner) for corner in quad) for quad in sight.outlines_mm),
        middle=(centre, centre),
        heading_deg=sight.heading_deg,
        drawn_from=sight.drawn_from,
    )
