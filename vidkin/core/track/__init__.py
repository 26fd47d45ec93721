"""Frames -> Track: background, silhouettes, one runner's pass."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from typing import Final

import numpy as np

from vidkin.core.track.association import Linker, Pass, passes
from vidkin.core.track.background import Sampler, cut, learn
from vidkin.core.track.corridor import Corridor, lane_corridor
from vidkin.core.track.silhouette import Finder
from vidkin.notices import Failure, Notice, failure, notice
from vidkin.stages import Array, Bools, Camera, Frame, Lane, Track

__all__ = ["Corridor", "Sampler", "follow", "sampler"]

_LEAST_SAMPLES: Final = 5
_MOVING_CAMERA: Final = 0.3
_LEAST_ROWS: Final = 12
_LEAST_SPEED_MPS: Final = 0.7
#: How far from the declared lane's centre a runner may be, in lane widths, before it is another lane.
_LANE_REACH: Final = 0.75


def sampler(camera: Camera, lane: Lane) -> tuple[Corridor, Sampler] | Failure:
    """Corridor and an empty background sampler for a camera; a Failure where the lane is out of the picture."""
    area = lane_corridor(camera, lane)
    if area is None:
        return failure("lane_out_of_view", y=lane.centre_y_m)
    return area, Sampler(slice(area.top, area.bottom))


def follow(
    frames: Iterable[Frame], area: Corridor, samples: Sampler, *, progress: Callable[[int], None] | None = None
) -> Track | Failure:
    """Follow the runner through the clip.

    Parameters
    ----------
    frames : iterable of Frame
        One pass over the clip.
    area : Corridor
        Where a runner in the declared lane can be seen.
    samples : Sampler
        Frames of an earlier pass, from which the background is learnt.
    progress : callable, optional
        Called with the index of each frame done.

    Returns
    -------
    Track or Failure
    """
    if len(samples.samples) < _LEAST_SAMPLES:
        return failure("too_few_frames", count=len(samples.samples), least=_LEAST_SAMPLES)
    background = learn(samples.samples, slice(area.top, area.bottom))
    if background.moving_share > _MOVING_CAMERA:
        return failure("camera_moves", percent=100 * background.moving_share)
    finder, linker = Finder(area, background), Linker(area)
    for frame in frames:
        bodies = finder.bodies(cut(frame, background.rows))
        linker.add(frame.index, frame.t_s, bodies)
        if progress is not None:
            progress(frame.index)
    return choose(linker, area)


def choose(linker: Linker, area: Corridor) -> Track | Failure:
    """The runner's pass among all paths: in the declared lane, farthest and fastest; or why there is none."""
    found = [p for path in linker.paths for p in passes(path, area)]
    moving = [p for p in found if p.speed_mps >= _LEAST_SPEED_MPS and p.last - p.first + 1 >= _LEAST_ROWS]
    if not moving:
        backwards = any(path.x_m[-1] - path.x_m[0] < -1.5 for path in linker.paths)
        return failure("only_backwards" if backwards else "nobody_runs")
    lane = area.lane
    ours = [p for p in moving if abs(p.lateral_m - lane.centre_y_m) < _LANE_REACH * lane.width_m + 2 * p.lateral_sd_m]
    if not ours:
        nearest = min(moving, key=lambda p: abs(p.lateral_m - lane.centre_y_m))
        return failure("other_lane_only", y=nearest.lateral_m, centre=lane.centre_y_m)
    best = max(ours, key=lambda p: _merit(p, lane))
    remarks: list[Notice] = []
    rivals = [p for p in moving if p.path is not best.path and p.gain_m > 0.5 * best.gain_m and not _apart(p, best)]
    if rivals:
        remarks.append(notice("others_run", count=len(rivals), y=best.lateral_m))
    if sum(p.gain_m > 0.5 * best.gain_m for p in ours if p.path is best.path or _apart(p, best)) > 1:
        remarks.append(notice("several_passes", start=best.path.t_s[best.first], end=best.path.t_s[best.last]))
    return _track(best, remarks)


