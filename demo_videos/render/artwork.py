"""The cart and the cards as sheets: marker plates, deck, wheels, shadow."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from demo_videos.render.printed import blotches, marker_picture, modules_of, n_modules
from demo_videos.render.scene import Camera, Card, Mount, Robot
from demo_videos.render.sheets import BLANK, Sheet, reduced, softened

FloatImage = NDArray[np.float32]

MARKER_SAMPLES = 8
"""Samples a pixel and side for markers that stand still."""
TREAD_PHASES = 6
TREAD_PITCH_MM = 5.0


def mm_per_px(camera: Camera, z_mm: float) -> float:
    """Return the length in mm that a pixel covers at the look-at point raised by `z_mm`, mean of both axes."""
    lean = np.cos(np.deg2rad(camera.tilt_deg))
    return float((camera.distance_mm - z_mm * lean) / camera.focal_px / np.sqrt(lean))


def with_levels(picture: FloatImage, finest: int = 4) -> dict[int, tuple[FloatImage, FloatImage]]:
    """Return the picture for `finest` samples a pixel and side, and for each half of that down to one."""
    levels = {}
    factor = 1
    while factor <= finest:
        levels[finest // factor] = softened(picture if factor == 1 else reduced(picture, factor))
        factor *= 2
    return levels


def marker_sheet(
    item: Mount | Card,
    *,
    dictionary: str,
    marker_id: int,
    side_mm: float,
    quiet_modules: float,
    mm_px: float,
    z_mm: float = 0.0,
    seed: int = 0,
) -> Sheet:
    """Return the printed card of a robot marker or a floor card."""
    modules = modules_of(dictionary, marker_id)
    if item.mirrored:
        modules = modules[:, ::-1]
    count = n_modules(dictionary)
    texels = max(16, 8 * round(2.0 * side_mm / count / mm_px))
    picture = marker_picture(
        modules,
        texels=texels,
        quiet_texels=8 * round(quiet_modules * texels / 8),
        ink=item.ink,
        paper=item.paper,
        dirt=item.dirt,
        seed=seed + marker_id,
    )
    width_mm = side_mm * (picture.shape[1] - 2 * BLANK) / (count * texels)
    relief = None
    if isinstance(item, Card) and item.curl_mm:
        curl_mm = item.curl_mm
        relief = lambda x, _y: curl_mm * (2.0 * x / width_mm) ** 2  # noqa: E731
    elif isinstance(item, Mount) and item.crease_deg:
        slope = float(np.tan(np.deg2rad(item.crease_deg)))
        picture = creased(picture, item.crease_deg)
        relief = lambda x, _y: slope * np.maximum(x, 0.0)  # noqa: E731
    return Sheet(
        pictures=with_levels(picture, MARKER_SAMPLES),
        width_mm=width_mm,
        height_mm=width_mm,
        x_mm=item.x_mm,
        y_mm=item.y_mm,
        angle_deg=item.angle_deg,
        z_mm=z_mm,
        relief=relief,
        gloss=1.0,
        precise=True,
    )


def creased(picture: FloatImage, lean_deg: float) -> FloatImage:
    """Shade the half beyond the fold and draw the fold."""
    shade = np.ones(picture.shape[1], dtype=np.float32)
    middle = picture.shape[1] // 2
    shade[middle:] = np.cos(np.deg2rad(2.5 * lean_deg))
    shade[middle - 1 : middle + 1] *= 0.7
    out = picture.copy()
    out[..., 0] *= shade
    return out


def robot_sheets(robot: Robot, camera: Camera, seed: int) -> list[Sheet]:
    """Return the cart's sheets from the floor upwards, wheels left out (they turn)."""
    if not robot.visible:
        return []
    deck_mm = robot.deck_height_mm
    low_mm = min(0.45 * robot.wheel_diameter_mm, 0.6 * deck_mm)
    sheets = [
        shadow_sheet(robot),
        block_sheet(robot, low_mm, 0.06, mm_per_px(camera, low_mm)),
        block_sheet(robot, 0.5 * (low_mm + deck_mm), 0.08, mm_per_px(camera, deck_mm)),
        deck_sheet(robot, camera, seed),
    ]
    for mount in (robot.fore, robot.aft):
        z_mm = deck_mm + mount.extra_height_mm
        plate = marker_sheet(
            mount,
            dictionary=robot.dictionary,
            marker_id=mount.marker_id,
            side_mm=robot.marker_side_mm,
            quiet_modules=robot.quiet_modules,
            mm_px=mm_per_px(camera, z_mm),
            z_mm=z_mm,
            seed=seed,
        )
        if mount.extra_height_mm > 1.0:
            sheets.extend(pillar_sheets(mount, plate, deck_mm))
        sheets.append(plate)
    return sheets


