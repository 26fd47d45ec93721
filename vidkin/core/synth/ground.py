"""The static picture: track, lines, ticks, start line and what stands behind, ray-cast through the scene's optics."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import cv2
import numpy as np

from vidkin.constants import LANE_PITCH_M, LINE_WIDTH_M
from vidkin.core import optics
from vidkin.core.synth.lens import Lens
from vidkin.core.synth.paint import Lit
from vidkin.core.synth.scene import Scene
from vidkin.core.synth.texture import Image, f32, look_up, share_covered, tile
from vidkin.stages import Array

#: Samples per pixel along and down the picture.
FINE: Final = (2, 2)
_COARSE_PX: Final = 8
_BAND_ROWS: Final = 40

_SURFACES: Final = {
    "red": (0.235, 0.062, 0.042),
    "blue": (0.045, 0.115, 0.270),
    "grey": (0.155, 0.155, 0.160),
    "grass": (0.085, 0.128, 0.038),
}
_GRASS: Final = np.array([0.092, 0.128, 0.042], dtype=np.float32)
_LEAVES: Final = np.array([0.040, 0.062, 0.022], dtype=np.float32)
_WHITE: Final = np.array([0.78, 0.78, 0.75], dtype=np.float32)


@dataclass(frozen=True, slots=True, kw_only=True)
class Static:
    """Linear light (H, W, 3); `ground` (H, W) share of ground (where shadows fall); `leaves` (H, W) what sways."""

    light: Image
    ground: Image
    leaves: Image


@lru_cache(maxsize=2)
def _textures(seed: int) -> _Textures:
    return _Textures(np.random.default_rng([seed, 1]))


class _Textures:
    def __init__(self, rng: np.random.Generator) -> None:
        self.rough, self.smooth, self.cloud = tile(rng, slope=0.45), tile(rng, slope=1.0), tile(rng, slope=1.7)
        self.blades = tile(rng, slope=0.75)


def view(lens: Lens) -> tuple[Image, Image]:
    """Undistorted tangents x, y on the fine grid, interpolated from a coarse one (error below 0.01 px)."""
    w, h = lens.size_px
    step = float(_COARSE_PX)
    coarse_u, coarse_v = (np.arange(-step, size + 2 * step, step) for size in (w, h))
    grid = np.stack(np.meshgrid(coarse_u, coarse_v), axis=-1).reshape(-1, 2)
    xy = optics.undistort(lens.parameters, grid, lens.size_px).reshape(coarse_v.size, coarse_u.size, 2)

    def weights(count: int, fine: int, nodes: Array) -> Image:
        position = (np.arange(count * fine) - (fine - 1) / 2) / fine
        place = (position - nodes[0]) / _COARSE_PX
        low = np.floor(place).astype(np.int64)
        out = np.zeros((count * fine, nodes.size), np.float32)
        row = np.arange(count * fine)
        out[row, low], out[row, low + 1] = 1 - (place - low), place - low
        return out

    along, down = weights(w, FINE[0], coarse_u), weights(h, FINE[1], coarse_v)
    fine_x, fine_y = (down @ (xy[..., k].astype(np.float32) @ along.T) for k in (0, 1))
    return np.asarray(fine_x), np.asarray(fine_y)


def static_picture(scene: Scene, lens: Lens, light: Lit) -> Static:
    """Ray-cast the whole static picture, a band of rows at a time."""
    w, h = scene.size_px
    x, y = view(lens)
    look = _textures(scene.seed)
    out = Static(
        light=np.zeros((h, w, 3), np.float32), ground=np.zeros((h, w), np.float32), leaves=np.zeros((h, w), np.float32)
    )
    matrix = lens.matrix.astype(np.float32)
    for top in range(0, h, _BAND_ROWS):
        rows = min(_BAND_ROWS, h - top)
        part = slice(top * FINE[1], (top + rows) * FINE[1])
        tangent = np.stack([x[part], y[part], np.ones_like(x[part])], axis=-1)
        colour, ground, leaves = _cast(scene, lens, np.asarray(tangent @ matrix), light, look)
        for target, fine in ((out.light, colour), (out.ground, ground), (out.leaves, leaves)):
            target[top : top + rows] = cv2.resize(fine, (w, rows), interpolation=cv2.INTER_AREA)
    return out


def _cast(scene: Scene, lens: Lens, ray: Image, light: Lit, look: _Textures) -> tuple[Image, Image, Image]:
    down = ray[..., 2]
    below = down < -1e-4
    depth = np.where(below, -np.float32(lens.centre_m[2]) / np.where(below, down, -1), 0)
    x, y = np.float32(lens.centre_m[0]) + depth * ray[..., 0], np.float32(lens.centre_m[1]) + depth * ray[..., 1]
    away = scene.side * (y - np.float32(scene.lane.centre_y_m))
    layers = _LAYERS[scene.place.backdrop]
    seen = below & (away < _backdrop_away(scene) + layers[0][1]) & (depth > 0)
    ground = seen.astype(np.float32)
    if seen.all():
        shown = _floor(scene, x, y, light, look), np.zeros_like(x)
    else:
        shown = _layer(scene, lens, ray, layers[0], (light, look), (_sky(scene, ray, look), np.zeros_like(x)))
        if seen.any():
            shown = np.where(seen[..., None], _floor(scene, x, y, light, look), shown[0]), np.where(seen, 0, shown[1])
    for layer in layers[1:]:
        shown = _layer(scene, lens, ray, layer, (light, look), shown, ground)
    return shown[0], ground, shown[1]


def _backdrop_away(scene: Scene) -> float:
    return (scene.place.lanes_far + 0.5) * LANE_PITCH_M + scene.place.backdrop_m


def _floor(scene: Scene, x: Image, y: Image, light: Lit, look: _Textures) -> Image:
    """Light from the ground at (x, y): surface, lines, ticks; evenly lit by sun and sky."""
    place, lane, markers = scene.place, scene.lane, scene.markers
    contrast = np.float32(place.contrast)
    wide_x = f32(np.abs(np.gradient(x, axis=1)) + np.abs(np.gradient(x, axis=0)) * np.float32(0.5))
    wide_y = f32(np.abs(np.gradient(y, axis=0)) + np.abs(np.gradient(y, axis=1)) * np.float32(0.5))
    away = scene.side * (y - np.float32(lane.centre_y_m))
    low, high = -(place.lanes_near + 0.5) * LANE_PITCH_M, (place.lanes_far + 0.5) * LANE_PITCH_M
    fine = look_up(look.smooth, x, y, (7.9, 6.7))
    blades = look_up(look.blades, y, x, (3.7, 4.3))
    patches = look_up(look.smooth, x, y, (17.0, 13.0))
    stains = look_up(look.cloud, x + y * 0.3, y, (41.0, 33.0))
    track = np.array(_SURFACES[place.surface], dtype=np.float32)
    worn = np.cos(2 * np.pi * away / np.float32(LANE_PITCH_M))  # runners polish the middle of each lane
    tone = 1 + contrast * (0.08 * fine + 0.06 * blades + 0.05 * patches + 0.06 * stains - 0.035 * worn)
    if place.surface == "grass":
        tone += contrast * 0.13 * np.sign(np.sin(x * np.float32(2 * np.pi / 9.0)))
        tone += contrast * (0.10 * fine + 0.12 * blades)
    colour = track * np.maximum(tone, 0.2)[..., None]
    turf = np.maximum(1 + contrast * (0.17 * fine + 0.26 * blades + 0.12 * patches + 0.16 * stains), 0.15)
    grass = _GRASS * turf[..., None]
    outside = (away < low - 0.15) | (away > high + 0.15)
    colour = np.where(outside[..., None], grass, colour)
    # kerb of concrete between track and grass
    kerb = share_covered(away, wide_y, centre=high + 0.10, extent=0.12)
    colour += kerb[..., None] * (np.array([0.30, 0.29, 0.27], np.float32) * (1 + 0.1 * fine)[..., None] - colour)
    wear = np.clip(0.90 + contrast * (0.05 * fine + 0.05 * patches), 0.4, 1.0)
    edge = lane.centre_y_m - LANE_PITCH_M / 2
    nearest = f32(edge + LANE_PITCH_M * np.round((y - edge) / np.float32(LANE_PITCH_M)))
    line = share_covered(y, wide_y, centre=nearest, extent=LINE_WIDTH_M)
    line = np.where((away > low - 0.1) & (away < high + 0.1), line, 0)
    start = share_covered(x, wide_x, centre=lane.start_x_m, extent=LINE_WIDTH_M)
    start = start * ((away > low) & (away < high))
    white = np.maximum(line, start) * wear
    colour += white[..., None] * (_WHITE - colour)
    tick = np.zeros_like(x)
    every, (long, broad) = markers.tick_every_m, markers.tick_size_m
    if every > 0:
        spot = f32(lane.start_x_m + every * np.round((x - lane.start_x_m) / np.float32(every)))
        for sign in (-1, 1):
            centre_y = lane.centre_y_m + sign * lane.width_m / 2
            here = share_covered(x, wide_x, centre=spot, extent=long)
            tick = np.maximum(tick, here * share_covered(y, wide_y, centre=centre_y, extent=broad))
    colour += tick[..., None] * (np.array(markers.tick_colour, np.float32) - colour)
    direct, sky = light.on_ground
    level = direct + sky
    return np.asarray(colour * level.astype(np.float32), dtype=np.float32)


def _sky(scene: Scene, ray: Image, look: _Textures) -> Image:
    slant = ray[..., 2] / np.sqrt(np.sum(ray * ray, axis=-1))
    heading = np.arctan2(ray[..., 1], ray[..., 0])
    climb = np.clip(slant, 0, 0.6)[..., None] / 0.6
    sky = np.array([0.56, 0.63, 0.72], np.float32) * (1 - climb) + np.array([0.22, 0.36, 0.62], np.float32) * climb
    cloud = look_up(look.cloud, heading, slant * 3, (1.3, 1.6))
    veil = np.clip(0.30 + 0.35 * cloud + 0.8 * scene.light.overcast, 0, 1)[..., None]
    return np.asarray(sky * (1 - veil) + np.array([0.68, 0.69, 0.71], np.float32) * veil, dtype=np.float32)


def _layer(
    scene: Scene,
    lens: Lens,
    ray: Image,
    layer: tuple[str, float, float],
    shown: tuple[Lit, _Textures],
    under: tuple[Image, Image],
    ground: Image | None = None,
) -> tuple[Image, Image]:
    """Paint an upright layer over `under` (light, share of leaves); the ground it hides is taken off `ground`."""
    kind, extra, tall = layer
    plane_y = scene.lane.centre_y_m + scene.side * (_backdrop_away(scene) + extra)
    across = ray[..., 1] * np.float32(scene.side)
    ahead = across > 1e-3
    far = np.float32(scene.side * (plane_y - lens.centre_m[1]))
    depth = np.where(ahead, far / np.where(ahead, across, 1), 0)
    x, z = np.float32(lens.centre_m[0]) + depth * ray[..., 0], np.float32(lens.centre_m[2]) + depth * ray[..., 2]
    if z.min() > 2.0 * tall or z.max() < 0:
        return under
    shade, cover = _LAYER[kind](scene, x + np.float32(extra * 7.3), z, tall, *shown)
    cover = np.where(ahead & (z > 0), cover, 0).astype(np.float32)
    leafy = cover if kind in ("trees", "hedge") else np.float32(0)
    if ground is not None:
        ground *= 1 - cover
    colour = under[0] * (1 - cover[..., None]) + shade * cover[..., None]
    return np.asarray(colour, dtype=np.float32), np.asarray(np.maximum(under[1] * (1 - cover), leafy), dtype=np.float32)


def _face(light: Lit, scene: Scene) -> Array:
    """Light on an upright surface that faces the camera."""
    facing = max(-scene.side * float(light.to_sun[1]), 0.0)
    return np.asarray(light.sun_colour * (0.25 + 0.6 * facing) + 0.75 * light.sky_colour)


def _trees(scene: Scene, x: Image, z: Image, tall: float, light: Lit, look: _Textures) -> tuple[Image, Image]:
    crown = tall * (1 + 0.16 * look_up(look.cloud, x, np.zeros_like(x), (tall * 14, 1.0)))
    ragged = 0.10 * tall * look_up(look.smooth, x, z, (tall * 1.3, tall * 1.3))
    cover = np.clip((crown + ragged - z) / (0.02 * tall) + 0.5, 0, 1)
    clumps = look_up(look.smooth, x, z, (tall * 1.1, tall * 0.9))
    fine = look_up(look.rough, x, z, (tall * 0.5, tall * 0.5))
    tone = np.exp(scene.place.contrast * (0.42 * clumps + 0.40 * fine) - 0.25 + 0.25 * np.clip(z / tall, 0, 1))
    # each tree has its own green
    kind = look_up(look.smooth, x, 0.15 * z, (tall * 9, tall * 4))[..., None]
    hue = 1 + np.clip(clumps, -1, 1)[..., None] * np.array([0.12, 0.03, -0.05], np.float32)
    hue = hue * np.exp(kind * np.array([0.20, 0.11, 0.10], np.float32))
    return _LEAVES * hue * tone[..., None] * _face(light, scene).astype(np.float32), cover


def _hedge(scene: Scene, x: Image, z: Image, tall: float, light: Lit, look: _Textures) -> tuple[Image, Image]:
    ragged = 0.05 * tall * look_up(look.rough, x, np.zeros_like(x), (4.0, 1.0))
    cover = np.clip((tall + ragged - z) / 0.03 + 0.5, 0, 1)
    fine, clumps = look_up(look.rough, x, z, (1.7, 1.7)), look_up(look.smooth, x, z, (3.1, 2.7))
    tone = np.exp(scene.place.contrast * (0.45 * fine + 0.30 * clumps)) * (0.55 + 0.6 * np.clip(z / tall, 0, 1))
    return np.array([0.056, 0.082, 0.028], np.float32) * tone[..., None] * _face(light, scene).astype(np.float32), cover


def _boards(scene: Scene, x: Image, z: Image, tall: float, light: Lit, look: _Textures) -> tuple[Image, Image]:
    cover = np.clip((tall - z) / 0.02 + 0.5, 0, 1)
    plank = np.floor(x / np.float32(0.14))
    tint = np.mod(np.sin(plank * 12.9898) * 43758.5453, 1.0).astype(np.float32) - 0.5
    gap = np.abs(np.mod(x / np.float32(0.14), 1.0) - 0.5) > 0.46
    grain = look_up(look.smooth, x * 8, z, (5.0, 6.0))
    tone = (1 + scene.place.contrast * (0.35 * tint + 0.08 * grain)) * np.where(gap, 0.35, 1.0)
    return np.array([0.20, 0.155, 0.11], np.float32) * tone[..., None] * _face(light, scene).astype(np.float32), cover


def _mesh(scene: Scene, x: Image, z: Image, tall: float, light: Lit, look: _Textures) -> tuple[Image, Image]:
    post = np.abs(np.mod(x, np.float32(2.5)) - 1.25) < 0.03
    rail = np.abs(z - tall) < 0.025
    wire = 0.18 * (z < tall)
    cover = np.maximum(np.where(post & (z < tall), 1.0, 0.0), np.where(rail, 1.0, wire))
    tone = 1 + 0.1 * look_up(look.smooth, x, z, (3.0, 3.0))
    return np.array([0.16, 0.17, 0.17], np.float32) * tone[..., None] * _face(light, scene).astype(np.float32), cover


def _seats(scene: Scene, x: Image, z: Image, tall: float, light: Lit, look: _Textures) -> tuple[Image, Image]:
    cover = np.clip((tall - z) / 0.03 + 0.5, 0, 1)
    row, seat = np.floor(z / np.float32(0.45)), np.floor(x / np.float32(0.5))
    up, along = np.mod(z / np.float32(0.45), 1.0), np.mod(x / np.float32(0.5), 1.0) - 0.5
    mix = np.mod(np.sin(seat * 12.9898 + row * 78.233) * 43758.5453, 1.0).astype(np.float32)
    back = (np.abs(along) < 0.42) & (up > 0.35) & (row > 2)
    blue, pale = np.array([0.07, 0.10, 0.19], np.float32), np.array([0.26, 0.26, 0.25], np.float32)
    colour = np.where(
        back[..., None], blue * (0.8 + 0.4 * mix)[..., None], pale * np.where(up < 0.35, 0.5, 1.0)[..., None]
    )
    taken = (mix > 0.90) & (row > 2)
    coat = 0.04 + 0.16 * np.stack([np.mod(mix * 370, 1), np.mod(mix * 410, 1), np.mod(mix * 530, 1)], -1)
    colour = np.where((taken & (np.abs(along) < 0.36 - 0.2 * up) & (up < 0.8))[..., None], coat, colour)
    head = taken & (np.hypot(along, (up - 0.85) * 0.9) < 0.2)
    colour = np.where(head[..., None], np.array([0.22, 0.14, 0.10], np.float32), colour)
    tone = 1 + 0.12 * scene.place.contrast * look_up(look.smooth, x, z, (6.0, 6.0))
    return colour * tone[..., None] * _face(light, scene).astype(np.float32), cover


_LAYER: Final = {"trees": _trees, "hedge": _hedge, "boards": _boards, "mesh": _mesh, "seats": _seats}
#: Layers (kind, metres behind the backdrop line, height) from far to near.
_LAYERS: Final = {
    "trees": (("trees", 45.0, 13.0), ("trees", 18.0, 7.5), ("hedge", 4.0, 1.6), ("mesh", 0.0, 1.1)),
    "fence": (("trees", 30.0, 9.0), ("boards", 0.0, 2.0)),
    "stand": (("trees", 60.0, 14.0), ("seats", 0.0, 6.0), ("mesh", -1.0, 1.1)),
    "open": (("trees", 90.0, 9.0), ("hedge", 12.0, 1.2)),
}
