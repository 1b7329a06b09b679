"""Illumination over the padded picture: what stays, what changes, what glints."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from demo_videos.render.moves import smooth_step
from demo_videos.render.scene import Camera, Glint, Light, ShadowEdge

FloatArray = NDArray[np.float64]
FloatImage = NDArray[np.float32]


def pixel_grid(camera: Camera, pad_px: int) -> tuple[FloatImage, FloatImage]:
    """Return x (1, W) and y (H, 1) of the padded picture's pixels."""
    x = np.arange(-pad_px, camera.width_px + pad_px, dtype=np.float32)[None, :]
    y = np.arange(-pad_px, camera.height_px + pad_px, dtype=np.float32)[:, None]
    return x, y


def standing_light(light: Light, camera: Camera, pad_px: int) -> FloatImage:
    """Return level, gradient, vignette and the shadows that do not move."""
    x, y = pixel_grid(camera, pad_px)
    half_w, half_h = camera.width_px / 2, camera.height_px / 2
    u, v = (x - half_w) / half_w, (y - half_h) / half_w
    turn = np.deg2rad(light.gradient_direction_deg)
    field = light.level * (1.0 - 0.5 * light.gradient * (1.0 + u * np.cos(turn) - v * np.sin(turn)))
    field = field * (1.0 - light.vignette * (u**2 + v**2) / (1.0 + (half_h / half_w) ** 2))
    for edge in light.shadows:
        if not moving(edge):
            field = field * shadow(edge, x, y, 0.0)
    return np.asarray(field, dtype=np.float32)


def moving(edge: ShadowEdge) -> bool:
    """Whether a shadow edge changes with time."""
    return edge.speed_px_s != 0.0 or np.isfinite(edge.start_s) or np.isfinite(edge.end_s)


def shadow(edge: ShadowEdge, x: FloatImage, y: FloatImage, time_s: float) -> FloatImage:
    """Return the light left by a shadow edge or band."""
    turn = np.deg2rad(edge.direction_deg)
    travel = edge.speed_px_s * (time_s - edge.start_s) if np.isfinite(edge.start_s) else edge.speed_px_s * time_s
    depth = (x - edge.at_px[0]) * np.cos(turn) - (y - edge.at_px[1]) * np.sin(turn) - travel
    inside = smooth_step(depth / edge.penumbra_px + 0.5)
    if edge.width_px is not None:
        inside = inside * smooth_step((edge.width_px - depth) / edge.penumbra_px + 0.5)
    return np.asarray(1.0 - edge.darkness * inside, dtype=np.float32)


def moving_shadows(light: Light, camera: Camera, time_s: float) -> FloatImage | None:
    """Return the light left by the shadows that move, over the picture without padding; None when all is lit."""
    edges = [edge for edge in light.shadows if moving(edge) and edge.start_s <= time_s <= edge.end_s]
    if not edges:
        return None
    x, y = pixel_grid(camera, 0)
    field = shadow(edges[0], x, y, time_s)
    for edge in edges[1:]:
        field = field * shadow(edge, x, y, time_s)
    return field


def exposure(light: Light, time_s: ArrayLike) -> FloatArray:
    """Return the relative exposure at each time: steps and flicker."""
    times = np.asarray(time_s, dtype=float)
    gain = np.ones_like(times)
    for step in light.exposure_steps:
        gain *= step.factor ** smooth_step((times - step.time_s) / max(step.ramp_s, 1e-6))
    if light.flicker:
        gain *= 1.0 + light.flicker * np.sin(2.0 * np.pi * light.flicker_hz * times)
    return gain


def glint_field(glint: Glint, camera: Camera, pad_px: int) -> FloatImage:
    """Return a glint's light over the padded picture, on a perfectly glossy surface."""
    x, y = pixel_grid(camera, pad_px)
    r2 = ((x - glint.at_px[0]) ** 2 + (y - glint.at_px[1]) ** 2) / glint.radius_px**2
    return np.asarray(glint.strength * np.exp(-0.5 * r2), dtype=np.float32)
