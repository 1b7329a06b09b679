"""A camera that does not stand still: every frame is brought to one reference view through the floor cards.

The cards lie on the floor, the markers on a deck above it. Two parallel planes share their horizon and their circles,
so a homography that holds the cards still holds the deck's directions still as well; what remains is a shift and a
scale of the deck, which the robot's pose takes up. Headings are therefore right though the cards are lower.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import cv2
import numpy as np
from numpy.typing import NDArray

from vision.bundle import Calibration, calibrate
from vision.card_squares import as_flat_as_they_are, curled, squares_of
from vision.errors import PlaneError
from vision.ground import GroundPath
from vision.observations import CardLook, CornerTrack
from vision.plane import LENS, Units, distort, undistort, units_for
from vision.records import FloatArray
from vision.rigid import project

STILL_PX = 0.12
"""Cards that never shift by more than this (median over cards, against noise) belong to a camera that stands."""

AVERAGE_S = 0.4
"""Looks this near in time are averaged while the camera stands."""

SLOW_PX = 0.6
"""Between two looks no farther apart than this the view is taken to have moved evenly."""

OUTLIER_PX = 1.0
"""A card that misses the common motion by more than this, most of the time, was moved or is not flat."""

USUAL_MISSES = 10.0
"""A corner is left out of the map of a look only if it misses by so many times what corners usually do: in a warped
picture all miss by a pixel now and then, and leaving out now these, now those makes the view jump."""

FEWEST_TO_WARP = 3

WELL_TURNED_RAD = 2.1
"""With less rotation of the robot it matters how flat the cards show themselves to be."""

ENOUGH_RAD = 1.4
"""A still stretch in which the robot turned through this much calibrates the plane by itself."""


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class CameraPath:
    """How the camera moved, as far as the cards tell, or the floor itself where there are none.

    Parameters
    ----------
    still : bool
    shift_px : float
        Largest shift of the cards from the reference view.
    spans : tuple of (start_s, end_s)
        Stretches in which it moved.
    strays : tuple of int
        Cards left out because they did not move with the others.
    n_cards : int
        Cards used.
    checked : bool
        Whether cards or floor showed enough to tell.
    best : (start_s, end_s) or None
        The longest stretch in which the camera stood still, where no card holds the view steady.
    stills : tuple of (start_s, end_s)
        All such stretches.
    """

    still: bool
    shift_px: float
    spans: tuple[tuple[float, float], ...]
    strays: tuple[int, ...]
    n_cards: int
    checked: bool = True
    best: tuple[float, float] | None = None
    stills: tuple[tuple[float, float], ...] = ()

    @property
    def held(self) -> bool:
        """Whether cards hold the view of a camera that moved."""
        return not self.still and self.n_cards > 0

    @property
    def loose(self) -> bool:
        """Whether the camera moved and nothing holds the view."""
        return not self.still and self.n_cards == 0


@dataclass(frozen=True, eq=False, slots=True)
class _Looks:
    time_s: FloatArray  # (T,)
    ids: tuple[int, ...]  # K cards
    corners_px: FloatArray  # (T, K, 4, 2), NaN where not seen
    u_px: float


def camera_path(corners: CornerTrack, ground: GroundPath | None = None) -> CameraPath:
    """Return how the camera moved: by the cards, or by the floor itself where there are none."""
    looks = _table(corners.looks)
    if looks is None:
        return _by_ground(ground, strays=())
    strays = _strays(looks)
    keep = [k for k, number in enumerate(looks.ids) if number not in strays]
    shift = _shift_px(looks.corners_px[:, keep], looks.corners_px[_reference(looks), keep])
    limit = max(STILL_PX, 6.0 * looks.u_px)
    largest = float(np.nanmax(shift, initial=0.0))
    return CameraPath(
        still=largest <= limit,
        shift_px=largest,
        spans=_spans(looks, keep, limit),
        strays=strays,
        n_cards=len(keep),
    )


def _by_ground(ground: GroundPath | None, strays: tuple[int, ...]) -> CameraPath:
    if ground is None or not ground.known:
        return CameraPath(still=True, shift_px=0.0, spans=(), strays=strays, n_cards=0, checked=False)
    end_s = float(ground.time_s[-1])
    stills = ground.stills()
    borders = [0.0, *(moment for still in stills for moment in still), end_s]
    gaps = [(a, b) for a, b in zip(borders[::2], borders[1::2], strict=True) if b - a > 1e-6]
    return CameraPath(
        still=not gaps,
        shift_px=float(np.nanmax(np.linalg.norm(ground.shift_px, axis=1))),
        spans=tuple(gaps),
        strays=strays,
        n_cards=0,
        best=max(stills, key=lambda still: still[1] - still[0], default=None) if gaps else None,
        stills=tuple(stills) if gaps else (),
    )


def _table(looks: tuple[CardLook, ...]) -> _Looks | None:
    if not looks:
        return None
    times = np.array(sorted({look.time_s for look in looks}))
    ids = tuple(sorted({look.card_id for look in looks}))
    corners = np.full((len(times), len(ids), 4, 2), np.nan)
    row = {t: n for n, t in enumerate(times)}
    for look in looks:
        corners[row[look.time_s], ids.index(look.card_id)] = look.corners_px
    return _Looks(times, ids, corners, float(np.median([look.u_px for look in looks])))


def _reference(looks: _Looks) -> int:
    """Return the look with most cards in view, the earliest of them."""
    return int(np.argmax(np.isfinite(looks.corners_px[:, :, 0, 0]).sum(axis=1)))


def _shift_px(corners_px: FloatArray, reference_px: FloatArray) -> FloatArray:
    """Return how far the cards are from the reference, the median over cards, shape (T,)."""
    apart = corners_px - reference_px
    far = np.hypot(apart[..., 0], apart[..., 1]).reshape(len(corners_px), -1)
    known = np.isfinite(far).any(axis=1)
    out = np.full(len(far), np.nan)
    out[known] = np.nanmedian(far[known], axis=1)
    return out


def _strays(looks: _Looks) -> tuple[int, ...]:
    """Return cards that do not share the motion of the others."""
    reference = looks.corners_px[_reference(looks)]
    misses = np.full((len(looks.time_s), len(looks.ids)), np.nan)
    for n, seen in enumerate(looks.corners_px):
        common = np.isfinite(seen[:, 0, 0]) & np.isfinite(reference[:, 0, 0])
        if common.sum() < 3:
            continue
        map_px = _map(seen[common], reference[common])
        left = project(map_px, seen[common]) - reference[common]
        misses[n, common] = np.hypot(left[..., 0], left[..., 1]).mean(axis=1)
    known = np.isfinite(misses).any(axis=0)
    far = np.array([np.nanquantile(m, 0.75) if k else 0.0 for m, k in zip(misses.T, known, strict=True)])
    limit = max(OUTLIER_PX, 8.0 * float(np.median(far)))
    return tuple(number for number, miss in zip(looks.ids, far, strict=True) if miss > limit)


def _map(seen_px: FloatArray, reference_px: FloatArray, outlier_px: float = OUTLIER_PX) -> FloatArray:
    """Return the map from a view to the reference: a homography from two cards on, a similarity from one."""
    source, target = seen_px.reshape(-1, 2), reference_px.reshape(-1, 2)
    found = None
    if len(seen_px) >= 3:
        found, _ = cv2.findHomography(source, target, cv2.RANSAC, outlier_px * _px_of(target))
    if found is None and len(seen_px) >= 2:
        found, _ = cv2.findHomography(source, target, 0)
    if found is None:
        part, _ = cv2.estimateAffinePartial2D(source, target)
        found = np.vstack([part, [0.0, 0.0, 1.0]]) if part is not None else np.eye(3)
    map_: FloatArray = np.asarray(found, dtype=np.float64)
    return map_


def _px_of(points: FloatArray) -> float:
    """Return the size of a pixel in the units of `points`: 1 for pixels, less for scaled picture units."""
    return 1.0 if np.abs(points).max() > 10.0 else 1e-3


def _spans(looks: _Looks, keep: list[int], limit: float) -> tuple[tuple[float, float], ...]:
    """Return the stretches in which neighbouring looks differ by more than noise."""
    step = _step_px(looks, keep)
    moving = step > 0.5 * limit
    spans: list[tuple[float, float]] = []
    for n in np.flatnonzero(moving):
        start_s, end_s = float(looks.time_s[n]), float(looks.time_s[n + 1])
        if spans and start_s - spans[-1][1] < 0.5:
            spans[-1] = (spans[-1][0], end_s)
        else:
            spans.append((start_s, end_s))
    return tuple(spans)


def _step_px(looks: _Looks, keep: list[int]) -> FloatArray:
    """Return the shift over about a tenth of a second or to the next look, the longer, shape (T - 1,)."""
    n_looks = len(looks.time_s)
    steps = np.zeros(max(n_looks - 1, 0))
    for n in range(n_looks - 1):
        later = min(int(np.searchsorted(looks.time_s, looks.time_s[n] + 0.1)), n_looks - 1)
        later = max(later, n + 1)
        apart = looks.corners_px[later, keep] - looks.corners_px[n, keep]
        far = np.hypot(apart[..., 0], apart[..., 1])
        steps[n] = float(np.nanmedian(far)) if np.isfinite(far).any() else 0.0
    return steps


def warp_px(corners: CornerTrack, path: CameraPath, lens: FloatArray) -> float:
    """Return how far card corners miss the one view that fits them best: RMS of a look, median over looks.

    Once the lens is straightened, a flat floor seen from two places differs by a homography. Digital stabilisation
    that warps the picture does not: it slides its parts against each other. Zero if the camera stood still, or if fewer
    than three cards were in view.
    """
    looks = _table(corners.looks)
    if not path.held or looks is None:
        return 0.0
    units = units_for(corners.image_px, side_mm=1.0, length_mm=1.0)
    keep = [k for k, number in enumerate(looks.ids) if number not in path.strays]
    straight = undistort((looks.corners_px[:, keep] - units.centre_px) / units.half_px, lens)
    return units.half_px * _misfit(straight, straight[_reference(looks)])


def _misfit(views: FloatArray, reference: FloatArray) -> float:
    """Return how far card corners miss a homography to the reference, least squares: RMS, median over the looks."""
    misses = []
    for seen in views:
        common = np.isfinite(seen[:, 0, 0]) & np.isfinite(reference[:, 0, 0])
        if common.sum() < FEWEST_TO_WARP:
            continue
        map_, _ = cv2.findHomography(seen[common].reshape(-1, 2), reference[common].reshape(-1, 2), 0)
        if map_ is not None:
            misses.append(float(np.sqrt(np.mean((project(map_, seen[common]) - reference[common]) ** 2))))
    return float(np.median(misses)) if misses else 0.0


def steady(corners: CornerTrack, path: CameraPath, lens: FloatArray) -> CornerTrack:
    """Return the track as seen from the reference view; frames whose view is not known are blanked.

    Parameters
    ----------
    corners : CornerTrack
    path : CameraPath
    lens : ndarray, shape (2,)
        Radial lens terms as in `vision.plane`; zeros while they are not known.
    """
    looks = _table(corners.looks)
    if path.still or looks is None:
        return corners
    units = units_for(corners.image_px, side_mm=1.0, length_mm=1.0)
    keep = [k for k, number in enumerate(looks.ids) if number not in path.strays]
    straight = undistort((looks.corners_px[:, keep] - units.centre_px) / units.half_px, lens)
    smooth = _averaged(straight, looks.time_s, _step_px(looks, keep) / units.half_px, STILL_PX / units.half_px)
    reference = smooth[_reference(looks)]
    outlier_px = max(OUTLIER_PX, USUAL_MISSES * units.half_px * _misfit(smooth, reference))
    maps = [_map_or_none(seen, reference, outlier_px) for seen in smooth]
    moved = corners.corners_px.copy()
    for n, time_s in enumerate(corners.time_s):
        map_ = _map_at(float(time_s), looks.time_s, maps, smooth, units)
        if map_ is None:
            moved[n] = np.nan
        else:
            moved[n] = _carry(moved[n], map_, units, lens)
    information = np.where(np.isfinite(moved[:, :, :1, 0, None]), corners.information, 0.0)
    return replace(corners, corners_px=moved, information=information.astype(np.float32))


def calibrate_steadied(corners: CornerTrack, path: CameraPath) -> tuple[CornerTrack, Calibration]:
    """Return the steadied track and its calibration; lens and maps depend on each other and are found in turns."""
    if path.still:
        return corners, _calibrate_with_cards(corners, path)
    if path.loose:
        return corners, _calibrate_best(corners, path)
    lens = np.zeros(2)
    for _ in range(3):
        steadied = steady(corners, path, lens)
        calibration = calibrate(steadied)
        lens = calibration.p[LENS]
    return steadied, calibration


def _calibrate_with_cards(corners: CornerTrack, path: CameraPath) -> Calibration:
    """Return the calibration by the robot's rotation and the floor cards, those left out that are curled or uneven."""
    alone = calibrate(corners)
    cards = squares_of(corners.looks, path.strays)
    if cards is None:
        return alone
    together = calibrate(corners, cards)
    bad = curled(cards, together.p, together.units)
    cards = cards.without(bad)
    if alone.turned_rad < WELL_TURNED_RAD:
        together = calibrate(corners, as_flat_as_they_are(cards, together.p, together.units))
    elif bad:
        together = calibrate(corners, cards)
    return replace(together, left_out=bad, alone=alone)


