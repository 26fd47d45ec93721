"""Where a runner in the lane can be seen: the corridor that camera and lane define, column by column."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from vidkin.core import optics
from vidkin.stages import Array, Camera, Lane

#: The corridor reaches from below the lane's near edge to a raised arm [m].
_BELOW_M: Final = -0.25
_ABOVE_M: Final = 2.35
_STEP_M: Final = 0.05
_REACH_M: Final = 150.0


@dataclass(frozen=True, slots=True)
class Corridor:
    """Image columns of the lane plane y = lane centre.

    `top`, `bottom`, `left`, `right` : picture box that holds the corridor [px], right and bottom exclusive.
    `ground_v` (W,) row where the plane meets the ground, `px_per_m` (W,) vertical scale at hip height, for each
    of the picture's columns (edge values are held beyond the lane's visible part).
    """

    width_px: int
    height_px: int
    left: int
    top: int
    right: int
    bottom: int
    ground_v: Array
    px_per_m: Array
    camera: Camera
    lane: Lane

    @property
    def scale_px_m(self) -> float:
        """Typical vertical scale [px/m]."""
        return float(np.median(self.px_per_m))

    def lane_points(self, uv_px: Array) -> Array:
        """Points (N, 3) [m] on the lane plane behind pixels (N, 2)."""
        return optics.to_plane(
            self.camera.parameters, uv_px, (self.width_px, self.height_px), axis=1, value_m=self.lane.centre_y_m
        )

    def ground_points(self, uv_px: Array) -> Array:
        """Points (N, 3) [m] on the ground behind pixels (N, 2)."""
        return optics.to_plane(self.camera.parameters, uv_px, (self.width_px, self.height_px), axis=2, value_m=0.0)


def lane_corridor(camera: Camera, lane: Lane) -> Corridor | None:
    """The corridor, or None where the lane is not in the picture."""
    w, h = camera.width_px, camera.height_px
    xs = np.arange(-_REACH_M, _REACH_M, _STEP_M) + camera.position_m[0]
    p = camera.parameters

    def row(z_m: float) -> Array:
        points = np.column_stack([xs, np.full(xs.size, lane.centre_y_m), np.full(xs.size, z_m)])
        return optics.project(p, points, (w, h))

    ground, hip, top, low = row(0.0), row(0.9), row(_ABOVE_M), row(_BELOW_M)
    seen = np.all(np.isfinite(np.hstack([ground, hip, top, low])), axis=1)
    seen &= (hip[:, 0] > -0.1 * w) & (hip[:, 0] < 1.1 * w) & (hip[:, 1] > -h) & (hip[:, 1] < 2 * h)
    in_picture = seen & (hip[:, 0] >= 0) & (hip[:, 0] < w) & (hip[:, 1] >= 0) & (hip[:, 1] < h)
    if np.count_nonzero(in_picture) < 2:
        return None
    order = np.argsort(ground[seen, 0])
    us = ground[seen, 0][order]
    columns = np.arange(w, dtype=np.float64)
    ground_v = np.interp(columns, us, ground[seen, 1][order])
    px_per_m = np.interp(columns, us, ((ground[seen, 1] - hip[seen, 1]) / 0.9)[order])
    upper, lower = top[in_picture, 1].min(), low[in_picture, 1].max()
    box_top, box_bottom = int(np.clip(np.floor(upper), 0, h)), int(np.clip(np.ceil(lower) + 1, 0, h))
    box_top -= box_top % 2  # chroma planes are subsampled by two
    if box_bottom - box_top < 8 or np.any(px_per_m <= 0):
        return None
    return Corridor(
        width_px=w,
        height_px=h,
        left=0,
        top=box_top,
        right=w,
        bottom=box_bottom,
        ground_v=ground_v,
        px_per_m=px_per_m,
        camera=camera,
        lane=lane,
    )
