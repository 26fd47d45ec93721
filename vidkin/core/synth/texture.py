"""Random textures: periodic fields with a power-law spectrum, looked up at world coordinates."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import ArrayLike, NDArray

Image = NDArray[np.float32]

_TILE = 1024


def f32(values: ArrayLike) -> Image:
    """As single precision: what pictures are kept in."""
    return np.asarray(values, dtype=np.float32)


def tile(rng: np.random.Generator, *, slope: float) -> Image:
    """Periodic Gaussian field (1024, 1024), mean 0, sd 1, amplitude falling with spatial frequency^-slope."""
    rows, columns = np.fft.fftfreq(_TILE) * _TILE, np.fft.rfftfreq(_TILE) * _TILE
    radius = np.hypot(rows[:, None], columns[None, :])
    radius[0, 0] = 1
    spectrum = np.fft.rfft2(rng.standard_normal((_TILE, _TILE))) / radius**slope
    spectrum[0, 0] = 0
    field = np.fft.irfft2(spectrum, (_TILE, _TILE))
    return f32(field / field.std())


def look_up(field: Image, a: Image, b: Image, period: tuple[float, float]) -> Image:
    """Field at coordinates `a`, `b` (same unit as `period`, the tile's size along each), repeated for ever."""
    u, v = a * np.float32(1 / period[0]), b * np.float32(1 / period[1])
    u, v = (u - np.floor(u)) * np.float32(_TILE), (v - np.floor(v)) * np.float32(_TILE)
    return f32(cv2.remap(field, u, v, cv2.INTER_LINEAR, borderMode=cv2.BORDER_WRAP))


def share_covered(position: Image, width: Image, *, centre: Image | float, extent: float) -> Image:
    """Share of a pixel of `width` at `position` that lies within `extent` around `centre` (a box filter, exact)."""
    half, gap = width * np.float32(0.5), np.float32(extent / 2)
    away = position - f32(centre)
    overlap = np.minimum(away + half, gap) - np.maximum(away - half, -gap)
    return f32(np.maximum(overlap, 0) / np.maximum(width, np.float32(1e-9)))
