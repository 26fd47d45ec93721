"""The scene's projection, made ready once: the same map as `optics.project`, without its derivatives."""

from __future__ import annotations

import numpy as np

from vidkin.core import optics
from vidkin.stages import Array

_NEAR_M = 1e-6


class Lens:
    """World points to pixels for one camera; equals `optics.project` to rounding (tested)."""

    def __init__(self, camera: tuple[float, ...], size_px: tuple[int, int]) -> None:
        self.parameters = np.array(camera, dtype=np.float64)
        self.size_px = size_px
        self.f_px, self.k1, self.k2 = (float(c) for c in camera[:3])
        self.centre_m = self.parameters[3:6]
        self.matrix = optics.rotation(*camera[6:9])
        self._centre_px = optics.centre_px(size_px)
        self._limit = optics.largest_radius(self.k1, self.k2) ** 2

    def project(self, points_m: Array) -> Array:
        """Pixels (..., 2) of world points (..., 3) [m]; NaN behind the camera or past the lens model."""
        seen = (points_m - self.centre_m) @ self.matrix.T
        depth = seen[..., 2]
        bad = depth <= _NEAR_M
        xy = seen[..., :2] / np.where(bad, 1.0, depth)[..., None]
        r2 = np.sum(xy * xy, axis=-1)
        uv = self._centre_px + (self.f_px * (1 + r2 * (self.k1 + self.k2 * r2)))[..., None] * xy
        uv[bad | (r2 > self._limit)] = np.nan
        return np.asarray(uv)
