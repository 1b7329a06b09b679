"""Frames to corner observations: find the pair once, then predict and look where it must be.

Each frame costs one comparison of both patterns with the picture while the robot rests, a few while it turns. A
pose of the rigid pair is predicted from the last motion, mended by joint steps of three parameters, and the corners
are then freed; they and their information are all that later stages need. When the patterns lose their hold, wider
and wider searches follow: turned poses under soft templates, the detector in a crop, the detector in the full frame.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray
from scipy.linalg.lapack import dposv

from vision.align import ALL, CornerFit, Held, fit_corners
from vision.cards import CardWatcher
from vision.edges import edge_corners, information_of
from vision.errors import MarkersNotFound
from vision.frames import Frame, LumaImage
from vision.ground import GroundWatcher
from vision.markers import Detection, detect
from vision.observations import CornerTrack, EdgeLook, Sight, nothing_seen
from vision.pair import (
    Pattern,
    body_from_corners,
    build_pattern,
    mean_side_px,
    pair_modules,
    tune_optics,
)
from vision.records import FloatArray, MarkerSetup
from vision.rigid import fit_homography, inverse, project, projected_slope, rigid, rigid_between
from vision.strangers import strangers

HOLD = 0.55
"""Least share of a marker's variance that the pattern must explain for the marker to count as seen."""

SEARCH_EVERY_S = 0.2
"""How often the full frame is searched while the robot is out of sight."""

LOOK_AGAIN_S = 0.1
"""How often the second marker is searched for while only one is seen."""

EXPOSURE_TRIALS = (0.0, 0.15, 0.3, 0.5, 0.75, 1.0)
"""Exposure times tried, as shares of the frame interval."""

LEAST_SMEAR_PX = 1.0
"""A shorter smear is no more than a little blur."""

LOOKS = (
    (-0.57735, 0.57735),
    (-0.70711, 0.0, 0.70711),
    (-0.79465, -0.18759, 0.18759, 0.79465),
    (-0.83250, -0.37454, 0.0, 0.37454, 0.83250),
    (-0.86625, -0.42252, -0.26664, 0.26664, 0.42252, 0.86625),
    (-0.88386, -0.52966, -0.32391, 0.0, 0.32391, 0.52966, 0.88386),
    (-0.91159, -0.60102, -0.52876, -0.16791, 0.0, 0.16791, 0.52876, 0.60102, 0.91159),
)
"""Places in the exposure, from -1 to 1, whose plain mean stands for the mean over all of it.

Source: Chebyshev's quadrature, Abramowitz and Stegun (1964), table 25.5.
"""

LOOK_PX = 2.0
"""One more place for so much more smear."""

EXPOSURE_VOTES = 5

IN_MOTION_PX = 1.0
"""A pair that moves by more than this in a frame is compared at fewer pixels: rests are what counts."""

GAIN_KEPT = 0.6
"""Share of the last frame's change of rate that is expected again in the next."""

JOINT_PX = 0.5
"""A joint step smaller than this is left to the free corners."""

MOVING_PX = 0.35
"""Corners of a moving pair need not be rendered again nearer than this."""

HELD_PX = 0.12
"""While no corner is farther than this from where the pattern was last rendered, it is not rendered again."""

STRANGE_NOISE = 2.5
"""More than so many times the usual noise shows a glint, a shadow's edge or a finger on a marker."""

EDGES_EVERY_S = 0.5
"""How often the corners of a standing robot are held against the edges of its squares."""

HELD_NOISE = 1.6
"""Nor while the noise is not more than so many times what it was then."""