def _merit(p: Pass, lane: Lane) -> float:
    """Distance covered, discounted by the odds of being in another lane."""
    off = (p.lateral_m - lane.centre_y_m) / np.hypot(lane.width_m / 4, p.lateral_sd_m)
    return p.gain_m * float(np.exp(-0.5 * min(off * off, 50.0)))


def _apart(a: Pass, b: Pass) -> bool:
    """Whether two passes do not overlap in time."""
    return a.path.t_s[a.first] > b.path.t_s[b.last] or a.path.t_s[a.last] < b.path.t_s[b.first]


def _track(chosen: Pass, remarks: list[Notice]) -> Track | Failure:
    path = chosen.path
    rows = [i for i in range(chosen.first, chosen.last + 1) if not path.merged[i]]
    merged = chosen.last + 1 - chosen.first - len(rows)
    bodies = [path.bodies[i] for i in rows]
    t_s = np.array([path.t_s[i] for i in rows])
    frame = np.array([path.frames[i] for i in rows])
    whole = np.array([not b.cut for b in bodies])
    if np.count_nonzero(whole) < _LEAST_ROWS:
        return failure("never_whole", count=int(np.count_nonzero(whole)), least=_LEAST_ROWS)
    uv = np.array([b.uv for b in bodies])
    odd = _outliers(t_s, uv, whole)
    if np.any(odd):
        keep = ~odd
        t_s, frame, whole, uv = t_s[keep], frame[keep], whole[keep], uv[keep]
        bodies = [b for b, k in zip(bodies, keep, strict=True) if k]
    lost = int(frame[-1] - frame[0] + 1 - frame.size)
    if merged:
        remarks.append(notice("bodies_merged", count=merged))
    if lost > 0.03 * frame.size:
        remarks.append(notice("frames_without_runner", count=lost, total=int(frame[-1] - frame[0] + 1)))
    if not np.all(whole):
        remarks.append(notice("cut_by_edge", count=int(np.count_nonzero(~whole))))
    lows = [(t, low) for t, b, w in zip(t_s, bodies, whole, strict=True) if w for low in b.lows]
    seen = uv[whole, 0]
    return Track(
        frame=frame,
        t_s=t_s,
        uv_px=uv,
        cov_px2=np.broadcast_to(np.diag(_noise_px(uv, whole) ** 2), (t_s.size, 2, 2)),
        box_px=np.array([b.box for b in bodies]),
        area_px=np.array([b.area for b in bodies]),
        whole=whole,
        spread_px=np.array([b.spread for b in bodies]),
        low_t_s=np.array([t for t, _ in lows]),
        low_uv_px=np.array([low for _, low in lows]).reshape(-1, 3),
        direction=1 if seen[-1] >= seen[0] else -1,
        notices=tuple(remarks),
    )


def _outliers(t_s: Array, uv: Array, whole: Bools) -> Bools:
    """Single frames that jump along the path: half a body swallowed, a shadow joined for a moment."""
    odd = np.zeros(t_s.size, dtype=bool)
    index = np.flatnonzero(whole)
    y, t = uv[index, 0], t_s[index]
    miss = np.zeros(index.size)
    for i in range(index.size):
        a = max(0, min(i - 6, index.size - 13))
        near = np.delete(np.arange(a, min(a + 13, index.size)), i - a)
        miss[i] = y[i] - np.polyfit(t[near] - t[i], y[near], 2 if near.size > 5 else 1)[-1]
    odd[index[np.abs(miss) > 8 * (1.4826 * float(np.median(np.abs(miss))) + 0.3)]] = True
    return odd


def _noise_px(uv: Array, whole: Bools) -> Array:
    """Frame-to-frame noise sd (2,) [px] by third differences of evenly spaced rows, robust.

    Third differences remove any quadratic path; for white noise their variance is 20 sd^2 (1, -3, 3, -1).
    """
    out = np.empty(2)
    for axis in (0, 1):
        y = uv[whole, axis]
        third = np.diff(y, 3)
        out[axis] = 1.4826 * float(np.median(np.abs(third))) / np.sqrt(20.0) if third.size > 8 else 0.5
    return np.maximum(out, 0.05)
