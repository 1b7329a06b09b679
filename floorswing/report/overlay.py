"""The annotated clip: what was measured, drawn into every frame, grey picture underneath.

Outlines and heading come from the reported pose of that very frame; a dashed line keeps the heading before the turn,
and an arc grows from it. Below run the number of the turn, its command and the heading change so far.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray

from floorswing.numbers import decimals_for
from floorswing.records import MeasuredTurn, Measurement
from floorswing.report.recorder import Recorder
from floorswing.report.sight import Sight, Sighter
from floorswing.summary import COVERAGE
from vision.frames import Clip, Frame, LumaImage
from vision.records import ClipInfo, FloatArray

MOST_PX = 1920
"""Longer sides are scaled down: browsers play that everywhere, and nothing more is to be seen."""
SUBPIXEL_BITS = 4

Colour = tuple[int, int, int]
WHITE, BLACK = (235, 128, 128), (16, 128, 128)
CYAN, YELLOW = (184, 158, 74), (205, 62, 152)
"""Luma and the two chroma parts (ITU-R BT.601, limited range) of the page's two drawing colours."""


@dataclass(frozen=True, eq=False, slots=True)
class Canvas:
    """A picture in the encoder's own planes, drawn on in place.

    Parameters
    ----------
    planes : ndarray, shape (height * 3 / 2, width)
    scale : float
        Canvas pixels per pixel of the clip.
    """

    planes: NDArray[np.uint8]
    scale: float

    @property
    def luma(self) -> NDArray[np.uint8]:
        """Luma, shape (height, width)."""
        return self.planes[: self.planes.shape[0] * 2 // 3]

    @property
    def chroma(self) -> tuple[NDArray[np.uint8], NDArray[np.uint8]]:
        """Both chroma planes, each half as wide and high."""
        height, width = self.luma.shape
        flat = self.planes.reshape(-1)[height * width :]
        first, second = np.split(flat, 2)
        return first.reshape(height // 2, width // 2), second.reshape(height // 2, width // 2)

    def line(self, points_px: FloatArray, colour: Colour, width_px: float, *, closed: bool = False) -> None:
        """Draw a line through points given in the clip's pixels."""
        if not np.all(np.isfinite(points_px)) or np.abs(points_px).max() > 1e5:
            return
        places = (points_px + 0.5) * self.scale - 0.5
        for plane, value, step in zip((self.luma, *self.chroma), colour, (1, 2, 2), strict=True):
            fixed = np.round(places / step * 2**SUBPIXEL_BITS).astype(np.int32).reshape(-1, 1, 2)
            wide = max(1, round(width_px / step))
            cv2.polylines(plane, [fixed], closed, (value,), wide, cv2.LINE_AA, SUBPIXEL_BITS)

    def text(self, text: str, x_px: int, base_px: int, size_px: int) -> int:
        """Write white text on the canvas, its base line at `base_px`; return where it ends."""
        mask, rise = letters(text, size_px)
        top, height, width = base_px - rise, mask.shape[0], mask.shape[1]
        x_end, y_end = min(x_px + width, self.luma.shape[1]), min(top + height, self.luma.shape[0])
        if top < 0 or x_px >= x_end or top >= y_end:
            return x_px
        part = self.luma[top:y_end, x_px:x_end]
        share = mask[: part.shape[0], : part.shape[1]].astype(np.float32) / 255.0
        part[:] = (part * (1.0 - share) + WHITE[0] * share).astype(np.uint8)
        return int(x_px + width)


@functools.lru_cache(maxsize=512)
def letters(text: str, size_px: int) -> tuple[NDArray[np.uint8], int]:
    """Return text as a mask, and how far its top lies above the base line.

    Drawn by the font engine that draws the plots, with the font that comes with it.
    """
    from matplotlib.font_manager import FontProperties, findfont, get_font

    font = get_font(findfont(FontProperties(family="DejaVu Sans")))
    font.set_size(size_px, 72)
    font.set_text(text, 0.0)
    font.draw_glyphs_to_bitmap(antialiased=True)
    mask = np.array(font.get_image(), dtype=np.uint8)
    _, below = font.get_width_height()
    return mask, round(below / 64.0 - font.get_descent() / 64.0) if mask.size else 0


def annotate(one: Measurement, clip: Path, out: Path, progress: Callable[[float], None] | None = None) -> Path:
    """Write a measured clip with its measurement drawn in.

    Parameters
    ----------
    one : Measurement
        With its track.
    clip : Path
        The clip that was measured.
    out : Path
        File to write, ending in ``.mp4``; there whole or not at all.
    progress : callable, optional
        Called with the share that is done.

    Raises
    ------
    FileError
        If it cannot be written.
    vision.errors.ClipError
        If the clip cannot be read.
    KeyError, TypeError, ValueError
        If the measurement does not hold what redraws the pair.
    """
    sighter = Sighter(one)
    with Clip(clip) as opened:
        info = opened.info
        width, height, scale = canvas_size(info)
        with Recorder(out, width, height, info.nominal_rate_hz or 30.0) as recorder:
            for frame in opened.frames():
                canvas = blank(frame.luma, info, width, height, scale)
                draw(canvas, frame, one, sighter)
                recorder.write(canvas.planes, frame.time_s)
                if progress is not None and info.duration_s and frame.index % 8 == 0:
                    progress(frame.time_s / info.duration_s)
    return out


def canvas_size(info: ClipInfo) -> tuple[int, int, float]:
    """Return width and height (even) and the scale of the annotated clip."""
    scale = min(1.0, MOST_PX / max(info.width_px, info.height_px))
    width, height = (max(2, int(size * scale) // 2 * 2) for size in (info.width_px, info.height_px))
    return width, height, scale


def blank(luma: LumaImage, info: ClipInfo, width: int, height: int, scale: float) -> Canvas:
    """Return a canvas with the picture in grey, in the limited range that players expect."""
    grey = eight_bits(luma, info.pixel_format)
    if scale < 1.0:
        grey = np.asarray(cv2.resize(grey, (width, height), interpolation=cv2.INTER_AREA), dtype=np.uint8)
    planes = np.full((height * 3 // 2, width), 128, np.uint8)
    planes[:height] = grey[:height, :width]
    return Canvas(planes, scale)


def eight_bits(luma: LumaImage, pixel_format: str) -> NDArray[np.uint8]:
    """Return luma in eight bits, limited range."""
    if luma.dtype == np.uint16:
        bits = 16 if pixel_format.startswith(("p01", "p21")) else 12 if "12" in pixel_format else 10
        return (luma >> (bits - 8)).astype(np.uint8)
    if pixel_format.startswith(("yuvj", "gray", "rgb", "bgr", "gbr")):
        return (luma * np.float32(219.0 / 255.0) + np.float32(16.5)).astype(np.uint8)
    return np.asarray(luma, dtype=np.uint8)


def draw(canvas: Canvas, frame: Frame, one: Measurement, sighter: Sighter) -> None:
    """Draw what was measured in a frame."""
    sight = sighter(frame)
    turn, under_way = turn_at(one.turns, frame.time_s)
    thick = max(1.0, canvas.luma.shape[1] / 960.0)
    if sight is not None:
        reach = 1.25 * sighter.reach_mm
        if turn is not None and under_way and math.isfinite(turn.start_heading_deg):
            _draw_change(canvas, sight, turn.start_heading_deg, reach, thick)
        for quad in sight.outlines_px:
            canvas.line(quad, BLACK, 3.0 * thick, closed=True)
            canvas.line(quad, CYAN, 1.5 * thick, closed=True)
        _arrow(canvas, sight, reach, thick)
    _caption(canvas, frame.time_s, turn, under_way, sight)


def turn_at(turns: Sequence[MeasuredTurn], time_s: float) -> tuple[MeasuredTurn | None, bool]:
    """Return the turn that is under way, or else the last one that ended, and whether it is under way."""
    begun = [turn for turn in turns if turn.start_s <= time_s]
    return (begun[-1], time_s < begun[-1].end_s) if begun else (None, False)


def _ray(sight: Sight, heading_deg: FloatArray, reach_mm: FloatArray) -> FloatArray:
    """Return points of the picture at headings and distances from the middle of the pair."""
    angle = np.deg2rad(heading_deg)
    there = sight.middle_mm + np.stack([np.cos(angle), np.sin(angle)], axis=-1) * reach_mm[..., None]
    return sight.to_px(np.asarray(there))


def _arrow(canvas: Canvas, sight: Sight, reach: float, thick: float) -> None:
    heading = sight.heading_deg
    shaft = _ray(sight, np.array([heading + 180.0, heading]), np.array([reach, reach]))
    head = _ray(sight, heading + np.array([-5.0, 0.0, 5.0]), np.array([0.88, 1.0, 0.88]) * reach)
    for colour, width in ((BLACK, 3.0), (YELLOW, 1.5)):
        canvas.line(shaft, colour, width * thick)
        canvas.line(head, colour, width * thick)


def _draw_change(canvas: Canvas, sight: Sight, start_deg: float, reach: float, thick: float) -> None:
    """Draw the heading before as a dashed line and the change so far as an arc."""
    for inner in np.arange(0.0, 0.95, 0.14):
        dash = _ray(sight, np.full(2, start_deg), np.array([inner, inner + 0.08]) * reach)
        canvas.line(dash, WHITE, 1.5 * thick)
    change = sight.heading_deg - start_deg
    shown = math.copysign(min(abs(change), 360.0), change)
    n = max(2, round(abs(shown) / 3.0))
    arc = _ray(sight, start_deg + np.linspace(0.0, shown, n), np.full(n, 0.62 * reach))
    canvas.line(arc, YELLOW, 1.5 * thick)


def _caption(canvas: Canvas, time_s: float, turn: MeasuredTurn | None, under_way: bool, sight: Sight | None) -> None:
    height, width = canvas.luma.shape
    size = max(12, round(height / 30))
    strip = round(1.9 * size)
    low = canvas.luma[height - strip :]
    low[:] = (low * np.float32(0.3) + np.float32(11.0)).astype(np.uint8)
    for plane in canvas.chroma:
        plane[(height - strip) // 2 :] = 128
    base = height - round(0.62 * size)
    x = round(0.7 * size)
    for text, wide in zip(caption(turn, under_way, sight), (6.0, 11.0, 12.0), strict=True):
        canvas.text(text, x, base, size)
        x += round(wide * size)
    clock = f"{time_s:.2f} s"
    canvas.text(clock, width - round((0.62 * len(clock) + 0.6) * size), base, size)


def caption(turn: MeasuredTurn | None, under_way: bool, sight: Sight | None) -> tuple[str, str, str]:
    """Return what stands below a frame: turn, command, heading change."""
    if turn is None:
        return "at rest", "", ""
    command = f"{turn.commanded_wheel_deg:+g} wheel deg" if math.isfinite(turn.commanded_wheel_deg) else "no command"
    if under_way:
        change = sight.heading_deg - turn.start_heading_deg if sight is not None else math.nan
        so_far = f"{change:+.1f}°" if math.isfinite(change) else "not seen"
        return _minus(f"turn {turn.turn}", command, so_far)
    expanded = COVERAGE * turn.u_heading_change_deg
    decimals = decimals_for(expanded) if expanded > 0.0 and math.isfinite(expanded) else 2
    if not math.isfinite(turn.heading_change_deg):
        return _minus(f"turn {turn.turn}", command, "not measured")
    return _minus(f"turn {turn.turn}", command, f"{turn.heading_change_deg:+.{decimals}f}° ± {expanded:.{decimals}f}°")


def _minus(*parts: str) -> tuple[str, str, str]:
    first, second, third = (part.replace("-", "\u2212") for part in parts)
    return first, second, third