class PairTracker:
    """Follows the pair from frame to frame; mutable, one per clip.

    Parameters
    ----------
    setup : MarkerSetup
    image : ndarray
        A frame in which both markers were found.
    corners_px : ndarray, shape (2, 4, 2)
        Their detected corners.

    Raises
    ------
    MarkersNotFound
        If the two do not look like squares in one plane.
    """

    def __init__(self, setup: MarkerSetup, image: LumaImage, corners_px: FloatArray) -> None:
        self._setup = setup
        modules = pair_modules(setup)
        self.optics, corners_px = tune_optics(image, corners_px, modules)
        body = body_from_corners(corners_px, setup.marker_side_mm)
        if body is None:
            raise MarkersNotFound("the two robot markers do not look like flat squares of one size side by side")
        self.body = body
        self._patterns: tuple[Pattern, ...] = tuple(
            build_pattern(black, mean_side_px(corners), self.optics)
            for black, corners in zip(modules, corners_px, strict=True)
        )
        self._plane_px = body.plane_px
        self._corners_px = corners_px
        self._rate = np.zeros(3)  # turn (rad/s) and shift (mm/s) of the body, in its own frame
        self._gain = np.zeros(3)  # what the rate gained over the last frame
        self._last_s: float | None = None
        self._last_search_s = -np.inf
        self._lost = False
        self._in_motion = False
        self._tuned_at_rest = False
        self._has_moved = False
        self._usual_noise = [np.inf, np.inf]
        self._held: tuple[Held, ...] = ()
        self._held_noise: tuple[float, ...] = ()
        self._last: tuple[tuple[slice, slice], LumaImage, Sight] | None = None
        self._exposure = _ExposureVote()
        self._next_edges_s = -np.inf
        self.edge_looks: list[EdgeLook] = []

    @property
    def exposure_s(self) -> float:
        """Exposure time as estimated so far."""
        return self._exposure.exposure_s

    def see(self, frame: Frame) -> Sight:
        """Return what `frame` shows of the pair, and remember it for the next."""
        repeated = self._repeated(frame.luma)
        if repeated is not None:
            return repeated
        held = self._hold(frame)
        if held is not None:
            self._look_at_edges(frame, held)
            return held
        step_s = frame.time_s - self._last_s if self._last_s is not None else 0.0
        if step_s <= 0.0:
            step_s = 1e-3
        sight = None if self._lost else self._follow(frame.luma, step_s)
        if sight is not None and not np.all(np.isfinite(sight.corners_px)):
            sight = self._find_other(frame, step_s) or sight
        if sight is None:
            sight = self._recover(frame, step_s)
        if sight is None:
            self._lose(frame, step_s)
            return nothing_seen()
        self._lost = False
        self._last_s = frame.time_s
        if sight.by_edges:
            self.edge_looks.append(EdgeLook(frame.time_s, np.zeros((2, 4, 2)), sight.information, alone=True))
        self._remember(frame.luma, sight)
        return sight

    def _look_at_edges(self, frame: Frame, sight: Sight) -> None:
        """Hold the corners of a standing robot against the edges of its squares now and then."""
        if frame.time_s < self._next_edges_s:
            return
        self._next_edges_s = frame.time_s + EDGES_EVERY_S
        edges = self._edges(frame.luma, sight.corners_px)
        if edges is not None:
            corners_px, information = edges
            self.edge_looks.append(EdgeLook(frame.time_s, corners_px - sight.corners_px, information, alone=False))

    def _edges(self, image: LumaImage, corners_px: FloatArray) -> tuple[FloatArray, NDArray[np.float32]] | None:
        """Return corners and their information from the edges of both squares; None unless both have clear ones."""
        found = [
            edge_corners(image, corners, pattern.black.shape[0])
            for corners, pattern in zip(corners_px, self._patterns, strict=True)
        ]
        known = [edges for edges in found if edges is not None]
        if len(known) < len(found):
            return None
        return np.stack([edges.corners_px for edges in known]), np.stack([information_of(edges) for edges in known])

    def _repeated(self, image: LumaImage) -> Sight | None:
        if self._last is None or self._lost:
            return None
        window, before, sight = self._last
        now = image[window]
        if np.array_equal(now[0], before[0]) and np.array_equal(now, before):
            return Sight(
                sight.corners_px,
                sight.information,
                sight.noise_var,
                sight.explained,
                sight.contrast,
                0.0,
                True,
            )
        return None

    def _hold(self, frame: Frame) -> Sight | None:
        """Return the sight of a robot that still stands where the patterns were last rendered, or None."""
        if not self._held:
            return None
        fits = [held.again(frame.luma) for held in self._held]
        if not all(self._still(fit, noise) for fit, noise in zip(fits, self._held_noise, strict=True)):
            self._held = ()
            return None
        corners_px = np.stack([fit.corners_px + fit.move_px for fit in fits if fit is not None])
        self._corners_px = corners_px
        self._stop()
        self._last_s = frame.time_s
        sight = _sight(corners_px, fits, 0.0)
        self._remember(frame.luma, sight)
        return sight

    @staticmethod
    def _still(fit: CornerFit | None, noise_var: float) -> bool:
        if fit is None:
            return False
        return bool(np.abs(fit.move_px).max() < HELD_PX) and fit.noise_var < HELD_NOISE * noise_var

    def _retune(self, image: LumaImage) -> bool:
        """Find the optics again at the first rest of a clip that did not begin with one; True if they changed."""
        black = tuple(pattern.black for pattern in self._patterns)
        optics, _ = tune_optics(image, self._corners_px, black)
        if optics == self.optics:
            return False
        self.optics = optics
        self._patterns = tuple(build_pattern(pattern.black, pattern.side_px, optics) for pattern in self._patterns)
        self._usual_noise = [np.inf, np.inf]
        return True

    def _grip(self, image: LumaImage, fits: list[CornerFit | None], smear: tuple[FloatArray, ...]) -> None:
        """Keep the comparisons of a robot that seems to stand, to be used again on the next frame."""
        self._held, self._held_noise = (), ()
        known = [fit for fit in fits if fit is not None]
        if smear or len(known) < 2 or self._reach_px(self._plane_px, self._rate / 30.0) > HELD_PX:
            self._has_moved = True
            return
        if not self._tuned_at_rest:
            self._tuned_at_rest = True
            if self._has_moved and self._retune(image):
                return
        self._held = tuple(Held(fit) for fit in known)
        self._held_noise = tuple(fit.noise_var for fit in known)

    def _remember(self, image: LumaImage, sight: Sight) -> None:
        points = self._corners_px.reshape(-1, 2)
        pad = 0.15 * self._patterns[0].side_px
        x0, y0 = np.maximum(np.floor(points.min(axis=0) - pad), 0).astype(int)
        x1, y1 = np.ceil(points.max(axis=0) + pad).astype(int)
        window = (slice(int(y0), int(y1)), slice(int(x0), int(x1)))
        self._last = (window, image[window], sight)

    def _lose(self, frame: Frame, step_s: float) -> None:
        self._last = None
        self._held = ()
        self._rate, self._gain = (self._rate * 0.5 if not self._lost else np.zeros(3)), np.zeros(3)
        if self._last_s is not None and step_s > 0.5:
            self._lost = True

    def _stop(self) -> None:
        self._rate, self._gain = np.zeros(3), np.zeros(3)

    # -- following -------------------------------------------------------------------------------------------

    def _follow(self, image: LumaImage, step_s: float) -> Sight | None:
        return self._settle(image, (self._rate + self._gain) * step_s, step_s)

    def _settle(self, image: LumaImage, move: FloatArray, step_s: float) -> Sight | None:
        """Align from a believed motion since the last frame; None if the patterns find no hold."""
        before_px = self._plane_px
        plane_px = before_px @ rigid(*move)
        reach_px = self._reach_px(before_px, move)
        self._in_motion = reach_px > IN_MOTION_PX
        # Corners carry what the rigid model does not yet know; only their motion is predicted.
        corners_px = project(plane_px @ inverse(before_px), self._corners_px)
        smear = self._smear(plane_px, move, self._exposure.share(step_s), reach_px)
        found = self._joint(image, plane_px, corners_px, smear)
        if found is None:
            return None
        plane_px, corners_px, fits = found
        self._exposure.vote(lambda share: self._cost(image, plane_px, corners_px, move, share), move, step_s)
        seen = [fit is not None and fit.explained > HOLD and fit.contrast > 0 for fit in fits]
        if not any(seen):
            return None
        return self._free(image, plane_px, corners_px, fits, seen, smear, step_s)

    def _joint(
        self, image: LumaImage, plane_px: FloatArray, corners_px: FloatArray, smear: tuple[FloatArray, ...]
    ) -> tuple[FloatArray, FloatArray, list[CornerFit | None]] | None:
        """Take joint rigid steps until they are small."""
        for _ in range(8):
            fits = self._compare(image, corners_px, smear)
            move = self._joint_step(plane_px, fits)
            if move is None:
                return None
            moved_px = plane_px @ rigid(*move)
            after_px = project(moved_px @ inverse(plane_px), corners_px)
            largest_px = float(np.abs(after_px - corners_px).max())
            if not largest_px < self._patterns[0].side_px:  # written so that NaN also lands here
                return None
            if largest_px < JOINT_PX:
                return plane_px, corners_px, fits
            plane_px, corners_px = moved_px, after_px
        return plane_px, corners_px, self._compare(image, corners_px, smear)

    def _compare(
        self, image: LumaImage, corners_px: FloatArray, smear: tuple[FloatArray, ...], *, soft: bool = False
    ) -> list[CornerFit | None]:
        return [
            fit_corners(
                image,
                corners,
                pattern.soft if soft else pattern.sharp,
                smear=smear,
                soften_px=pattern.soften_px if soft else 0.0,
                thin=pattern.thin if smear or soft or self._in_motion else ALL,
            )
            if np.all(np.isfinite(corners))
            else None
            for corners, pattern in zip(corners_px, self._patterns, strict=True)
        ]

    def _joint_step(self, plane_px: FloatArray, fits: list[CornerFit | None]) -> FloatArray | None:
        """Return the rigid step (turn_rad, x_mm, y_mm in the body frame) that both markers ask for."""
        slopes = _pose_slope(plane_px, self.body.points_mm.reshape(8, 2)).reshape(2, 8, 3)
        information, gradient = np.zeros((3, 3)), np.zeros(3)
        for slope, fit in zip(slopes, fits, strict=True):
            if fit is None or fit.contrast <= 0.0:
                continue
            trust = max(fit.explained, 0.02) / max(fit.noise_var, 1e-6)
            information += slope.T @ (trust * fit.information) @ slope
            gradient += slope.T @ (trust * fit.gradient)
        _, step, no_hold = dposv(information, gradient)
        return None if no_hold else np.asarray(step, dtype=np.float64)

    def _free(
        self,
        image: LumaImage,
        plane_px: FloatArray,
        corners_px: FloatArray,
        fits: list[CornerFit | None],
        seen: list[bool],
        smear: tuple[FloatArray, ...],
        step_s: float,
    ) -> Sight | None:
        """Let each marker's corners go where its picture says; accept, and update the motion."""
        settled = np.full((2, 4, 2), np.nan)
        kept: list[CornerFit | None] = [None, None]
        for m, fit in enumerate(fits):
            if fit is None or not seen[m]:
                continue
            freed = self._free_marker(image, m, fit, smear)
            if freed is not None:
                settled[m], kept[m] = freed
        if not any(fit is not None for fit in kept):
            return None
        self._accept(plane_px, corners_px, settled, step_s)
        self._grip(image, kept, smear)
        return _sight(settled, kept, _largest_move(smear, self._corners_px))

    def _free_marker(
        self, image: LumaImage, m: int, fit: CornerFit, smear: tuple[FloatArray, ...]
    ) -> tuple[FloatArray, CornerFit] | None:
        side_px = self._patterns[m].side_px
        near_px = MOVING_PX if smear or self._in_motion else HELD_PX
        for _ in range(4):
            move = fit.move_px
            largest_px = float(np.abs(move).max())
            if not np.isfinite(largest_px) or largest_px > 0.25 * side_px:
                return None
            if largest_px < near_px:
                break
            again = fit_corners(
                image,
                fit.corners_px + move,
                self._patterns[m].sharp,
                smear=smear,
                thin=self._patterns[m].thin if smear or self._in_motion else ALL,
            )
            if again is None or again.explained < HOLD:
                return None
            fit = again
        if not smear:
            fit = self._without_strangers(image, m, fit)
        return fit.corners_px + fit.move_px, fit

    def _without_strangers(self, image: LumaImage, m: int, fit: CornerFit) -> CornerFit:
        """Where there is more noise than usual, compare once more with little weight on what is not the marker."""
        usual = self._usual_noise[m]
        if fit.noise_var <= STRANGE_NOISE * usual:
            self._usual_noise[m] = fit.noise_var if not np.isfinite(usual) else 0.9 * usual + 0.1 * fit.noise_var
            return fit
        sturdy = fit_corners(image, fit.corners_px + fit.move_px, self._patterns[m].sharp, robust=True)
        known = sturdy is not None and np.abs(sturdy.move_px).max() < 0.1 * self._patterns[m].side_px
        return sturdy if known and sturdy is not None else fit

    def _accept(self, plane_px: FloatArray, corners_px: FloatArray, settled: FloatArray, step_s: float) -> None:
        """Move the remembered pose and corners on; mend the plane where the rigid pair no longer fits it."""
        known = np.isfinite(settled[:, 0, 0])
        self._corners_px = np.where(known[:, None, None], settled, corners_px)
        before = project(inverse(self._plane_px), self._corners_px[known].reshape(-1, 2))
        move = np.array(rigid_between(self.body.points_mm[known].reshape(-1, 2), before))
        rate = move / step_s if step_s > 2e-3 else self._rate
        self._gain = GAIN_KEPT * (rate - self._rate)
        self._rate = rate
        self._plane_px = self._plane_px @ rigid(*move)
        if not known.all():
            return
        model_px = project(self._plane_px, self.body.points_mm)
        if np.abs(model_px - self._corners_px).max() > 0.02 * self._patterns[0].side_px:
            mended = fit_homography(self.body.points_mm.reshape(-1, 2), self._corners_px.reshape(-1, 2))
            if mended is not None:
                self._plane_px = mended
        self._resize()

    def _resize(self) -> None:
        """Rebuild the templates when the markers' size in the picture has changed."""
        sides = [mean_side_px(corners) for corners in self._corners_px]
        if all(abs(s / p.side_px - 1.0) < 0.06 for s, p in zip(sides, self._patterns, strict=True)):
            return
        self._patterns = tuple(
            build_pattern(pattern.black, side_px, self.optics)
            for pattern, side_px in zip(self._patterns, sides, strict=True)
        )

    # -- smear over the exposure -----------------------------------------------------------------------------

    def _smear(
        self, plane_px: FloatArray, move: FloatArray, share: float, reach_px: float
    ) -> tuple[FloatArray, ...]:
        """Return the motions over the exposure, for a pair whose corners move by up to `reach_px` in a frame."""
        if share * reach_px < LEAST_SMEAR_PX:
            return ()
        places = LOOKS[min(int(share * reach_px / LOOK_PX), len(LOOKS) - 1)]
        back = inverse(plane_px)
        turn_rad, x_mm, y_mm = (0.5 * share * move).tolist()
        return tuple(plane_px @ rigid(place * turn_rad, place * x_mm, place * y_mm) @ back for place in places)

    def _reach_px(self, plane_px: FloatArray, move: FloatArray) -> float:
        """Return how far the farthest corner moves in the picture."""
        ends = project(plane_px @ rigid(*move), self.body.points_mm) - project(plane_px, self.body.points_mm)
        reach_px = math.sqrt(float(np.max(ends[..., 0] ** 2 + ends[..., 1] ** 2)))
        return reach_px if math.isfinite(reach_px) else 0.0

    def _cost(
        self, image: LumaImage, plane_px: FloatArray, corners_px: FloatArray, move: FloatArray, share: float
    ) -> float | None:
        reach_px = self._reach_px(plane_px, move)
        if reach_px < 2.5:
            return None
        fits = self._compare(image, corners_px, self._smear(plane_px, move, share, reach_px))
        known = [fit.explained for fit in fits if fit is not None]
        return 1.0 - float(np.mean(known)) if known else None

    # -- recovering ------------------------------------------------------------------------------------------

    def _recover(self, frame: Frame, step_s: float) -> Sight | None:
        if not self._lost:
            sight = self._sweep(frame.luma, step_s)
            if sight is not None:
                return sight
        return self._search(frame, step_s)

    def _sweep(self, image: LumaImage, step_s: float) -> Sight | None:
        """Try turned poses under soft templates, nearest first, and follow the best."""
        base = self._rate * step_s
        best: tuple[float, FloatArray] | None = None
        for turn_deg in (0.0, 4.0, -4.0, 8.0, -8.0, 13.0, -13.0, 18.0, -18.0):
            tried = self._soft_pose(image, base + np.array([np.deg2rad(turn_deg), 0.0, 0.0]))
            if tried is not None and (best is None or tried[0] > best[0]):
                best = tried
            if best is not None and best[0] > 0.85:
                break
        if best is None or best[0] < 0.4:
            return None
        return self._settle(image, best[1], step_s)

    def _soft_pose(self, image: LumaImage, move: FloatArray) -> tuple[float, FloatArray] | None:
        """Return how well a softened picture is explained near a motion, and the motion found."""
        before_px = self._plane_px
        back = inverse(before_px)
        plane_px = before_px @ rigid(*move)
        explained = -1.0
        for _ in range(5):
            corners_px = project(plane_px @ back, self._corners_px)
            fits = self._compare(image, corners_px, (), soft=True)
            known = [fit.explained for fit in fits if fit is not None]
            explained = float(np.mean(known)) if known else -1.0
            step = self._joint_step(plane_px, fits)
            if step is None or not np.all(np.isfinite(step)) or self._reach_px(plane_px, step) > 40.0:
                return None
            plane_px = plane_px @ rigid(*step)
        total = back @ plane_px
        moved = project(total, self.body.points_mm.reshape(-1, 2))
        return explained, np.array(rigid_between(self.body.points_mm.reshape(-1, 2), moved))

    def _search(self, frame: Frame, step_s: float) -> Sight | None:
        """Look for the markers with the detector: near the last place, and now and then everywhere."""
        near = self._window(frame.luma.shape, margin=1.2)
        found = self._pick(detect(frame.luma[near], self._setup.dictionary, self._ids), near)
        if not found and frame.time_s - self._last_search_s >= SEARCH_EVERY_S:
            self._last_search_s = frame.time_s
            everywhere = (slice(0, frame.luma.shape[0]), slice(0, frame.luma.shape[1]))
            found = self._pick(detect(frame.luma, self._setup.dictionary, self._ids), everywhere)
        if not found:
            return None
        return self._restart(frame.luma, found, step_s)

    def _find_other(self, frame: Frame, step_s: float) -> Sight | None:
        """Look now and then whether the marker that is out of sight can be seen again."""
        if frame.time_s - self._last_search_s < LOOK_AGAIN_S:
            return None
        self._last_search_s = frame.time_s
        near = self._window(frame.luma.shape, margin=0.6)
        found = self._pick(detect(frame.luma[near], self._setup.dictionary, self._ids), near)
        return self._restart(frame.luma, found, step_s) if len(found) == 2 else None

    @property
    def _ids(self) -> tuple[int, int]:
        return self._setup.fore_id, self._setup.aft_id

    def _window(self, shape: tuple[int, ...], margin: float) -> tuple[slice, slice]:
        points = self._corners_px.reshape(-1, 2)
        low, high = points.min(axis=0), points.max(axis=0)
        pad = margin * float(np.max(high - low))
        x0, y0 = np.clip(low - pad, 0, (shape[1] - 8, shape[0] - 8)).astype(int)
        x1, y1 = np.clip(high + pad, (x0 + 8, y0 + 8), (shape[1], shape[0])).astype(int)
        return slice(int(y0), int(y1)), slice(int(x0), int(x1))

    def _pick(self, found: list[Detection], window: tuple[slice, slice]) -> dict[int, FloatArray]:
        """Return corners by marker index, in picture pixels; an id seen twice is not trusted."""
        origin = np.array([window[1].start, window[0].start], dtype=float)
        picked: dict[int, FloatArray] = {}
        for m, marker_id in enumerate(self._ids):
            same = [item for item in found if item.marker_id == marker_id]
            if len(same) == 1:
                picked[m] = same[0].corners_px + origin
        return picked

    def _restart(self, image: LumaImage, found: dict[int, FloatArray], step_s: float) -> Sight | None:
        """Take up the pair again where the detector saw one or both of its markers."""
        held = (self._plane_px, self._corners_px, self._rate)
        self._gain = np.zeros(3)
        points_mm = np.concatenate([self.body.points_mm[m] for m in found])
        seen_px = np.concatenate(list(found.values()))
        if len(found) == 2:
            plane_px = fit_homography(points_mm, seen_px)
        else:
            move = rigid_between(points_mm, project(inverse(self._plane_px), seen_px))
            plane_px = self._plane_px @ rigid(*move) if np.all(np.isfinite(move)) else None
        if plane_px is None:
            return None
        self._plane_px = plane_px
        self._corners_px = project(plane_px, self.body.points_mm)
        for m, corners in found.items():
            self._corners_px[m] = corners
        self._stop()
        sight = self._settle(image, np.zeros(3), step_s) if np.all(np.isfinite(self._corners_px)) else None
        if sight is None and len(found) == 2:
            sight = self._by_edges(image, np.stack([found[0], found[1]]))
        if sight is None:
            self._plane_px, self._corners_px, self._rate = held
        else:
            self._stop()
        return sight

    def _by_edges(self, image: LumaImage, corners_px: FloatArray) -> Sight | None:
        """Return what the edges of detected markers say where their patterns find no hold."""
        edges = self._edges(image, corners_px)
        if edges is None:
            return None
        self._corners_px, information = edges
        nothing = np.full(2, np.nan)
        return Sight(self._corners_px, information, nothing, np.zeros(2), nothing, 0.0, repeat=False, by_edges=True)


