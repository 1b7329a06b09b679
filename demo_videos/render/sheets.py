"""Flat printed or painted pieces in space, and how one is drawn into a picture.

A sheet is sampled several times a pixel, at spacing s, from a picture with texels of about s/2 that has been
smoothed by (1, 2, 1)/4, with linear interpolation; the samples of a pixel are averaged. The smoothing nearly
removes what the sample grid would alias: a straight edge lands within a few thousandths of a pixel of its place
whatever its phase. `extra_variance_px2` says how much softer it is than an exact pixel average.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import cv2
import numpy as np
from numpy.typing import NDArray

from demo_videos.render.camera import View, to_pixels
from demo_videos.render.scene import Camera

FloatArray = NDArray[np.float64]
FloatImage = NDArray[np.float32]

BLANK = 2
"""Clear texels around the content of each picture."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Sheet:
    """A flat picture at a place in its carrier's frame (robot or floor); x to the right of the print, y up."""

    pictures: dict[int, tuple[FloatImage, FloatImage]]
    """Samples a pixel and side -> reflectance times opacity, and opacity, both (h, w) with a blank rim."""
    width_mm: float
    height_mm: float
    """Size of the content, rim left out."""
    x_mm: float = 0.0
    y_mm: float = 0.0
    angle_deg: float = 0.0
    z_mm: float = 0.0
    relief: Callable[[FloatArray, FloatArray], FloatArray] | None = None
    """Height above the plane over (x, y) of the print, in mm."""
    gloss: float = 0.3
    precise: bool = False
    """Markers: never drawn with fewer samples than the scene's marker sampling."""


@dataclass(frozen=True, eq=False)
class Carrier:
    """Poses of what a sheet is fixed to, one for each of M instants."""

    rotation: FloatArray
    """Body to floor, shape (M, 3, 3)."""
    origin_mm: FloatArray
    """Shape (M, 3)."""

    def rows(self, picked: slice) -> Carrier:
        """Return the poses of some rows; a single pose stands for all rows."""
        if len(self.origin_mm) == 1:
            return self
        return Carrier(self.rotation[picked], self.origin_mm[picked])


FLOOR = Carrier(np.eye(3)[None], np.zeros((1, 3)))


@dataclass(eq=False)
class Patch:
    """A piece of the padded picture being drawn: its place, the pixels' undistorted coordinates, its content."""

    row: int
    col: int
    rays_x: FloatArray
    rays_y: FloatArray
    coarse_x: FloatImage
    coarse_y: FloatImage
    """The same in single precision, for what need not be exact."""
    light: FloatImage
    """Reflectance."""
    gloss: FloatImage | None = None

    def copy(self) -> Patch:
        """Return a patch with the same content to draw on."""
        gloss = None if self.gloss is None else self.gloss.copy()
        return replace(self, light=self.light.copy(), gloss=gloss)

    def inside(self, box: Box) -> Box:
        """Return the part of a box of the padded picture that lies in this patch."""
        height, width = self.light.shape
        return Box(
            max(box.top, self.row),
            min(box.bottom, self.row + height),
            max(box.left, self.col),
            min(box.right, self.col + width),
        )

    def area(self, box: Box) -> tuple[slice, slice]:
        """Return the slices of this patch's arrays for a box that lies in it."""
        return (
            slice(box.top - self.row, box.bottom - self.row),
            slice(box.left - self.col, box.right - self.col),
        )


@dataclass(frozen=True)
class Box:
    """Rows and columns of the padded picture."""

    top: int
    bottom: int
    left: int
    right: int

    @property
    def empty(self) -> bool:
        """Whether nothing is inside."""
        return self.bottom <= self.top or self.right <= self.left

    def grown(self, by: int, height: int, width: int) -> Box:
        """Return the box with a margin, cut at the picture."""
        return Box(
            max(0, self.top - by), min(height, self.bottom + by), max(0, self.left - by), min(width, self.right + by)
        )

    def joined(self, other: Box) -> Box:
        """Return the box around both."""
        if self.empty or other.empty:
            return other if self.empty else self
        return Box(
            min(self.top, other.top),
            max(self.bottom, other.bottom),
            min(self.left, other.left),
            max(self.right, other.right),
        )


