"""Where labels go: beside their points, inside the picture, off one another."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np

from vidkin.report.canvas import Box
from vidkin.stages import Array, Bools

_ANGLES: Final = np.radians([-90, -60, -120, -35, -145, 0, 180, 35, 145, 60, 120, 90])
_REACHES: Final = np.array([1.0, 2.0, 3.2, 4.6, 6.2, 8.0, 10.5])
_ROUNDS: Final = 4
_ALONG: Final = np.linspace(0.0, 0.98, 12)


def place_labels(
    points_px: Array, sizes_px: Array, size_px: tuple[int, int], *, gap_px: float, obstacles: Sequence[Box] = ()
) -> list[Box]:
    """A box for each label, inside the picture, overlapping others and `obstacles` as little as can be had.

    Greedy from the middle outwards over a fixed set of places round each point, then repeated with all others placed.

    Parameters
    ----------
    points_px : (M, 2) what each label belongs to
    sizes_px : (M, 2) width and height of each label
    size_px : width, height of the picture
    gap_px : shortest distance from point to label
    """
    if not len(points_px):
        return []
    points = np.clip(points_px, [0, 0], [size_px[0] - 1, size_px[1] - 1])
    choices = [_choices(p, s, size_px, gap_px) for p, s in zip(points, sizes_px, strict=True)]
    fixed = np.array(obstacles, dtype=np.float64).reshape(-1, 4)
    placed = np.zeros((len(points), 4))
    done = np.zeros(len(points), dtype=bool)
    order = np.argsort(np.hypot(*(points - np.median(points, axis=0)).T))
    reach = np.repeat(gap_px * _REACHES, len(_ANGLES))
    rank = np.tile(0.12 * gap_px * np.arange(len(_ANGLES)), len(_REACHES))
    for _ in range(_ROUNDS):
        before = placed.copy()
        for i in order:
            others = done.copy()
            others[i] = False
            taken = np.concatenate([placed[others], fixed])
            leads = np.stack([points[others], nearest_on(placed[others], points[others])], axis=1)
            cost = reach + rank + _crowding(choices[i], points[i], taken, leads, gap_px)
            cost = cost + 30.0 * gap_px * _covered(choices[i], points, 0.6 * gap_px)
            placed[i] = choices[i][int(np.argmin(cost))]
            done[i] = True
        if np.array_equal(placed, before):
            break
    return [(float(a), float(b), float(c), float(d)) for a, b, c, d in placed]


def overlap(a: Box, b: Box) -> float:
    """Shared area of two boxes [px^2]."""
    return max(0.0, min(a[2], b[2]) - max(a[0], b[0])) * max(0.0, min(a[3], b[3]) - max(a[1], b[1]))


def nearest_on(boxes: Array, points: Array) -> Array:
    """The point of each box (N, 4) nearest to each point (N, 2)."""
    return np.clip(points, boxes[..., :2], boxes[..., 2:])


def _choices(point: Array, size: Array, size_px: tuple[int, int], gap_px: float) -> Array:
    """Boxes (C, 4) round a point, shifted into the picture."""
    toward = np.column_stack([np.cos(_ANGLES), np.sin(_ANGLES)])
    stand_off = (_REACHES[:, None, None] * gap_px * toward).reshape(-1, 2)
    centre = point + stand_off + np.tile(np.sign(np.round(toward, 6)), (len(_REACHES), 1)) * size / 2
    low = np.clip(centre - size / 2, 2, np.maximum(2, np.array(size_px) - size - 3))
    return np.column_stack([low, low + size])


def _crowding(boxes: Array, point: Array, taken: Array, leads: Array, gap_px: float) -> Array:
    """Cost (C,) of what a label there would lie on or cross."""
    wide = np.minimum(boxes[:, None, 2:], taken[None, :, 2:]) - np.maximum(boxes[:, None, :2], taken[None, :, :2])
    shared = np.prod(np.maximum(wide, 0.0), axis=-1).sum(axis=1)
    ends = nearest_on(boxes, np.broadcast_to(point, (len(boxes), 2)))
    lead = point + _ALONG[:, None] * (ends[:, None, :] - point)
    crossed = _inside(lead[:, None], taken[None, :, None]).any(axis=-1).sum(axis=1)
    if len(leads):
        theirs = leads[:, None, 0] + _ALONG[:, None] * (leads[:, None, 1] - leads[:, None, 0])
        crossed = crossed + _inside(theirs[None], boxes[:, None, None]).any(axis=-1).sum(axis=1)
        crossed = crossed + _cross(point, ends, leads).sum(axis=1)
    return np.asarray(40.0 * shared / gap_px + 16.0 * gap_px * crossed)


def _covered(boxes: Array, points: Array, halo_px: float) -> Array:
    """How many points each box (C, 4), grown by a halo, lies on."""
    grown = boxes + np.array([-halo_px, -halo_px, halo_px, halo_px])
    return np.asarray(_inside(points[None], grown[:, None]).sum(axis=1), dtype=np.float64)


def _inside(points: Array, boxes: Array) -> Bools:
    return np.asarray(np.all((points > boxes[..., :2]) & (points < boxes[..., 2:]), axis=-1))


def _cross(point: Array, ends: Array, leads: Array) -> Bools:
    """Whether the lines point -> ends (C, 2) cross the lines `leads` (L, 2, 2); (C, L)."""

    def side(p: Array, q: Array, r: Array) -> Array:
        return np.asarray(
            (q[..., 0] - p[..., 0]) * (r[..., 1] - p[..., 1]) - (q[..., 1] - p[..., 1]) * (r[..., 0] - p[..., 0])
        )

    a, b = leads[None, :, 0], leads[None, :, 1]
    e = ends[:, None]
    return np.asarray((side(point, e, a) * side(point, e, b) < 0) & (side(a, b, point) * side(a, b, e) < 0))