class _ExposureVote:
    """Which exposure time explains the smear of the first fast frames best."""

    def __init__(self) -> None:
        self._cost = np.zeros(len(EXPOSURE_TRIALS))
        self._n_votes = 0
        self._interval_s = 1.0 / 30.0
        self.exposure_s = 0.0

    def share(self, step_s: float) -> float:
        return min(self.exposure_s / step_s, 1.0)

    def vote(self, cost: Callable[[float], float | None], move: FloatArray, step_s: float) -> None:
        if self._n_votes >= EXPOSURE_VOTES or not np.any(move) or step_s < 2e-3:
            return
        first = cost(EXPOSURE_TRIALS[0])
        if first is None:
            return
        costs = [first, *(cost(share) for share in EXPOSURE_TRIALS[1:])]
        if any(value is None for value in costs):
            return
        self._cost += np.array(costs, dtype=float)
        self._n_votes += 1
        self.exposure_s = EXPOSURE_TRIALS[int(np.argmin(self._cost))] * step_s


def _pose_slope(plane_px: FloatArray, points_mm: FloatArray) -> FloatArray:
    """Return how points (K, 2) move in the picture with the body's (turn_rad, x_mm, y_mm), shape (2 K, 3)."""
    _, slope = projected_slope(plane_px, points_mm)
    columns = np.empty((len(points_mm), 2, 3))
    columns[:, :, 0] = slope[:, :, 1] * points_mm[:, :1] - slope[:, :, 0] * points_mm[:, 1:]
    columns[:, :, 1:] = slope
    return columns.reshape(-1, 3)