def card_sheet(card: Card, robot: Robot, camera: Camera, seed: int) -> Sheet:
    """Return a floor card."""
    return marker_sheet(
        card,
        dictionary=card.dictionary or robot.dictionary,
        marker_id=card.card_id,
        side_mm=card.side_mm,
        quiet_modules=card.quiet_modules,
        mm_px=mm_per_px(camera, 0.0),
        z_mm=0.05,
        seed=seed,
    )


def canvas(width_mm: float, height_mm: float, texel_mm: float) -> tuple[FloatImage, float]:
    """Return an empty picture whose size is a multiple of four texels, and texels per mm."""
    cols = 4 * max(4, round(width_mm / texel_mm / 4))
    rows = 4 * max(4, round(height_mm / texel_mm / 4))
    return np.zeros((rows, cols, 2), dtype=np.float32), cols / width_mm


def rimmed(picture: FloatImage) -> FloatImage:
    """Add the blank rim."""
    return np.pad(picture, ((BLANK, BLANK), (BLANK, BLANK), (0, 0)))


def rounded_mask(shape: tuple[int, int], radius: float) -> FloatImage:
    """Return a filled rounded rectangle with soft one-texel edges."""
    rows, cols = shape
    y = np.abs(np.arange(rows) - (rows - 1) / 2)[:, None] - (rows / 2 - radius)
    x = np.abs(np.arange(cols) - (cols - 1) / 2)[None, :] - (cols / 2 - radius)
    outside = np.hypot(np.maximum(x, 0), np.maximum(y, 0)) + np.minimum(np.maximum(x, y), 0)
    return np.asarray(np.clip(radius - outside + 0.5, 0, 1), dtype=np.float32)


def shadow_sheet(robot: Robot) -> Sheet:
    """Return the soft dark patch under the cart."""
    margin_mm = 60.0
    width_mm, height_mm = robot.deck_length_mm + 2 * margin_mm, robot.deck_width_mm + 60 + 2 * margin_mm
    picture, per_mm = canvas(width_mm, height_mm, 2.0)
    rows, cols = picture.shape[:2]
    inset = round(margin_mm * per_mm)
    picture[inset : rows - inset, inset : cols - inset, 1] = 0.62
    picture[..., 1] = cv2.GaussianBlur(picture[..., 1], (0, 0), 16.0 * per_mm)
    layers = softened(rimmed(picture))
    return Sheet(
        pictures={4: layers, 2: layers, 1: layers},
        width_mm=width_mm,
        height_mm=height_mm,
        x_mm=robot.deck_centre_mm + 8.0,
        y_mm=-6.0,
        z_mm=0.2,
        gloss=0.0,
    )


def block_sheet(robot: Robot, z_mm: float, reflectance: float, mm_px: float) -> Sheet:
    """Return a dark cut through the body, a little smaller than the deck, so that its sides show in perspective."""
    width_mm, height_mm = robot.deck_length_mm - 10, robot.deck_width_mm - 8
    picture, per_mm = canvas(width_mm, height_mm, mm_px / 8)
    picture[..., 1] = rounded_mask(picture.shape[:2], 10 * per_mm)
    picture[..., 0] = reflectance * picture[..., 1]
    return Sheet(
        pictures=with_levels(rimmed(picture)),
        width_mm=width_mm,
        height_mm=height_mm,
        x_mm=robot.deck_centre_mm,
        z_mm=z_mm,
        gloss=0.1,
    )


def deck_sheet(robot: Robot, camera: Camera, seed: int) -> Sheet:
    """Return the deck: a grey board with light rails, four screws, and a rack of seed packets in the middle."""
    picture, per_mm = canvas(robot.deck_length_mm, robot.deck_width_mm, mm_per_px(camera, robot.deck_height_mm) / 8)
    rows, cols = picture.shape[:2]
    board = np.full((rows, cols), 0.24, dtype=np.float32)
    board *= 1.0 + 0.05 * cv2.GaussianBlur(
        np.random.default_rng([seed, 75]).standard_normal((rows, cols)).astype(np.float32), (0, 0), per_mm
    )
    rail = round(5 * per_mm)
    board[:rail] = board[-rail:] = 0.42
    board[rail : rail + 2] = board[-rail - 2 : -rail] = 0.1
    draw_packets(board, robot, per_mm, seed)
    for x in (0.03, 0.97):
        for y in (0.12, 0.88):
            cv2.circle(board, (int(x * cols), int(y * rows)), round(2.5 * per_mm), 0.08, -1, cv2.LINE_AA)
    arrow = np.array([[0.0, -9.0], [11.0, 0.0], [0.0, 9.0]]) * per_mm + [cols - 15 * per_mm, rows / 2]
    cv2.fillPoly(board, [np.round(arrow * 16).astype(np.int32)], 0.6, cv2.LINE_AA, 4)
    picture[..., 1] = rounded_mask((rows, cols), 12 * per_mm)
    picture[..., 0] = board * picture[..., 1]
    return Sheet(
        pictures=with_levels(rimmed(picture)),
        width_mm=robot.deck_length_mm,
        height_mm=robot.deck_width_mm,
        x_mm=robot.deck_centre_mm,
        z_mm=robot.deck_height_mm,
        gloss=0.3,
    )


