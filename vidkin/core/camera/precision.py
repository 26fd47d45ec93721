"""What a camera's covariance means along the lane, and where one more mark would help most."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from vidkin.core import optics
from vidkin.stages import Array, Camera, Lane

#: Height at which the lane scale is checked: about a runner's centre of mass [m].
CHECK_HEIGHT_M: Final = 0.95
_MARGIN_PX: Final = 8
_NEW_SD_PX: Final = 1.0
_NEW_SD_M: Final = 0.01


def lane_precision(
    p: Array, cov: Array, size_px: tuple[int, int], *, lane: Lane, stretch: tuple[float, float]
) -> tuple[Array, Array, float]:
    """What the camera's covariance means along the lane.

    Returns
    -------
    x_m (K,), sd_m (K,) : sd of a position measured at lane centre and centre-of-mass height.
    scale_sd : relative sd of the length between the stretch's ends [-].
    """
    xs = np.linspace(stretch[0], stretch[1], 25)
    points = np.column_stack([xs, np.full(25, lane.centre_y_m), np.full(25, CHECK_HEIGHT_M)])
    uv = optics.project(p, points, size_px)
    inside = np.all(np.isfinite(uv), axis=1)
    _, by_p, _ = optics.lane_jacobian(p, points[inside], size_px)
    rows = by_p[:, 0, :]
    sds = np.sqrt(np.einsum("ni,ij,nj->n", rows, cov, rows))
    xs = xs[inside]
    if xs.size < 2:
        return xs, sds, 0.0
    between = rows[-1] - rows[0]
    return xs, sds, float(np.sqrt(between @ cov @ between) / (xs[-1] - xs[0]))


@dataclass(frozen=True, slots=True, kw_only=True)
class Advice:
    """Where one more mark helps most, and what it does to the lane's scale (relative sd) and worst position [m]."""

    x_m: float
    y_m: float
    scale_sd: float
    scale_sd_after: float
    worst_sd_m: float
    worst_sd_after_m: float


def best_next_mark(camera: Camera, lane: Lane) -> Advice | None:
    """Try a mark at every whole metre in view on both lane lines; the one that lowers the lane's errors most.

    Each candidate adds its information J^T J/sd^2 to the camera's (linear design, textbook); errors are judged over
    the part of the lane that the picture shows. None where no further place is in view.
    """
    size = (camera.width_px, camera.height_px)
    p = camera.parameters
    xs = np.arange(np.floor(p[3] - 60), np.ceil(p[3] + 60))
    lines = (lane.centre_y_m - lane.width_m / 2, lane.centre_y_m + lane.width_m / 2)
    places = np.array([(x, y, 0.0) for x in xs for y in lines])
    uv = optics.project(p, places, size)
    inside = np.all((uv > _MARGIN_PX) & (uv < np.array(size) - _MARGIN_PX), axis=1)
    taken = [m.xyz_m[:2] for m in camera.marks]
    fresh = np.array([all(np.hypot(*(t - c[:2])) > 0.5 for t in taken) for c in places])
    places = places[inside & fresh]
    seen_x = xs[[bool(np.any(inside[2 * i : 2 * i + 2])) for i in range(xs.size)]]
    if places.shape[0] == 0 or seen_x.size < 2:
        return None
    stretch = (float(seen_x[0]), float(seen_x[-1]))
    _, sds, scale = lane_precision(p, camera.cov, size, lane=lane, stretch=stretch)
    _, by_p, _ = optics.project_jacobian(p, places, size)
    depth = np.linalg.norm(places - p[3:6], axis=1)
    best: tuple[float, int, float, float] | None = None
    for i, rows in enumerate(by_p):
        sd = float(np.hypot(_NEW_SD_PX, p[0] / depth[i] * _NEW_SD_M))
        gain = camera.cov @ rows.T
        cov = camera.cov - gain @ np.linalg.solve(rows @ gain + sd**2 * np.eye(2), gain.T)
        _, after, scale_after = lane_precision(p, cov, size, lane=lane, stretch=stretch)
        score = float(np.mean(after**2))
        if best is None or score < best[0]:
            best = (score, i, scale_after, float(after.max()))
    assert best is not None
    _, i, scale_after, worst_after = best
    return Advice(
        x_m=float(places[i, 0]),
        y_m=float(places[i, 1]),
        scale_sd=scale,
        scale_sd_after=scale_after,
        worst_sd_m=float(sds.max()),
        worst_sd_after_m=worst_after,
    )
