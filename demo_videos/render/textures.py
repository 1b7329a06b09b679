"""Floor surfaces from seeded noise: square periodic pictures of linear reflectance."""

from __future__ import annotations

from functools import lru_cache

import cv2
import numpy as np
import scipy.fft
from numpy.typing import NDArray

FloatImage = NDArray[np.float32]

TILE_TEXELS = 2048
TEXEL_MM = 0.5
"""One tile is 1024 mm on a side and repeats without a seam."""

TINTS = {"cork": (-0.16, 0.12), "lino": (-0.05, -0.02), "rubber": (0.02, -0.02), "wood": (-0.14, 0.09)}
"""Chroma per unit of luma (blue difference, red difference) for coloured clips."""


@lru_cache(maxsize=4)
def floor_picture(kind: str, seed: int, contrast: float) -> FloatImage:
    """Return one tile of a surface as linear reflectance, shape (TILE_TEXELS, TILE_TEXELS)."""
    makers = {"cork": cork, "lino": lino, "rubber": rubber, "wood": wood, "plain": plain, "chequer": chequer}
    if kind not in makers:
        raise ValueError(f"unknown floor {kind!r}; choose one of {', '.join(makers)}")
    picture = makers[kind](np.random.default_rng([seed, 74]))
    mean = float(picture.mean())
    out = np.clip(mean + contrast * (picture - mean), 0.02, 0.9).astype(np.float32)
    out.setflags(write=False)
    return out


def grains(rng: np.random.Generator, along_mm: float, across_mm: float | None = None) -> FloatImage:
    """Return periodic smooth noise of unit variance with the given grain size (standard deviation of the blur)."""
    across_mm = along_mm if across_mm is None else across_mm
    hz_x = np.fft.rfftfreq(TILE_TEXELS, TEXEL_MM)[None, :]
    hz_y = np.fft.fftfreq(TILE_TEXELS, TEXEL_MM)[:, None]
    exponent = -2.0 * np.pi**2
    low_pass = np.exp(exponent * (along_mm * hz_x) ** 2) * np.exp(exponent * (across_mm * hz_y) ** 2)
    white = rng.standard_normal((TILE_TEXELS, TILE_TEXELS), dtype=np.float32)
    field = scipy.fft.irfft2(scipy.fft.rfft2(white) * low_pass.astype(np.float32), s=white.shape)
    return np.asarray((field - field.mean()) / field.std(), dtype=np.float32)


def cork(rng: np.random.Generator) -> FloatImage:
    """Pressed granules of several sizes with dark specks between them, in square tiles with a faint joint."""
    granules = np.tanh(2.0 * grains(rng, 2.2)) + 0.6 * np.tanh(2.0 * grains(rng, 4.5))
    specks = np.clip(grains(rng, 0.9) - 1.6, 0.0, 1.0)
    cloud = grains(rng, 60.0)
    return seams(0.36 + 0.045 * granules - 0.16 * specks + 0.012 * cloud, 341.3, 0.8, 0.75)


def lino(rng: np.random.Generator) -> FloatImage:
    """Marbled streaks of two greys with fine grain."""
    streaks = np.tanh(1.5 * grains(rng, 45.0, 5.0)) + 0.5 * np.tanh(2.0 * grains(rng, 16.0, 2.0))
    return np.asarray(0.47 + 0.05 * streaks + 0.008 * grains(rng, 0.6), dtype=np.float32)


def rubber(rng: np.random.Generator) -> FloatImage:
    """Dark mat with light flecks and a fine moulded rib."""
    y = np.arange(TILE_TEXELS)[:, None] * TEXEL_MM
    rib = np.cos(2.0 * np.pi * y / 8.0).astype(np.float32)
    flecks = np.clip(3.0 * (grains(rng, 1.1) - 2.1), 0.0, 1.0)
    return np.asarray(0.10 + 0.012 * rib + 0.20 * flecks + 0.008 * grains(rng, 0.8), dtype=np.float32)


def wood(rng: np.random.Generator) -> FloatImage:
    """Boards along x, each with its own tone, drawn-out grain and a dark joint."""
    boards = 8
    tone = np.repeat(rng.normal(0.0, 0.03, boards), TILE_TEXELS // boards)[:, None]
    rings = 0.03 * np.tanh(1.5 * grains(rng, 90.0, 1.6)) + 0.02 * grains(rng, 40.0, 0.7)
    y = (np.arange(TILE_TEXELS) % (TILE_TEXELS // boards)) * TEXEL_MM
    joint = np.where(y < 1.5, 0.45, 1.0)[:, None]
    return np.asarray((0.42 + tone + rings) * joint, dtype=np.float32)


def plain(rng: np.random.Generator) -> FloatImage:
    """Painted board: nearly even."""
    return np.asarray(0.5 + 0.006 * grains(rng, 1.5) + 0.006 * grains(rng, 50.0), dtype=np.float32)


def chequer(rng: np.random.Generator) -> FloatImage:
    """Small random black and white squares, which look like marker modules."""
    cell = 16
    squares = rng.random((TILE_TEXELS // cell, TILE_TEXELS // cell)) < 0.5
    picture = np.kron(np.where(squares, 0.75, 0.08), np.ones((cell, cell))).astype(np.float32)
    return np.asarray(cv2.GaussianBlur(picture, (0, 0), 0.8), dtype=np.float32)


def seams(picture: FloatImage, pitch_mm: float, width_mm: float, factor: float) -> FloatImage:
    """Darken a square grid of joints; the pitch is rounded so that the tile still repeats."""
    count = max(1, round(TILE_TEXELS * TEXEL_MM / pitch_mm))
    place = (np.arange(TILE_TEXELS) * TEXEL_MM) % (TILE_TEXELS * TEXEL_MM / count)
    line = np.where(place < width_mm, factor, 1.0)
    return np.asarray(picture * np.minimum(line[:, None], line[None, :]), dtype=np.float32)
