"""Chroma for clips that people look at: tinted floor, cart and cards. Luma stays as it is."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from demo_videos.render import textures
from demo_videos.render.camera import to_pixels
from demo_videos.render.frames import PAD_PX, CodeImage, Renderer, body_carrier, card_now
from demo_videos.render.motion import Motion
from demo_videos.render.sheets import FLOOR, Carrier, Sheet, sheet_to_camera

FloatImage = NDArray[np.float32]

DECK_TINT = (0.05, -0.06)
"""Blue and red difference per unit of luma: a blue-green board."""


class Colours:
    """Draws the two half-size chroma planes that go with a renderer's frames."""

    def __init__(self, renderer: Renderer) -> None:
        self.renderer = renderer
        self.ground: list[FloatImage] = []
        self.ground_key: object = None

    def planes(self, time_s: float, motion: Motion) -> list[CodeImage]:
        """Return blue and red difference code values, each (height / 2, width / 2)."""
        renderer = self.renderer
        key = tuple(card_now(card, time_s) for card in renderer.scene.cards)
        if key != self.ground_key:
            self.ground, self.ground_key = self.draw_ground(time_s), key
        pair = [plane.copy() for plane in self.ground]
        body = body_carrier(motion.at(time_s))
        neutral = (0.0, 0.0)
        for wheel in renderer.wheels:
            self.fill(pair, wheel[0], body, time_s, neutral, 0.0)
        for sheet in renderer.sheets[1:]:
            tint = neutral if sheet.precise else DECK_TINT
            self.fill(pair, sheet, body, time_s, tint, 0.25 * renderer.development.span)
        depth = renderer.development.depth
        kind = np.uint8 if depth == 1 else np.uint16
        return [np.clip(np.rint((128.0 + plane) * depth), 0, 256 * depth - 1).astype(kind) for plane in pair]

    def draw_ground(self, time_s: float) -> list[FloatImage]:
        """Return the floor's chroma, less neutral, in step with its light; cards are neutral."""
        renderer = self.renderer
        renderer.prepare_ground(time_s, renderer.psf_at(time_s))
        light = renderer.soft_ground[PAD_PX:-PAD_PX, PAD_PX:-PAD_PX]
        code = renderer.development.toned(light.copy()) - np.float32(renderer.development.low)
        half = cv2.resize(code, (light.shape[1] // 2, light.shape[0] // 2), interpolation=cv2.INTER_AREA)
        half = cv2.GaussianBlur(half, (0, 0), 2.0)
        pair = [half * np.float32(share) for share in textures.TINTS.get(renderer.scene.floor.kind, (0.0, 0.0))]
        for card in renderer.scene.cards:
            self.fill(pair, renderer.card_sheet(card_now(card, time_s)), FLOOR, time_s, (0.0, 0.0), 0.0)
        return pair

    def fill(
        self,
        pair: list[FloatImage],
        sheet: Sheet,
        carrier: Carrier,
        time_s: float,
        tint: tuple[float, float],
        luma: float,
    ) -> None:
        """Fill the outline of a sheet with one colour."""
        renderer = self.renderer
        corners = np.array([[-0.5, 0.5, 0.5, -0.5], [-0.5, -0.5, 0.5, 0.5], [1.0] * 4])
        corners[0] *= sheet.width_mm
        corners[1] *= sheet.height_mm
        rays = sheet_to_camera(sheet, carrier, renderer.view_now(time_s)) @ corners
        px = to_pixels(renderer.scene.camera, rays[0, 0] / rays[0, 2], rays[0, 1] / rays[0, 2])
        outline = [np.round((px - 0.5) / 2.0 * 16).astype(np.int32)]
        for plane, share in zip(pair, tint, strict=True):
            cv2.fillPoly(plane, outline, share * luma, cv2.LINE_AA, 4)
