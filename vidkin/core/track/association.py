"""Bodies frame by frame -> paths of single persons -> the runner's pass."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Final

import numpy as np
from scipy.optimize import linear_sum_assignment

from vidkin.core.track.corridor import Corridor
from vidkin.core.track.silhouette import Body
from vidkin.stages import Array

_GATE_M: Final = 0.45
_FASTEST_MPS: Final = 13.0
_LONGEST_GAP_S: Final = 0.35
#: A body this much larger or wider than it was just now has merged with another.
_MERGED: Final = 1.45
_STILL_MPS: Final = 0.4
_STILL_KEPT_S: Final = 2.0


@dataclass(slots=True)
class Path:
    """One person through time: rows of (frame, time, lane x, body). Grows while frames come in."""

    frames: list[int] = field(default_factory=list)
    t_s: list[float] = field(default_factory=list)
    x_m: list[float] = field(default_factory=list)
    bodies: list[Body] = field(default_factory=list)
    merged: list[bool] = field(default_factory=list)

    def speed(self) -> float:
        """Recent speed along the lane [m/s] over about a quarter of a second."""
        t, x = np.array(self.t_s[-64:]), np.array(self.x_m[-64:])
        ok = (t > self.t_s[-1] - 0.25) & ~np.array(self.merged[-64:])
        if np.count_nonzero(ok) < 3:
            return 0.0
        t, x = t[ok] - t[ok].mean(), x[ok]
        return float(np.clip((t @ (x - x.mean())) / max(float(t @ t), 1e-12), -_FASTEST_MPS, _FASTEST_MPS))

    def expect(self, t_s: float) -> float:
        return self.x_m[-1] + self.speed() * (t_s - self.t_s[-1])

    def typical_area(self) -> float:
        clean = [b.area for b, m in zip(self.bodies[-60:], self.merged[-60:], strict=True) if not m]
        return float(np.median(clean)) if clean else self.bodies[-1].area


class Linker:
    """Joins bodies into paths, one frame at a time, by predicted position on the lane plane."""

    def __init__(self, corridor: Corridor) -> None:
        self._corridor = corridor
        self._open: list[Path] = []
        self.paths: list[Path] = []

    def add(self, frame: int, t_s: float, bodies: list[Body]) -> None:
        """Take in one frame's bodies."""
        for path in [p for p in self._open if t_s - p.t_s[-1] > _LONGEST_GAP_S]:
            self._open.remove(path)
        if not bodies:
            return
        x = self._corridor.lane_points(np.array([b.uv for b in bodies]))[:, 0]
        usable = [i for i in range(len(bodies)) if np.isfinite(x[i])]
        taken: set[int] = set()
        if self._open and usable:
            cost = np.array([[abs(p.expect(t_s) - x[i]) for i in usable] for p in self._open])
            reach = np.array([_GATE_M + 6.0 * (t_s - p.t_s[-1]) for p in self._open])
            for a, b in zip(*linear_sum_assignment(np.minimum(cost, 1e3)), strict=True):
                if cost[a, b] < reach[a]:
                    self._join(self._open[a], frame, t_s, float(x[usable[b]]), bodies[usable[b]])
                    taken.add(usable[b])
        for i in usable:
            if i not in taken:
                path = Path([frame], [t_s], [float(x[i])], [bodies[i]], [False])
                self._open.append(path)
                self.paths.append(path)

    @staticmethod
    def _join(path: Path, frame: int, t_s: float, x_m: float, body: Body) -> None:
        merged = len(path.frames) > 8 and body.area > _MERGED * path.typical_area() and not body.cut
        if merged:
            # The point of a merged blob is nobody's: coast until the two part again.
            x_m = path.expect(t_s)
        path.frames.append(frame)
        path.t_s.append(t_s)
        path.x_m.append(x_m)
        path.bodies.append(body)
        path.merged.append(merged)


@dataclass(frozen=True, slots=True)
class Pass:
    """Rows `first`..`last` (inclusive) of a path in which the person moves up the lane; and how."""

    path: Path
    first: int
    last: int
    gain_m: float
    speed_mps: float
    lateral_m: float
    lateral_sd_m: float


def passes(path: Path, corridor: Corridor) -> list[Pass]:
    """Stretches of a path with motion in running direction, the stillness just before included."""
    t, x = np.array(path.t_s), np.array(path.x_m)
    if t.size < 12:
        return []
    v = _speed(t, x)
    found = []
    moving = v > _STILL_MPS
    edges = np.flatnonzero(np.diff(np.concatenate([[0], moving.astype(np.int8), [0]])))
    for a, b in zip(edges[::2], edges[1::2] - 1, strict=True):
        gain = float(x[b] - x[a])
        if gain < 1.5:
            continue
        first = a
        while first > 0 and abs(v[first - 1]) < _STILL_MPS and t[a] - t[first - 1] < _STILL_KEPT_S:
            first -= 1
        lateral, sd = _lateral(path, corridor, slice(a, b + 1))
        found.append(Pass(path, int(first), int(b), gain, gain / max(float(t[b] - t[a]), 1e-9), lateral, sd))
    return found


def _speed(t: Array, x: Array) -> Array:
    """Speed by local line over a quarter second: only to tell moving from still."""
    v = np.empty_like(t)
    for i in range(t.size):
        a, b = np.searchsorted(t, (t[i] - 0.125, t[i] + 0.125))
        a, b = max(0, min(a, t.size - 3)), max(b, min(a + 3, t.size))
        dt = t[a:b] - t[a:b].mean()
        v[i] = (dt @ x[a:b]) / max(float(dt @ dt), 1e-12)
    return v


def _lateral(path: Path, corridor: Corridor, rows: slice) -> tuple[float, float]:
    """Where across the track this person runs: y of the ground under the lowest silhouette rows, and its sd [m]."""
    lows = np.array([[0.5 * (b.box[0] + b.box[2]), b.box[3] + 0.5] for b in path.bodies[rows] if not b.cut])
    if lows.shape[0] < 5:
        return corridor.lane.centre_y_m, 10.0
    # Feet are on the ground in part of the frames only; in the others the lowest row is above the ground line.
    above = corridor.ground_v[np.clip(lows[:, 0].astype(int), 0, corridor.width_px - 1)] - lows[:, 1]
    low = lows[above <= np.quantile(above, 0.35)]
    ground = corridor.ground_points(low)
    y = ground[np.isfinite(ground).all(axis=1), 1]
    if y.size < 2:
        return corridor.lane.centre_y_m, 10.0
    shifted = corridor.ground_points(low + np.array([0.0, 2.0]))[:, 1]
    per_row = float(np.nanmedian(np.abs(shifted - corridor.ground_points(low)[:, 1]))) / 2
    return float(np.median(y)), float(np.hypot(2.0 * per_row, 0.1))
