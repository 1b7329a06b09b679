"""From linear light to code values: noise, tone curve, sharpening, quantising."""

from __future__ import annotations

from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

from demo_videos.render.scene import Sensor

FloatImage = NDArray[np.float32]

LUT_STEPS = 16384
LIGHT_TOP = 1.25
"""Light above this saturates any tone curve here."""


def blur(image: FloatImage, sigma_px: float) -> FloatImage:
    """Blur with a Gaussian of this standard deviation."""
    if sigma_px < 1e-3:
        return image
    kernel = gaussian_kernel(round(float(sigma_px), 6))
    out = cv2.sepFilter2D(image, cv2.CV_32F, kernel, kernel, borderType=cv2.BORDER_REPLICATE)
    return np.asarray(out, dtype=np.float32)


@lru_cache(maxsize=512)
def gaussian_kernel(sigma_px: float) -> FloatImage:
    """Return a sampled Gaussian whose variance over the pixels is exactly as asked.

    Below about 0.7 px the samples of a Gaussian of that width would be narrower than it.
    """
    half = max(2, int(np.ceil(4.5 * sigma_px)))
    place2 = np.arange(-half, half + 1.0) ** 2
    low, high = 0.5 * sigma_px, sigma_px + 0.6
    for _ in range(60):
        middle = 0.5 * (low + high)
        kernel = np.exp(-0.5 * place2 / middle**2)
        kernel /= kernel.sum()
        if float(kernel @ place2) < sigma_px**2:
            low = middle
        else:
            high = middle
    return kernel.astype(np.float32)


class Development:
    """Turns linear light into luma code values, with fresh noise for every frame."""

    def __init__(self, sensor: Sensor, height_px: int, width_px: int, seed: int) -> None:
        self.sensor = sensor
        self.rng = np.random.default_rng([seed, 78])
        low, high = code_range(sensor)
        self.low, self.span = low, high - low
        self.noise = sensor.noise_grey / self.span
        self.bank = self.rng.standard_normal((height_px + 401, width_px + 401), dtype=np.float32) * self.noise
        self.curve = tone_curve(sensor)
        self.depth = 2 ** (sensor.bits - 8)

    def develop(self, light: FloatImage) -> NDArray[np.uint8] | NDArray[np.uint16]:
        """Return code values of a picture of linear light (1 is the sensor's full scale)."""
        code = self.toned(self.with_noise(light))
        sensor = self.sensor
        if sensor.sharpen:
            soft = blur(code, sensor.sharpen_radius_px)
            code = cv2.addWeighted(code, 1.0 + sensor.sharpen, soft, -sensor.sharpen, 0.0)
        top = 255.0 * self.depth if sensor.bits == 8 else 1023.0
        if self.depth > 1:
            code *= np.float32(self.depth)
        np.maximum(code, np.float32(0.0), out=code)
        np.minimum(code, np.float32(top), out=code)
        np.rint(code, out=code)
        return code.astype(np.uint8 if sensor.bits == 8 else np.uint16)

    def with_noise(self, light: FloatImage) -> FloatImage:
        """Return the light with sensor noise: a window of the bank at a random place and sign."""
        if self.noise == 0.0:
            return light.copy()
        height, width = light.shape
        row, col = self.rng.integers(0, 401, 2)
        window = self.bank[row : row + height, col : col + width]
        share = np.float32(self.sensor.shot_share)
        if share:
            window = window * np.sqrt((1 - share) + share * 2.0 * np.maximum(light, 0.0))
        out = np.subtract(light, window) if self.rng.random() < 0.5 else np.add(light, window)
        return np.asarray(out, dtype=np.float32)

    def toned(self, light: FloatImage) -> FloatImage:
        """Apply the tone curve and the range, in place where possible."""
        np.maximum(light, np.float32(0.0), out=light)
        if self.curve is None:
            np.minimum(light, np.float32(1.0), out=light)
            light *= np.float32(self.span)
            light += np.float32(self.low)
            return light
        np.minimum(light, np.float32(LIGHT_TOP), out=light)
        light *= np.float32((LUT_STEPS - 1) / LIGHT_TOP)
        return np.asarray(np.take(self.curve, light.astype(np.uint16)), dtype=np.float32)


def tone_curve(sensor: Sensor) -> FloatImage | None:
    """Return code values on `LUT_STEPS` levels of light, or None when it is straight."""
    if sensor.gamma == 1.0 and sensor.s_curve == 0.0:
        return None
    light = np.clip((np.arange(LUT_STEPS) + 0.5) * (LIGHT_TOP / (LUT_STEPS - 1)), 0.0, 1.0)
    value = light ** (1.0 / sensor.gamma)
    bent = value * value * (3.0 - 2.0 * value)
    low, high = code_range(sensor)
    return (low + (high - low) * ((1.0 - sensor.s_curve) * value + sensor.s_curve * bent)).astype(np.float32)


def code_range(sensor: Sensor) -> tuple[float, float]:
    """Return the 8-bit code values of black and of full scale."""
    return (0.0, 255.0) if sensor.full_range else (16.0, 235.0)
