"""Things that stand on the ground and mark places: cones, drawn into the static picture; and the clicked marks."""

from __future__ import annotations

import cv2
import numpy as np
from numpy.typing import NDArray

from vidkin.core.synth.lens import Lens
from vidkin.core.synth.paint import Lit
from vidkin.core.synth.scene import Scene
from vidkin.core.synth.texture import Image, f32
from vidkin.stages import Array, Mark

_ASIDE_M = 0.22
_SLIM = 0.36
_SCALE = 8
_EDGE_PX = 4.0
_ORANGE = np.array([0.72, 0.17, 0.03])


def visible_x(scene: Scene, every_m: float, y_m: float) -> Array:
    """Places every `every_m` from the start line at lateral `y_m` whose ground point is inside the picture (K,)."""
    if every_m <= 0:
        return np.zeros(0)
    x: Array = scene.lane.start_x_m + every_m * np.arange(-20.0, 61.0)
    points = np.column_stack([x, np.full(x.size, y_m), np.zeros(x.size)])
    return np.asarray(x[inside(scene, points)])


def inside(scene: Scene, points_m: Array) -> NDArray[np.bool_]:
    """Whether points (N, 3) are seen, at least a few pixels from the picture's edge."""
    uv = Lens(scene.camera, scene.size_px).project(points_m)
    w, h = scene.size_px
    with np.errstate(invalid="ignore"):
        seen = (uv > _EDGE_PX).all(axis=1) & (uv[:, 0] < w - 1 - _EDGE_PX) & (uv[:, 1] < h - 1 - _EDGE_PX)
    return np.asarray(seen)


def cone_places(scene: Scene) -> list[Array]:
    """Foot (3,) [m] of every cone in view: beside the lane's lines, outside the lane."""
    markers, lane = scene.markers, scene.lane
    if markers.cone_height_m <= 0:
        return []
    return [
        np.array([x, y, 0.0])
        for y in (lane.centre_y_m + sign * (lane.width_m / 2 + _ASIDE_M) for sign in (-1, 1))
        for x in visible_x(scene, markers.cone_every_m, y)
    ]


def draw_cones(scene: Scene, lens: Lens, light: Lit, picture: Image, ground: Image) -> Image:
    """Draw cones and their shadows into `picture`; returns the cover (H, W) of those this side of the lane."""
    front = np.zeros(picture.shape[:2], np.float32)
    height = scene.markers.cone_height_m
    places = sorted(cone_places(scene), key=lambda p: -float(np.linalg.norm(p - lens.centre_m)))
    turn = np.linspace(0, 2 * np.pi, 24, endpoint=False)
    ring = np.stack([np.cos(turn), np.sin(turn), np.zeros_like(turn)], -1)
    for foot in places:
        tip = foot + np.array([0, 0, height])
        base = foot + _SLIM / 2 * height * ring
        shaded = tip - tip[2] / max(float(light.to_sun[2]), 0.2) * light.to_sun
        dark, box = _cover(lens, np.vstack([base, shaded]))
        direct, sky = light.on_ground
        keep = sky / (sky + direct)
        patch = picture[box]
        patch *= 1 - (dark * ground[box])[..., None] * (1 - keep).astype(np.float32)
        body, box = _cover(lens, np.vstack([base, tip + 0.02 * height * ring]))
        band, _ = _cover(lens, _frustum(foot, ring, height, 0.45, 0.68), box)
        sun_side = float(light.sun[0])
        across = np.linspace(-1, 1, body.shape[1])[None, :, None]
        facing = np.clip(0.45 + 0.45 * sun_side * across - 0.3 * light.sun[2], 0, 1)
        lit = light.sky_colour * 0.8 + light.sun_colour * facing
        colour = (_ORANGE + band[..., None] * (0.75 - _ORANGE)) * lit
        patch = picture[box]
        patch += body[..., None] * (colour - patch)
        if scene.side * (foot[1] - scene.lane.centre_y_m) < 0:
            front[box] = np.maximum(front[box], body)
    return front


def _frustum(foot: Array, ring: Array, height: float, low: float, high: float) -> Array:
    radius = _SLIM / 2 * height
    return np.vstack([foot + radius * (1 - s) * ring + np.array([0, 0, s * height]) for s in (low, high)])


def _cover(lens: Lens, points: Array, box: tuple[slice, slice] | None = None) -> tuple[Image, tuple[slice, slice]]:
    """Cover of the convex outline of world points, and where it lies in the picture."""
    uv = lens.project(points)
    w, h = lens.size_px
    if box is None:
        low = np.clip(np.floor(uv.min(axis=0)).astype(int) - 1, 0, [w - 2, h - 2])
        high = np.clip(np.ceil(uv.max(axis=0)).astype(int) + 2, low + 1, [w, h])
        box = slice(low[1], high[1]), slice(low[0], high[0])
    corner = np.array([box[1].start, box[0].start])
    fine = np.zeros(((box[0].stop - box[0].start) * _SCALE, (box[1].stop - box[1].start) * _SCALE), np.uint8)
    hull = cv2.convexHull(((uv - corner) * _SCALE + (_SCALE - 1) / 2).astype(np.float32))
    cv2.fillConvexPoly(fine, np.round(hull * 16).astype(np.int32), 255, shift=4)
    small = cv2.resize(fine, (fine.shape[1] // _SCALE, fine.shape[0] // _SCALE), interpolation=cv2.INTER_AREA)
    return f32(small) / np.float32(255), box


def marks(scene: Scene, rng: np.random.Generator, *, sd_px: float = 0.7) -> tuple[Mark, ...]:
    """Ticks, cone tips and start-line corners in view, as clicked: true projection plus Gaussian error `sd_px`."""
    lane = scene.lane
    places: list[tuple[str, Array]] = []
    lines = {"near" if sign * scene.side < 0 else "far": lane.centre_y_m + sign * lane.width_m / 2 for sign in (-1, 1)}
    for name, y in lines.items():
        if scene.markers.tick_every_m > 0:
            places.extend(
                (f"{x - lane.start_x_m:g} m, {name} line", np.array([x, y, 0.0]))
                for x in visible_x(scene, scene.markers.tick_every_m, y)
            )
        else:
            places.extend(
                (f"start, {name} line", p) for p in [np.array([lane.start_x_m, y, 0.0])] if inside(scene, p[None])[0]
            )
    for foot in cone_places(scene):
        side = "near" if scene.side * (foot[1] - lane.centre_y_m) < 0 else "far"
        tip = foot + np.array([0.0, 0.0, scene.markers.cone_height_m])
        places.append((f"{foot[0] - lane.start_x_m:g} m, {side} cone tip", tip))
    if not places:
        return ()
    xyz = np.array([p for _, p in places])
    uv = Lens(scene.camera, scene.size_px).project(xyz)
    uv = uv + rng.normal(0.0, sd_px, uv.shape)
    seen = inside(scene, xyz)
    return tuple(
        Mark(label=label, xyz_m=p, uv_px=q, sd_px=max(sd_px, 0.05))
        for (label, p), q, ok in zip(places, uv, seen, strict=True)
        if ok
    )