def draw_packets(board: FloatImage, robot: Robot, per_mm: float, seed: int) -> None:
    """Draw a row of paper packets between the markers, with a dark rack around them."""
    rng = np.random.default_rng([seed, 76])
    rows = board.shape[0]
    middle_mm = 0.5 * (robot.fore.x_mm + robot.aft.x_mm) - robot.deck_centre_mm + robot.deck_length_mm / 2
    reach_mm = 0.5 * abs(robot.fore.x_mm - robot.aft.x_mm) - 0.75 * robot.marker_side_mm - 6
    if reach_mm < 8:
        return
    left, right = int((middle_mm - reach_mm) * per_mm), int((middle_mm + reach_mm) * per_mm)
    top, bottom = int(0.16 * rows), int(0.84 * rows)
    board[top:bottom, left:right] = 0.09
    pitch = max(4, round(7.5 * per_mm))
    for x in range(left + pitch // 3, right - pitch // 2, pitch):
        jog = int(rng.integers(-pitch // 3, pitch // 3 + 1))
        board[top + pitch // 2 + jog : bottom - pitch // 2 + jog, x : x + int(0.62 * pitch)] = rng.uniform(0.3, 0.6)


def pillar_sheets(mount: Mount, plate: Sheet, deck_mm: float) -> list[Sheet]:
    """Return dark cuts of the block that carries a raised marker, with its shadow on the deck."""
    picture, _ = canvas(plate.width_mm, plate.height_mm, 0.5)
    picture[..., 1] = 1.0
    picture[..., 0] = 0.1
    levels = with_levels(rimmed(picture))
    heights = np.arange(deck_mm + 1.0, deck_mm + mount.extra_height_mm - 0.5, 6.0)
    return [
        Sheet(
            pictures=levels,
            width_mm=plate.width_mm - 1.0,
            height_mm=plate.height_mm - 1.0,
            x_mm=mount.x_mm,
            y_mm=mount.y_mm,
            angle_deg=mount.angle_deg,
            z_mm=float(z),
        )
        for z in heights
    ]


def wheel_sheets(robot: Robot, camera: Camera) -> list[list[Sheet]]:
    """Return, for the left and the right wheel, one sheet for each phase of the tread."""
    if not robot.visible:
        return []
    z_mm = 0.8 * robot.wheel_diameter_mm
    length_mm = 0.8 * robot.wheel_diameter_mm
    offset_mm = 0.5 * (robot.inner_track_mm + robot.tyre_width_mm)
    picture, per_mm = canvas(length_mm, robot.tyre_width_mm, mm_per_px(camera, z_mm) / 8)
    rows, cols = picture.shape[:2]
    along_mm = (np.arange(cols) / per_mm)[None, :]
    across = np.abs(np.linspace(-1, 1, rows))[:, None]
    fall = 1.0 - 0.6 * (np.abs(np.linspace(-1, 1, cols)) ** 3)[None, :]
    mask = rounded_mask((rows, cols), 3 * per_mm)
    sheets: list[list[Sheet]] = [[], []]
    for phase in range(TREAD_PHASES):
        wave = np.cos(2 * np.pi * (along_mm / TREAD_PITCH_MM + 0.35 * across - phase / TREAD_PHASES))
        tread = (0.075 + 0.045 * np.tanh(3 * wave)) * fall
        picture = np.stack([tread * mask, mask], axis=-1).astype(np.float32)
        levels = with_levels(rimmed(picture))
        for side, sign in enumerate((1.0, -1.0)):
            sheets[side].append(
                Sheet(
                    pictures=levels,
                    width_mm=length_mm,
                    height_mm=robot.tyre_width_mm,
                    y_mm=sign * offset_mm,
                    z_mm=z_mm,
                    gloss=0.1,
                )
            )
    return sheets


__all__ = ["blotches", "card_sheet", "mm_per_px", "robot_sheets", "wheel_sheets"]