def _largest_move(smear: tuple[FloatArray, ...], corners_px: FloatArray) -> float:
    if not smear:
        return 0.0
    ends = project(smear[-1], corners_px) - project(smear[0], corners_px)
    reach_px = math.sqrt(float(np.max(ends[..., 0] ** 2 + ends[..., 1] ** 2)))
    return reach_px if math.isfinite(reach_px) else 0.0


def _sight(settled: FloatArray, kept: list[CornerFit | None], smear_px: float) -> Sight:
    information = np.zeros((2, 8, 8), np.float32)
    noise_var, explained, contrast = np.full(2, np.nan), np.full(2, np.nan), np.full(2, np.nan)
    for m, fit in enumerate(kept):
        if fit is None:
            continue
        information[m] = fit.information / fit.noise_var
        noise_var[m], explained[m], contrast[m] = fit.noise_var, fit.explained, fit.contrast
    return Sight(settled, information, noise_var, explained, contrast, smear_px, False)


def find_pair(image: LumaImage, setup: MarkerSetup) -> tuple[FloatArray | None, list[Detection]]:
    """Search a full frame for the robot's markers and the cards.

    Returns
    -------
    corners_px : ndarray, shape (2, 4, 2), or None
        Fore and aft corners when both were found, once each.
    found : list of Detection
        Everything with a wanted id.
    """
    wanted = (setup.fore_id, setup.aft_id, *setup.card_ids)
    found = detect(image, setup.dictionary, wanted)
    pair = [[item for item in found if item.marker_id == number] for number in wanted[:2]]
    if any(len(same) != 1 for same in pair):
        return None, found
    return np.stack([same[0].corners_px for same in pair]), found