def extra_variance_px2(samples: int) -> float:
    """Return how much wider than a pixel's average the sampling is, as a variance along one axis."""
    spacing2 = 1.0 / samples**2
    texel2 = spacing2 / 4.0
    return (1.0 - spacing2) / 12.0 + texel2 / 12.0 + texel2 / 2.0 - 1.0 / 12.0


def sheet_to_camera(sheet: Sheet, carrier: Carrier, view: View, z_mm: float = 0.0) -> FloatArray:
    """Return the maps (M, 3, 3) from (x, y, 1) on the sheet to undistorted homogeneous camera coordinates."""
    turn = np.deg2rad(sheet.angle_deg)
    frame = np.array(
        [
            [np.cos(turn), -np.sin(turn), sheet.x_mm],
            [np.sin(turn), np.cos(turn), sheet.y_mm],
            [0.0, 0.0, sheet.z_mm + z_mm],
        ]
    )
    in_floor = carrier.rotation @ frame
    in_floor[:, :, 2] += carrier.origin_mm
    in_floor = np.broadcast_to(in_floor, (max(len(in_floor), len(view.zoom)), 3, 3)).copy()
    in_floor[:, :, 2] -= view.centre_mm
    maps = view.rotation @ in_floor
    maps[:, :2] *= view.zoom[:, None, None]
    return maps


def box_of(sheet: Sheet, carrier: Carrier, view: View, camera: Camera, pad_px: int) -> Box:
    """Return the part of the padded picture that the sheet can touch at any of the instants."""
    x = np.array([-0.5, 0.5, 0.5, -0.5]) * sheet.width_mm * 1.03
    y = np.array([-0.5, -0.5, 0.5, 0.5]) * sheet.height_mm * 1.03
    heights = [0.0] if sheet.relief is None else [0.0, float(np.max(sheet.relief(x, y)))]
    corners = np.concatenate([sheet_to_camera(sheet, carrier, view, z) @ np.stack([x, y, np.ones(4)]) for z in heights])
    px = to_pixels(camera, corners[:, 0] / corners[:, 2], corners[:, 1] / corners[:, 2]) + pad_px
    low = np.floor(px.min(axis=(0, 1))).astype(int) - 3
    high = np.ceil(px.max(axis=(0, 1))).astype(int) + 4
    box = Box(int(low[1]), int(high[1]), int(low[0]), int(high[0]))
    return box.grown(0, camera.height_px + 2 * pad_px, camera.width_px + 2 * pad_px)


def draw(patch: Patch, sheet: Sheet, carrier: Carrier, view: View, box: Box, samples: int) -> None:
    """Draw a sheet over a patch. With several instants there is one for each row of the padded picture."""
    box = patch.inside(box)
    if box.empty:
        return
    area = patch.area(box)
    value, opacity = seen(patch, sheet, carrier, view, box, samples)
    patch.light[area] += value - opacity * patch.light[area]
    if patch.gloss is not None:
        patch.gloss[area] += opacity * (sheet.gloss - patch.gloss[area])


def add_change(total: Patch, base: Patch, sheet: Sheet, carrier: Carrier, view: View, box: Box, samples: int) -> None:
    """Add to a running sum what a sheet over `base` changes in it."""
    box = base.inside(box)
    if box.empty:
        return
    area = base.area(box)
    value, opacity = seen(base, sheet, carrier, view, box, samples)
    total.light[area] += value - opacity * base.light[area]
    if total.gloss is not None and base.gloss is not None:
        total.gloss[area] += opacity * (sheet.gloss - base.gloss[area])


def seen(
    patch: Patch, sheet: Sheet, carrier: Carrier, view: View, box: Box, samples: int
) -> tuple[FloatImage, FloatImage]:
    """Return the sheet's light and opacity in a box inside the patch."""
    area = patch.area(box)
    picked = slice(box.top, box.bottom)
    rays = (patch.rays_x, patch.rays_y) if sheet.precise else (patch.coarse_x, patch.coarse_y)
    x_mm, y_mm = sheet_coordinates(sheet, carrier.rows(picked), view.rows(picked), rays[0][area], rays[1][area])
    return sample(sheet, x_mm, y_mm, samples)