def _calibrate_best(corners: CornerTrack, path: CameraPath) -> Calibration:
    """Return the calibration of the longest still stretch, or of the whole clip if it shows too little there."""
    if path.best is not None:
        outside = (corners.time_s < path.best[0]) | (corners.time_s > path.best[1])
        try:
            found = calibrate(blanked(corners, outside))
            if found.turned_rad > ENOUGH_RAD:
                return found
        except PlaneError:
            pass
    return calibrate(corners)


def blanked(corners: CornerTrack, frames: NDArray[np.bool_]) -> CornerTrack:
    """Return the track without what was seen in some frames."""
    hidden = frames[:, None, None, None]
    return replace(
        corners,
        corners_px=np.where(hidden, np.nan, corners.corners_px),
        information=np.where(hidden, np.float32(0.0), corners.information),
    )


def _averaged(straight: FloatArray, time_s: FloatArray, step: FloatArray, limit: float) -> FloatArray:
    """Average each look with its neighbours as far as the camera stood still between them."""
    stirs = np.concatenate([[0], np.cumsum(step > limit)])
    out = straight.copy()
    for n, now_s in enumerate(time_s):
        a, b = np.searchsorted(time_s, [now_s - AVERAGE_S, now_s + AVERAGE_S])
        same = np.arange(a, b)[stirs[a:b] == stirs[n]]
        known = np.isfinite(straight[same, :, 0, 0]).any(axis=0) & np.isfinite(straight[n, :, 0, 0])
        out[n, known] = np.nanmean(straight[same][:, known], axis=0)
    return out