def track_pair(frames: Iterable[Frame], setup: MarkerSetup, ground: GroundWatcher | None = None) -> CornerTrack:
    """Follow the robot's markers through a clip.

    Parameters
    ----------
    frames : iterable of Frame
    setup : MarkerSetup
    ground : GroundWatcher, optional
        Is shown the frames as long as no floor card is in view: cards tell more, and cost less.

    Raises
    ------
    MarkersNotFound
        If no frame shows both.
    """
    with one_thread():
        return _track(frames, setup, ground)


@contextmanager
def one_thread() -> Iterator[None]:
    """Keep OpenCV to one thread: its pool costs more than it gives on pictures of a marker's size."""
    before = cv2.getNumThreads()
    cv2.setNumThreads(1)
    try:
        yield
    finally:
        cv2.setNumThreads(before)


def _track(frames: Iterable[Frame], setup: MarkerSetup, ground: GroundWatcher | None) -> CornerTrack:
    seeker = _Seeker(setup)
    times: list[float] = []
    keys: list[bool] = []
    sights = _Sights()
    for frame in frames:
        tracker = seeker.tracker
        times.append(frame.time_s)
        keys.append(frame.is_key)
        if tracker is None:
            tracker = seeker.seek(frame)
        sight = tracker.see(frame) if tracker is not None else nothing_seen()
        sights.add(sight)
        seeker.cards.look(frame)
        if ground is not None and not seeker.cards.looks:
            ground.see(frame, sight.corners_px)
    if seeker.tracker is None:
        raise MarkersNotFound(seeker.complaint())
    return _stack(times, keys, sights, seeker)