def sheet_coordinates(
    sheet: Sheet, carrier: Carrier, view: View, rays_x: FloatArray, rays_y: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return where on the sheet (mm) each pixel looks."""
    x, y = across(sheet_to_camera(sheet, carrier, view), rays_x, rays_y)
    if sheet.relief is None:
        return x, y
    step = 10.0  # mm; along a ray the coordinates change linearly with height
    x_up, y_up = across(sheet_to_camera(sheet, carrier, view, step), rays_x, rays_y)
    x_hit, y_hit = x, y
    for _ in range(4):
        share = sheet.relief(x_hit, y_hit) / step
        x_hit, y_hit = x + share * (x_up - x), y + share * (y_up - y)
    return x_hit, y_hit


def across(maps: FloatArray, rays_x: FloatArray, rays_y: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Apply the inverse of one map, or of one map a row, to undistorted coordinates."""
    m = np.linalg.inv(maps)[:, :, :, None].astype(rays_x.dtype)
    w = m[:, 2, 0] * rays_x + m[:, 2, 1] * rays_y + m[:, 2, 2]
    return (
        (m[:, 0, 0] * rays_x + m[:, 0, 1] * rays_y + m[:, 0, 2]) / w,
        (m[:, 1, 0] * rays_x + m[:, 1, 1] * rays_y + m[:, 1, 2]) / w,
    )


def sample(sheet: Sheet, x_mm: FloatArray, y_mm: FloatArray, samples: int) -> tuple[FloatImage, FloatImage]:
    """Return the pixel averages of the sheet's reflectance times opacity, and of its opacity.

    One channel at a time: with several, OpenCV rounds the coordinates to 1/32 texel.
    """
    value, opacity = sheet.pictures[samples]
    rows, cols = value.shape[0] - 2 * BLANK, value.shape[1] - 2 * BLANK
    col = ((x_mm / sheet.width_mm + 0.5) * cols + (BLANK - 0.5)).astype(np.float32)
    row = ((0.5 - y_mm / sheet.height_mm) * rows + (BLANK - 0.5)).astype(np.float32)
    if samples > 1:
        fine = (col.shape[1] * samples, col.shape[0] * samples)
        col = cv2.resize(col, fine, interpolation=cv2.INTER_LINEAR)
        row = cv2.resize(row, fine, interpolation=cv2.INTER_LINEAR)
    return looked_up(value, col, row, samples), looked_up(opacity, col, row, samples)


def looked_up(picture: FloatImage, col: FloatImage, row: FloatImage, samples: int) -> FloatImage:
    """Return a picture's values at the samples, averaged over each pixel."""
    values = cv2.remap(picture, col, row, cv2.INTER_LINEAR, borderMode=cv2.BORDER_CONSTANT, borderValue=0)
    if samples > 1:
        size = (col.shape[1] // samples, col.shape[0] // samples)
        values = cv2.resize(values, size, interpolation=cv2.INTER_AREA)
    return np.asarray(values, dtype=np.float32)


def softened(picture: FloatImage) -> tuple[FloatImage, FloatImage]:
    """Return the two layers of a picture (h, w, 2), each smoothed by (1, 2, 1)/4 along both axes."""
    kernel = np.array([0.25, 0.5, 0.25], dtype=np.float32)
    value, opacity = (
        cv2.sepFilter2D(np.ascontiguousarray(picture[..., k]), cv2.CV_32F, kernel, kernel) for k in (0, 1)
    )
    return np.asarray(value, dtype=np.float32), np.asarray(opacity, dtype=np.float32)


def reduced(picture: FloatImage, factor: int) -> FloatImage:
    """Return the content averaged over `factor` x `factor` texels, with a fresh blank rim."""
    content = picture[BLANK:-BLANK, BLANK:-BLANK]
    size = (content.shape[1] // factor, content.shape[0] // factor)
    small = cv2.resize(content[: size[1] * factor, : size[0] * factor], size, interpolation=cv2.INTER_AREA)
    return np.pad(small, ((BLANK, BLANK), (BLANK, BLANK), (0, 0)))
