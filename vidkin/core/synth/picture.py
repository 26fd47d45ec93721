"""Light to code values: transfer curve, BT.709 limited-range planes, noise that depends on the signal."""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from vidkin.core.synth.scene import Sensor
from vidkin.core.synth.texture import Image, f32

Fixed = NDArray[np.int16]

#: Planes are kept as code value * 64 until the noise is added, so that weak noise is not lost to rounding.
_FIXED = 64
_POOL_SD = 200.0

# ITU-R BT.709-6 section 3: luma coefficients and colour-difference divisors (MEM, values from memory).
_LUMA = np.array([0.2126, 0.7152, 0.0722], dtype=np.float32)
_CB, _CR = 1.8556, 1.5748


def encode(linear: Image) -> Image:
    """BT.709 transfer (item 1.2): linear light 0..1 to the signal 0..1; clipped like a sensor."""
    light = np.clip(linear, 0, 1)
    return np.asarray(np.where(light < 0.018, 4.5 * light, 1.099 * cv2.pow(light, 0.45).reshape(light.shape) - 0.099))


@dataclass(frozen=True, slots=True, kw_only=True)
class Planes:
    """Code values times 64: luma (H, W) and the two chroma planes (H/2, W/2)."""

    luma: Fixed
    u: Fixed
    v: Fixed


def planes(linear: Image) -> Planes:
    """Linear R, G, B (H, W, 3), even sides, to limited-range 4:2:0 planes; chroma averaged over 2 x 2 pixels."""
    signal = encode(linear).astype(np.float32)
    luma = signal @ _LUMA
    size = (linear.shape[1] // 2, linear.shape[0] // 2)
    blue = cv2.resize(signal[..., 2] - luma, size, interpolation=cv2.INTER_AREA) * np.float32(224 * _FIXED / _CB)
    red = cv2.resize(signal[..., 0] - luma, size, interpolation=cv2.INTER_AREA) * np.float32(224 * _FIXED / _CR)
    return Planes(
        luma=np.round(luma * (219 * _FIXED) + 16 * _FIXED).astype(np.int16),
        u=np.round(blue + 128 * _FIXED).astype(np.int16),
        v=np.round(red + 128 * _FIXED).astype(np.int16),
    )


class Noise:
    """Adds shot and read noise: variance in linear light is shot * signal + read^2, carried through the curve.

    Drawn from one large field of slightly correlated Gaussian values (phones interpolate colour), a random
    part of it for each plane of each frame.
    """

    def __init__(self, sensor: Sensor, size_px: tuple[int, int], rng: np.random.Generator) -> None:
        w, h = size_px
        field = rng.standard_normal((h + h // 2, w + w // 2), dtype=np.float32)
        field = f32(cv2.GaussianBlur(field, (0, 0), 0.45))
        self._pool: Fixed = np.round(field * (_POOL_SD / field.std())).astype(np.int16)
        code = np.arange(-16, 256, dtype=np.float64)
        signal = np.clip((code - 16) / 219, 0, 1)
        light = np.where(signal < 0.081, signal / 4.5, ((signal + 0.099) / 1.099) ** (1 / 0.45))
        slope = np.where(light < 0.018, 4.5, 1.099 * 0.45 * np.maximum(light, 1e-4) ** -0.55)
        sd = 219 * np.minimum(slope, 4.5) * np.sqrt(sensor.shot * light + sensor.read**2)
        self._sd_fixed = np.round(sd[16:] * _FIXED * 8).astype(np.int16)
        self._chroma_sd = sensor.chroma * float(np.median(sd)) * _FIXED
        self._rng = rng

    def sd_map(self, luma: Fixed) -> Fixed:
        """Noise sd of each pixel, in units of 1/512 code value."""
        code = np.clip((luma + _FIXED // 2) // _FIXED, 0, 255).astype(np.uint8)
        return np.asarray(self._sd_fixed[code])

    def _draw(self, shape: tuple[int, ...]) -> Fixed:
        i = int(self._rng.integers(0, self._pool.shape[0] - shape[0] + 1))
        j = int(self._rng.integers(0, self._pool.shape[1] - shape[1] + 1))
        return self._pool[i : i + shape[0], j : j + shape[1]]

    def luma(self, plane: Fixed, sd: Fixed) -> NDArray[np.uint8]:
        """Noisy, rounded luma (H, W)."""
        noise = cv2.multiply(self._draw(plane.shape), sd, scale=1 / (8 * _POOL_SD), dtype=cv2.CV_16S)
        return np.asarray(cv2.convertScaleAbs(cv2.add(plane, noise), alpha=1 / _FIXED), dtype=np.uint8)

    def colour(self, plane: Fixed) -> NDArray[np.uint8]:
        """Noisy, rounded chroma (H/2, W/2)."""
        out = cv2.addWeighted(plane, 1.0, self._draw(plane.shape), self._chroma_sd / _POOL_SD, 0, dtype=cv2.CV_16S)
        return np.asarray(cv2.convertScaleAbs(out, alpha=1 / _FIXED), dtype=np.uint8)


def scaled(plane: Fixed, gain: float, black: int) -> Fixed:
    """Plane with its distance from `black` (a code value) multiplied by `gain`."""
    out = cv2.addWeighted(plane, gain, plane, 0.0, (1 - gain) * black * _FIXED, dtype=cv2.CV_16S)
    return np.asarray(out, dtype=np.int16)