def _map_or_none(seen: FloatArray, reference: FloatArray, outlier_px: float) -> FloatArray | None:
    common = np.isfinite(seen[:, 0, 0]) & np.isfinite(reference[:, 0, 0])
    return _map(seen[common], reference[common], outlier_px) if common.any() else None


def _map_at(
    time_s: float,
    look_s: FloatArray,
    maps: list[FloatArray | None],
    seen: FloatArray,
    units: Units,
) -> FloatArray | None:
    """Return the map of a frame: that of its own look, or between those of the looks around it where these are near."""
    after = int(np.searchsorted(look_s, time_s - 1e-9))
    if after < len(look_s) and abs(look_s[after] - time_s) < 1e-6:
        return maps[after]
    if after == 0 or after == len(look_s):
        return maps[0] if after == 0 else maps[-1]
    before = after - 1
    apart = seen[after] - seen[before]
    far = np.hypot(apart[..., 0], apart[..., 1]) * units.half_px
    earlier, later = maps[before], maps[after]
    if earlier is None or later is None or not np.isfinite(far).any() or np.nanmedian(far) > SLOW_PX:
        return None
    share = (time_s - look_s[before]) / (look_s[after] - look_s[before])
    between: FloatArray = (1.0 - share) * earlier + share * later
    return between


def _carry(corners_px: FloatArray, map_: FloatArray, units: Units, lens: FloatArray) -> FloatArray:
    straight = undistort((corners_px - units.centre_px) / units.half_px, lens)
    out: FloatArray = distort(project(map_, straight), lens) * units.half_px + units.centre_px
    return out
