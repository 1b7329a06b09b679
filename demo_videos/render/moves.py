"""Ways in which a camera does not stand still, as smooth functions of time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]


class CameraMove(Protocol):
    """Something that shifts (mm), turns (rad, camera axes) and zooms (log of the focal length) the camera."""

    def at(self, time_s: ArrayLike) -> FloatArray:
        """Return shift, rotation vector and log focal scale; shape (N, 7) for N times."""
        ...


@dataclass(frozen=True, kw_only=True)
class HandHeld:
    """A hand: slow drift and faster tremor, as sums of sines with random phases.

    `shift_mm` and `angle_deg` are standard deviations per axis.
    """

    shift_mm: float = 6.0
    angle_deg: float = 0.4
    low_hz: float = 0.1
    high_hz: float = 7.0
    seed: int = 0
    n_sines: int = 24

    def at(self, time_s: ArrayLike) -> FloatArray:
        """Return the camera's displacement at each time; shape (N, 7)."""
        rng = np.random.default_rng([self.seed, 71])
        hz = np.geomspace(self.low_hz, self.high_hz, self.n_sines) * rng.uniform(0.9, 1.1, (6, self.n_sines))
        weight = hz**-0.75
        weight *= np.sqrt(2.0 / np.sum(weight**2, axis=1, keepdims=True))
        phase = rng.uniform(0.0, 2.0 * np.pi, hz.shape)
        times = np.atleast_1d(np.asarray(time_s, dtype=float))
        waves = np.einsum("as,ast->ta", weight, np.sin(2.0 * np.pi * hz[..., None] * times + phase[..., None]))
        scale = np.repeat([self.shift_mm, np.deg2rad(self.angle_deg)], 3)
        return np.column_stack([waves * scale, np.zeros(len(times))])


@dataclass(frozen=True, kw_only=True)
class Nudge:
    """One knock: the camera goes over smoothly to a new place and stays there."""

    time_s: float
    shift_mm: tuple[float, float, float] = (8.0, -5.0, 0.0)
    rotation_deg: tuple[float, float, float] = (0.6, -0.4, 0.8)
    duration_s: float = 0.25

    def at(self, time_s: ArrayLike) -> FloatArray:
        """Return the camera's displacement at each time; shape (N, 7)."""
        times = np.atleast_1d(np.asarray(time_s, dtype=float))
        share = smooth_step((times - self.time_s) / self.duration_s)
        full = np.array([*self.shift_mm, *np.deg2rad(self.rotation_deg), 0.0])
        return share[:, None] * full


@dataclass(frozen=True, kw_only=True)
class Sway:
    """A stand that swings: one sine of the position and the angle."""

    period_s: float = 3.0
    shift_mm: tuple[float, float, float] = (4.0, 1.0, 0.0)
    rotation_deg: tuple[float, float, float] = (0.1, 0.15, 0.0)
    phase_deg: float = 0.0

    def at(self, time_s: ArrayLike) -> FloatArray:
        """Return the camera's displacement at each time; shape (N, 7)."""
        times = np.atleast_1d(np.asarray(time_s, dtype=float))
        wave = np.sin(2.0 * np.pi * times / self.period_s + np.deg2rad(self.phase_deg))
        return wave[:, None] * np.array([*self.shift_mm, *np.deg2rad(self.rotation_deg), 0.0])


@dataclass(frozen=True, kw_only=True)
class Breathing:
    """Autofocus breathing: the focal length follows a slow sine, `amplitude` relative to it."""

    amplitude: float = 0.004
    period_s: float = 9.0
    phase_deg: float = 0.0

    def at(self, time_s: ArrayLike) -> FloatArray:
        """Return the camera's displacement at each time; shape (N, 7)."""
        times = np.atleast_1d(np.asarray(time_s, dtype=float))
        out = np.zeros((len(times), 7))
        out[:, 6] = self.amplitude * np.sin(2.0 * np.pi * times / self.period_s + np.deg2rad(self.phase_deg))
        return out


@dataclass(frozen=True, kw_only=True)
class Stabiliser:
    """Digital stabilisation that warps the picture: rows and columns slide by slowly changing waves.

    `amplitude_px` is the standard deviation over time of each of the four waves.
    """

    amplitude_px: float = 2.0
    seed: int = 0

    def shift_px(self, x_px: FloatArray, y_px: FloatArray, time_s: float) -> tuple[FloatArray, FloatArray]:
        """Return where the picture content at these pixels was before the warp, less the pixels."""
        rng = np.random.default_rng([self.seed, 72])
        hz = rng.uniform(0.2, 1.6, (4, 6))
        phase = rng.uniform(0.0, 2.0 * np.pi, (4, 6))
        a, b, c, d = np.sqrt(2.0 / 6.0) * np.sin(2.0 * np.pi * hz * time_s + phase).sum(axis=1)
        wave_y, wave_x = np.pi * y_px / 600.0, np.pi * x_px / 800.0
        size = self.amplitude_px
        return size * (a * np.sin(wave_y) + b * np.cos(wave_x)), size * (c * np.cos(wave_y) + d * np.sin(wave_x))


def smooth_step(share: ArrayLike) -> FloatArray:
    """Return 0 before 0, 1 after 1, and a curve with flat ends in between."""
    s = np.clip(np.asarray(share, dtype=float), 0.0, 1.0)
    return s * s * s * (10.0 - 15.0 * s + 6.0 * s * s)