class _Sights:
    """Sights of many frames, put into arrays a thousand at a time: a long clip must not fill the memory."""

    NAMES = ("corners_px", "information", "noise_var", "explained", "smear_px", "repeat")
    AT_ONCE = 1024

    def __init__(self) -> None:
        self._fresh: list[Sight] = []
        self._stacked: dict[str, list[NDArray[Any]]] = {name: [] for name in self.NAMES}

    def add(self, sight: Sight) -> None:
        self._fresh.append(sight)
        if len(self._fresh) >= self.AT_ONCE:
            self._stack()

    def _stack(self) -> None:
        for name, parts in self._stacked.items():
            parts.append(np.array([getattr(sight, name) for sight in self._fresh]))
        self._fresh.clear()

    def columns(self) -> dict[str, NDArray[Any]]:
        """Return the arrays over all frames, each under its name, and forget the parts."""
        if self._fresh:
            self._stack()
        return {name: np.concatenate(self._stacked.pop(name)) for name in self.NAMES}


class _Seeker:
    """Searches full frames, ever more seldom, until both markers are found."""

    def __init__(self, setup: MarkerSetup) -> None:
        self._setup = setup
        self._next_s = 0.0
        self._gap_s = 0.0
        self._n_seen = {setup.fore_id: 0, setup.aft_id: 0}
        self._n_searched = 0
        self._twice: set[int] = set()
        self._shown: tuple[int, LumaImage] | None = None
        self.tracker: PairTracker | None = None
        self.cards = CardWatcher(setup)
        self.image_px = (0, 0)

    def seek(self, frame: Frame) -> PairTracker | None:
        if frame.time_s < self._next_s:
            return None
        self.image_px = (frame.luma.shape[1], frame.luma.shape[0])
        corners_px, found = find_pair(frame.luma, self._setup)
        self._count(found)
        if self._shown is None or len(found) >= self._shown[0]:
            self._shown = (len(found), frame.luma)
        if corners_px is not None:
            try:
                self.tracker = PairTracker(self._setup, frame.luma, corners_px)
                self.cards.start(frame, found, self.tracker.optics)
            except MarkersNotFound:
                self.tracker = None
        if self.tracker is None:
            self._gap_s = min(self._gap_s + 0.02, SEARCH_EVERY_S)
            self._next_s = frame.time_s + self._gap_s
        else:
            self._shown = None
        return self.tracker

    def _count(self, found: list[Detection]) -> None:
        self._n_searched += 1
        for marker_id in self._n_seen:
            same = sum(item.marker_id == marker_id for item in found)
            self._n_seen[marker_id] += same > 0
            if same > 1:
                self._twice.add(marker_id)

    def complaint(self) -> str:
        setup = self._setup
        where = f"of {setup.dictionary} in the {self._n_searched} frames searched"
        if self._twice:
            return (
                f"robot marker {min(self._twice)} {where} is in view twice; cover or remove the second one, or "
                "give the robot's markers ids of their own"
            )
        seen = [number for number, count in self._n_seen.items() if count]
        if len(seen) == 1:
            other = setup.aft_id if seen[0] == setup.fore_id else setup.fore_id
            cure = self._instead(other) or "both must be in view: check that neither is covered or in glare"
            return f"only robot marker {seen[0]} {where} was found, never {other}; {cure}; check [markers] fore and aft"
        if seen:
            return (
                f"robot markers {setup.fore_id} and {setup.aft_id} {where} were never both found in one frame, "
                "as flat squares of one size"
            )
        instead = self._instead(setup.fore_id, setup.aft_id)
        return (
            f"robot markers {setup.fore_id} and {setup.aft_id} {where} were not found; "
            + (f"{instead}; " if instead else "")
            + "check [markers] dictionary and ids, that the markers are at least 22 px wide, flat, sharp and evenly lit"
        )

    def _instead(self, *lacking: int) -> str | None:
        return strangers(self._shown[1], self._setup, lacking) if self._shown is not None else None


def _stack(times: list[float], keys: list[bool], sights: _Sights, seeker: _Seeker) -> CornerTrack:
    tracker = seeker.tracker
    assert tracker is not None
    return CornerTrack(
        time_s=np.array(times),
        is_key=np.array(keys, dtype=bool),
        **sights.columns(),
        body=tracker.body,
        optics=tracker.optics,
        exposure_s=tracker.exposure_s,
        image_px=seeker.image_px,
        looks=tuple(seeker.cards.looks),
        edge_looks=tuple(tracker.edge_looks),
    )
