"""Whether the camera stood still, asked of the floor itself: patches of the picture, compared with an early frame.

Floor cards tell more, but nobody is made to lay any. A few times a second some dozen well-marked patches are compared
with the same patches of a reference frame, gain and offset left free. The motion that most of them share, a shift, a
turn and a scale, is the camera's; robot, hands and shadows move few of them, and otherwise.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from vision.frames import Frame, LumaImage
from vision.records import FloatArray

LOOK_EVERY_S = 0.25

GRID = (8, 5)
"""Patches across and down, at most one for each cell."""

HALF_PX = 20
"""Half the side of a patch."""

KNOWN = 0.5
"""A patch is known again if it explains this share of what is seen there."""

CODED_GREY = 13.0
"""Noise of a coded picture as it acts on the place of a patch: it is frozen and blotchy, not fresh in every pixel."""

BEST_PX, WORST_PX = 0.1, 2.0
"""No patch is believed to be placed better, nor used if it is placed worse (standard uncertainty)."""

FEWEST_PATCHES = 6

KNOWN_SHARE = 0.25
"""Where less than this share of the patches is known again, they were noise, or the view is another."""

ROBOT_REACH = 1.5
"""Patches nearer to the robot's middle than so many times its farthest marker corner are not the floor's."""

AGREE_PX = 1.5
"""Patches this near to the common motion share it: a tilt of the camera moves them unequally."""

GIVEN_UP = 4
"""After so many looks in a row without a common motion a new reference is taken."""

AWAY_PX, CALM_PX = 2.0, 0.5
"""Once the view has gone away by more than the first, and rests within the second, a new reference is taken."""

SURE = 4.0
"""So many standard uncertainties make a shift of the view a shift of the camera."""

GLANCE_PX, GLANCE_SHARE, GLANCE_THIN = 0.3, 0.6, 2
"""All patches are first compared where they were, every second pixel of each; that is enough so large a share of
those known again has moved by no more than this."""

SHIFT_WEIGHT = np.array([0.25, 0.25, 1.0, 0.1])
"""How much of a shift, a turn and a growth of the picture comes out in headings, the turn being one: a shift is a small
tilt of the camera, and a growth is focus breathing."""

SHORTEST_STILL_S = 0.7
"""A hand that reverses is still for a shorter while."""

STILL_PX = 0.25
"""A camera whose view shifts by less than this between two rests stands still."""


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class GroundPath:
    """How the floor moved in the picture, T looks.

    Parameters
    ----------
    time_s : ndarray, shape (T,)
    shift_px : ndarray, shape (T, 4)
        Shift (x, y) at the middle of the picture, and the turn and the growth of the picture, both as the shift (px)
        that they make at a quarter of the picture's diagonal; NaN where no common motion was found.
    u_px : ndarray, shape (T,)
        Standard uncertainty of these.
    reference : ndarray of int, shape (T,)
        Which reference a look was compared with: looks at different ones have no known shift between them.
    """

    time_s: FloatArray
    shift_px: FloatArray
    u_px: FloatArray
    reference: NDArray[np.intp]

    @property
    def known(self) -> bool:
        """Whether the floor shows enough to say anything."""
        return len(self.time_s) > 1 and float(np.isfinite(self.shift_px[:, 0]).mean()) > 0.5

    def moved_px(self, first_s: float, second_s: float) -> float:
        """Return how far the view moved between two moments.

        Zero if no more than what cannot be told from standing still, infinite if the two do not compare at all, NaN if
        nothing is known.
        """
        first, second = self._near(first_s), self._near(second_s)
        if not self.known or first is None or second is None:
            return np.nan
        return self._between_px(first, second)

    def _near(self, time_s: float) -> int | None:
        seen = np.flatnonzero(np.isfinite(self.shift_px[:, 0]))
        if len(seen) == 0:
            return None
        return int(seen[np.argmin(np.abs(self.time_s[seen] - time_s))])

    def _between_px(self, first: int, second: int) -> float:
        if self.reference[first] != self.reference[second]:
            return np.inf
        far_px = _size_px(self.shift_px[second] - self.shift_px[first])
        limit_px = max(STILL_PX, SURE * float(np.hypot(self.u_px[first], self.u_px[second])))
        return far_px if far_px > limit_px else 0.0

    def stills(self) -> list[tuple[float, float]]:
        """Return the stretches (start_s, end_s) of some length in which the view did not move, in order."""
        seen = np.flatnonzero(np.isfinite(self.shift_px[:, 0]))
        found: list[tuple[int, int]] = []
        for k in map(int, seen):
            if found and self._between_px(found[-1][1], k) == 0.0 and self._between_px(found[-1][0], k) == 0.0:
                found[-1] = (found[-1][0], k)
            else:
                found.append((k, k))
        stretches = [(float(self.time_s[a]), float(self.time_s[b])) for a, b in found]
        return [still for still in stretches if still[1] - still[0] >= SHORTEST_STILL_S]


def _robot_disc(corners_px: FloatArray | None) -> tuple[FloatArray, float] | None:
    """Return middle and radius (px) of what the robot covers; None if it is not seen."""
    points = corners_px.reshape(-1, 2) if corners_px is not None else np.empty((0, 2))
    points = points[np.isfinite(points).all(axis=1)]
    if len(points) < 4:
        return None
    middle_px = points.mean(axis=0)
    return middle_px, ROBOT_REACH * float(np.hypot(*(points - middle_px).T).max())


def _size_px(shift_px: FloatArray) -> float:
    """Return how far a view is away: a turn of the picture is a turn of the robot, a shift hardly touches it."""
    return float(np.sqrt(np.sum((shift_px * SHIFT_WEIGHT) ** 2)))


class GroundWatcher:
    """Looks at the floor now and then as frames pass by; mutable, one per clip."""

    def __init__(self) -> None:
        self._patches: tuple[_Patch, ...] = ()
        self._glance: _Glance | None = None
        self._reach_px = 1.0
        self._middle_px = np.zeros(2)
        self._next_s = 0.0
        self._n_lost = 0
        self._number = -1
        self._start_px = np.zeros(4)
        self._shape: tuple[int, ...] = ()
        self._robot: tuple[FloatArray, float] | None = None
        self._times: list[float] = []
        self._shifts: list[FloatArray] = []
        self._us: list[float] = []
        self._references: list[int] = []

    def passing(self, frames: Iterable[Frame]) -> Iterator[Frame]:
        """Yield the frames unchanged, looking at some of them."""
        for frame in frames:
            self.see(frame)
            yield frame

    def see(self, frame: Frame, robot_px: FloatArray | None = None) -> None:
        """Look at the floor if it is time.

        Parameters
        ----------
        frame : Frame
        robot_px : ndarray, shape (..., 2), optional
            Corners of the robot's markers, NaN where unseen: what lies about them is not the floor.
        """
        if frame.time_s >= self._next_s:
            self._next_s = frame.time_s + LOOK_EVERY_S
            self._robot = _robot_disc(robot_px) or self._robot
            self._look(frame.time_s, frame.luma)

    def path(self) -> GroundPath:
        """Return what was seen so far."""
        return GroundPath(
            time_s=np.array(self._times),
            shift_px=np.array(self._shifts).reshape(-1, 4),
            u_px=np.array(self._us),
            reference=np.array(self._references, dtype=np.intp),
        )

    def _look(self, time_s: float, image: LumaImage) -> None:
        if self._number < 0 or self._n_lost >= GIVEN_UP or image.shape != self._shape:
            self._number += 1
            self._refer(image, np.zeros(4))
        since_px, u_px = self._common(image)
        shift_px = self._start_px + since_px
        self._n_lost = 0 if np.isfinite(shift_px[0]) else self._n_lost + 1
        at_rest = bool(self._shifts) and _size_px(shift_px - self._shifts[-1]) < CALM_PX
        if at_rest and _size_px(since_px) > AWAY_PX:
            self._refer(image, shift_px)  # the same place, seen as it looks from there
        self._times.append(time_s)
        self._shifts.append(shift_px)
        self._us.append(u_px)
        self._references.append(self._number)

    def _refer(self, image: LumaImage, start_px: FloatArray) -> None:
        self._start_px = start_px
        self._shape = image.shape
        self._patches = tuple(patch for patch in _patches_of(image) if not self._on_robot(patch))
        self._glance = _Glance(image, self._patches) if self._patches else None
        size = np.array(image.shape[::-1], dtype=float)
        self._middle_px, self._reach_px = 0.5 * (size - 1.0), 0.25 * float(np.hypot(*size))
        self._n_lost = 0

    def _common(self, image: LumaImage) -> tuple[FloatArray, float]:
        """Return the motion that most patches share, as in `GroundPath.shift_px`, and its u; NaN if they share none."""
        found = [(patch, shift) for patch, shift in self._found(image) if not self._on_robot(patch)]
        if len(found) < max(FEWEST_PATCHES, KNOWN_SHARE * len(self._patches)):
            return np.full(4, np.nan), np.nan
        places = (np.array([patch.centre_px for patch, _ in found]) - self._middle_px) / self._reach_px
        shifts = np.array([shift for _, shift in found])
        _, inside = cv2.estimateAffinePartial2D(
            places * self._reach_px,
            places * self._reach_px + shifts,
            method=cv2.RANSAC,
            ransacReprojThreshold=AGREE_PX,
            maxIters=500,
            confidence=0.999,
        )
        share = np.ravel(inside).astype(bool) if inside is not None else np.zeros(len(found), dtype=bool)
        if share.sum() < max(FEWEST_PATCHES, 0.5 * len(found)):
            return np.full(4, np.nan), np.nan
        u_px = np.array([patch.u_px for patch, _ in found])
        return _similarity(places[share], shifts[share], u_px[share])

    def _on_robot(self, patch: _Patch) -> bool:
        if self._robot is None:
            return False
        middle_px, radius_px = self._robot
        return float(np.hypot(*(patch.centre_px - middle_px))) < radius_px + HALF_PX

    def _found(self, image: LumaImage) -> list[tuple[_Patch, FloatArray]]:
        """Return the patches that are known again with their shifts: all at once while nothing has moved far."""
        if self._glance is None:
            return []
        near_px = self._glance.shifts_px(image)
        if near_px is not None:
            for patch, shift in zip(self._patches, near_px, strict=True):
                patch.stay(shift)
            pairs = zip(self._patches, near_px, strict=True)
            return [(patch, shift) for patch, shift in pairs if np.isfinite(shift[0])]
        return [(patch, shift) for patch in self._patches if (shift := patch.shift_px(image)) is not None]


class _Glance:
    """One linear step of every patch at its place in the reference, thinned: all that a still camera needs.

    Parameters
    ----------
    image : ndarray
        The reference frame.
    patches : tuple of _Patch, length K
    """

    def __init__(self, image: LumaImage, patches: tuple[_Patch, ...]) -> None:
        across = np.arange(-HALF_PX, HALF_PX + 1, GLANCE_THIN)
        centres = np.array([np.round(patch.centre_px) for patch in patches]).astype(np.intp)
        self._x = centres[:, :1] + np.tile(across, len(across))
        self._y = centres[:, 1:] + np.repeat(across, len(across))
        self._pattern = self._seen(image)
        slope_x = 0.5 * (self._seen(image, dx=1) - self._seen(image, dx=-1))
        slope_y = 0.5 * (self._seen(image, dy=1) - self._seen(image, dy=-1))
        self._size = np.einsum("kn,kn->k", self._pattern, self._pattern)
        slopes = np.stack([self._free(slope_x), self._free(slope_y)], axis=1)  # (K, 2, n)
        self._steps = np.linalg.pinv(np.swapaxes(slopes, 1, 2))

    def _seen(self, image: LumaImage, *, dx: int = 0, dy: int = 0) -> FloatArray:
        values = image[self._y + dy, self._x + dx].astype(np.float64)
        values -= values.mean(axis=1, keepdims=True)
        return np.asarray(values, dtype=np.float64)

    def _free(self, values: FloatArray) -> FloatArray:
        gain = np.einsum("kn,kn->k", values, self._pattern) / np.maximum(self._size, 1e-9)
        free: FloatArray = values - gain[:, None] * self._pattern
        return free

    def shifts_px(self, image: LumaImage) -> FloatArray | None:
        """Return the shifts (K, 2), NaN for a patch not known again; None if too many moved or are unknown."""
        seen = self._seen(image)
        left = self._free(seen)
        total = np.einsum("kn,kn->k", seen, seen)
        gain = np.einsum("kn,kn->k", seen, self._pattern) / np.maximum(self._size, 1e-9)
        with np.errstate(divide="ignore", invalid="ignore"):
            shifts: FloatArray = -(self._steps @ left[..., None])[..., 0] / gain[:, None]
        known = (np.einsum("kn,kn->k", left, left) < (1.0 - KNOWN) * total) & (gain > 0.05)
        near = known & (np.abs(shifts).max(axis=1) < GLANCE_PX)
        if near.sum() < max(FEWEST_PATCHES, GLANCE_SHARE * known.sum()):
            return None
        shifts[~near] = np.nan
        return shifts


def _similarity(places: FloatArray, shifts: FloatArray, u_px: FloatArray) -> tuple[FloatArray, float]:
    """Return the weighted fit of a shift, a turn and a growth to shifts at places, and the largest u of these."""
    x, y = places.T
    one, none = np.ones(len(x)), np.zeros(len(x))
    design = np.concatenate([np.stack([one, none, -y, x], axis=1), np.stack([none, one, x, y], axis=1)])
    weight = 1.0 / np.concatenate([u_px, u_px])
    a, b = design * weight[:, None], shifts.T.ravel() * weight
    found, *_ = np.linalg.lstsq(a, b, rcond=None)
    excess = float(np.mean((b - a @ found) ** 2))
    cov = np.linalg.pinv(a.T @ a) * max(excess, 1.0)
    return np.asarray(found, dtype=np.float64), float(np.sqrt(np.diag(cov).max()))


class _Patch:
    """A piece of the reference frame, ready to be found again near where it was."""

    def __init__(self, image: LumaImage, centre_px: FloatArray) -> None:
        self.centre_px = centre_px
        pattern = _cut(image, centre_px, HALF_PX + 1)
        inner = pattern[1:-1, 1:-1]
        slope_x = 0.5 * (pattern[1:-1, 2:] - pattern[1:-1, :-2]).ravel()
        slope_y = 0.5 * (pattern[2:, 1:-1] - pattern[:-2, 1:-1]).ravel()
        self._pattern = inner
        # Gain and offset are eliminated: slopes and differences are taken at right angles to pattern and constant.
        basis = np.stack([np.ones(inner.size), inner.ravel() - inner.mean()])
        self._basis = basis / np.maximum(np.linalg.norm(basis, axis=1, keepdims=True), 1e-9)
        slopes = self._free(np.stack([slope_x, slope_y]))
        information = slopes @ slopes.T
        low = float(np.linalg.eigvalsh(information)[0])
        self.u_px = max(CODED_GREY / np.sqrt(low), BEST_PX) if low > 0.0 else np.inf
        self._steps = np.linalg.solve(information, slopes) if low > 0.0 else np.zeros((2, inner.size))
        self._last_px = np.zeros(2)

    def _free(self, values: FloatArray) -> FloatArray:
        free: FloatArray = values - (values @ self._basis.T) @ self._basis
        return free

    def shift_px(self, image: LumaImage) -> FloatArray | None:
        """Return how far the patch has moved, None if it is not known again."""
        for start in (self._last_px, None):
            begun = self._searched(image) if start is None else start
            settled = self._settled(image, begun) if begun is not None else None
            if settled is not None:
                self._last_px = settled
                return settled
        return None

    def stay(self, shift_px: FloatArray) -> None:
        """Remember where the patch was seen by other means."""
        if np.isfinite(shift_px[0]):
            self._last_px = shift_px

    def _settled(self, image: LumaImage, shift_px: FloatArray) -> FloatArray | None:
        """Take Gauss-Newton steps (Lucas and Kanade 1981) until they are small."""
        for _ in range(6):
            if not _inside(image, self.centre_px + shift_px, HALF_PX):
                return None
            seen = _cut(image, self.centre_px + shift_px, HALF_PX).ravel()
            shown = float(self._pattern.ravel() @ self._basis[1])
            gain = float(seen @ self._basis[1]) / shown if shown > 0.0 else 0.0
            if gain <= 0.05:
                return None
            left = self._free(seen)
            if float(left @ left) > (1.0 - KNOWN) * float(np.sum((seen - seen.mean()) ** 2)) * 2.0:
                return None
            step = -(self._steps @ left) / gain
            if np.abs(step).max() > 0.25 * HALF_PX:
                return None
            shift_px = shift_px + step
            if np.abs(step).max() < 0.01:
                break
        return shift_px if float(left @ left) < (1.0 - KNOWN) * float(np.sum((seen - seen.mean()) ** 2)) else None

    def _searched(self, image: LumaImage) -> FloatArray | None:
        """Search around the last place."""
        reach = 2 * HALF_PX
        low = np.round(self.centre_px + self._last_px).astype(int) - HALF_PX - reach
        side = 2 * (HALF_PX + reach) + 1
        if low.min() < 0 or low[0] + side > image.shape[1] or low[1] + side > image.shape[0]:
            return None
        area = np.ascontiguousarray(image[low[1] : low[1] + side, low[0] : low[0] + side], dtype=np.float32)
        score = cv2.matchTemplate(area, self._pattern.astype(np.float32), cv2.TM_CCOEFF_NORMED)
        _, best, _, place = cv2.minMaxLoc(score)
        if best < np.sqrt(KNOWN):
            return None
        found: FloatArray = low + HALF_PX + np.array(place, dtype=float) - self.centre_px
        return found


def _patches_of(image: LumaImage) -> tuple[_Patch, ...]:
    """Return the best-marked patch of each cell of a grid over the picture, as far as it is marked at all."""
    small = cv2.resize(np.ascontiguousarray(image), None, fx=0.5, fy=0.5, interpolation=cv2.INTER_AREA)
    marked = cv2.cornerMinEigenVal(small.astype(np.float32), blockSize=HALF_PX, ksize=3)
    edge = HALF_PX // 2 + 4
    across = np.linspace(edge, small.shape[1] - edge, GRID[0] + 1).astype(int)
    down = np.linspace(edge, small.shape[0] - edge, GRID[1] + 1).astype(int)
    patches = []
    for x0, x1 in itertools.pairwise(across):
        for y0, y1 in itertools.pairwise(down):
            if x1 <= x0 or y1 <= y0:
                continue
            cell = marked[y0:y1, x0:x1]
            y, x = np.unravel_index(int(np.argmax(cell)), cell.shape)
            centre_px = 2.0 * np.array([x0 + x, y0 + y], dtype=float)
            if _inside(image, centre_px, HALF_PX + 1):
                patches.append(_Patch(image, centre_px))
    return tuple(patch for patch in patches if patch.u_px < WORST_PX)


def _inside(image: LumaImage, centre_px: FloatArray, half_px: int) -> bool:
    x, y = centre_px
    if not (np.isfinite(x) and np.isfinite(y)):
        return False
    return bool(min(x, y) > half_px + 1 and x < image.shape[1] - half_px - 2 and y < image.shape[0] - half_px - 2)


def _cut(image: LumaImage, centre_px: FloatArray, half_px: int) -> FloatArray:
    """Return the square of side ``2 half + 1`` about a point, between pixels interpolated."""
    corner = np.floor(centre_px).astype(int) - half_px
    part, side = centre_px - np.floor(centre_px), 2 * half_px + 1
    piece = np.asarray(image[corner[1] : corner[1] + side + 1, corner[0] : corner[0] + side + 1], dtype=np.float64)
    rows = (1.0 - part[1]) * piece[:-1] + part[1] * piece[1:]
    cut: FloatArray = (1.0 - part[0]) * rows[:, :-1] + part[0] * rows[:, 1:]
    return cut
