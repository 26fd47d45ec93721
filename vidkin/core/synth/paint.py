"""Draws runners and their shadows into a crop: round cones through the true projection, shaded, in depth order."""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from numpy.typing import NDArray

from vidkin.core.synth.body import Poses
from vidkin.core.synth.lens import Lens
from vidkin.core.synth.scene import Light
from vidkin.core.synth.shapes import Shapes
from vidkin.core.synth.texture import Image, f32
from vidkin.stages import Array

Box = tuple[int, int, int, int]

_ARC = 9
_SHIFT = 4


@dataclass(frozen=True, slots=True, kw_only=True)
class Lit:
    """Light: `sun`, `up` unit vectors in the camera's axes, `to_sun` in the world's; colours (3,) of sun and sky."""

    sun: Array
    up: Array
    to_sun: Array
    sun_colour: Array
    sky_colour: Array

    @property
    def on_ground(self) -> tuple[Array, Array]:
        """Light (3,) that level ground gets from the sun and from the sky."""
        return self.sun_colour * max(float(self.to_sun[2]), 0.0), self.sky_colour


def lit(light: Light, lens: Lens) -> Lit:
    """Light of the scene as the camera sees it."""
    az, el = np.radians(light.azimuth_deg), np.radians(light.elevation_deg)
    world = np.array([np.cos(el) * np.cos(az), np.cos(el) * np.sin(az), np.sin(el)])
    direct = (1 - light.overcast) * light.strength
    return Lit(
        sun=lens.matrix @ world,
        up=lens.matrix @ np.array([0.0, 0.0, 1.0]),
        to_sun=world,
        sun_colour=direct * 0.95 * np.array([1.04, 1.0, 0.92]),
        sky_colour=(0.26 + 0.50 * light.overcast) * np.array([0.92, 0.99, 1.12]),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Actor:
    """A runner ready to be drawn."""

    poses: Poses
    shapes: Shapes


def joints_in_frame(lens: Lens, actor: Actor, lag_s: Array, *, t_s: float, readout_s: float) -> Array:
    """Joints (K, J, 3) at `lag_s` (K,) from mid-exposure, each at the time its own row is exposed.

    Row v is exposed around t + readout (v - (H - 1) / 2) / H.
    """
    height = lens.size_px[1]
    base = np.broadcast_to((t_s + lag_s)[:, None], (lag_s.size, actor.poses.joints_m.shape[1]))
    joints = actor.poses.at(base)
    for _ in range(2):
        v = lens.project(joints)[..., 1]
        v = np.where(np.isfinite(v), np.clip(v, -height, 2 * height), height / 2)
        joints = actor.poses.at(base + readout_s * (v - (height - 1) / 2) / height)
    return joints


def outlines(start: Array, end: Array, radius: Array) -> Array:
    """Convex outlines (P, n, 2) of discs at `start`, `end` (P, 2) with `radius` (P, 2), and the strip between."""
    axis = end - start
    length = np.linalg.norm(axis, axis=1)
    heading = np.arctan2(axis[:, 1], axis[:, 0])
    half = np.arccos(np.clip((radius[:, 0] - radius[:, 1]) / np.maximum(length, 1e-9), -1, 1))
    share = np.linspace(0, 1, _ARC)
    back = heading[:, None] + half[:, None] + share * (2 * np.pi - 2 * half[:, None])
    front = heading[:, None] - half[:, None] + share * 2 * half[:, None]
    first = start[:, None] + radius[:, :1, None] * np.stack([np.cos(back), np.sin(back)], -1)
    second = end[:, None] + radius[:, 1:, None] * np.stack([np.cos(front), np.sin(front)], -1)
    return np.concatenate([first, second], axis=1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Flat:
    """Round cones in the picture (P,), far ones first: disc centres, radii [px], and the looks of each."""

    start: Array
    end: Array
    radius: Array
    colour: Array
    pattern: Array
    round_ends: Array
    dim: Array

    @property
    def box(self) -> Array:
        """Left, top, right, bottom [px]."""
        low = np.minimum(self.start - self.radius[:, :1], self.end - self.radius[:, 1:]).min(axis=0)
        high = np.maximum(self.start + self.radius[:, :1], self.end + self.radius[:, 1:]).max(axis=0)
        return np.concatenate([low, high])


def flatten(lens: Lens, actor: Actor, joints: Array) -> Flat | None:
    """Project a runner's cones; None where none is in front of the camera and inside the lens model."""
    shape = actor.shapes
    count = len(shape.radius_m)
    points = (shape.ends.reshape(2 * count, -1) @ joints).reshape(count, 2, 3)
    rims = points + shape.radius_m[..., None] * lens.matrix[0]
    centre, rim = lens.project(points), lens.project(rims)
    size = np.linalg.norm(rim - centre, axis=2)
    distance = np.linalg.norm(points.mean(axis=1) - lens.centre_m, axis=1)
    good = np.isfinite(centre).all(axis=(1, 2)) & np.isfinite(size).all(axis=1)
    if not good.any():
        return None
    rank = np.flatnonzero(good)[np.argsort(-(distance - shape.order)[good], kind="stable")]
    behind = np.clip((distance - distance[good].mean()) / 0.25, 0, 1)
    return Flat(
        start=centre[rank, 0],
        end=centre[rank, 1],
        radius=size[rank],
        colour=shape.colour[rank],
        pattern=shape.pattern[rank],
        round_ends=shape.round_ends[rank],
        dim=1 - 0.28 * behind[rank],
    )


def _fill(image: NDArray[np.uint8], polygons: Array, values: NDArray[np.int64]) -> None:
    fixed = np.round(polygons * (1 << _SHIFT)).astype(np.int32)
    for polygon, value in zip(fixed, values.tolist(), strict=True):
        cv2.fillConvexPoly(image, polygon, value, lineType=cv2.LINE_8, shift=_SHIFT)


def draw(flat: Flat, light: Lit, weave: Image, crop: Box, *, scale: int, shift_px: Array) -> Image:
    """Colour times coverage and coverage (h, w, 4) of one instant in `crop` (left, top, right, bottom) [px].

    Each pixel is sampled at `scale` x `scale` points, moved by `shift_px` (2,) within the pixel.
    """
    left, top, right, bottom = crop
    offset = np.array([left, top]) + shift_px
    # the centre of pixel (left, top) is at (scale - 1) / 2 in the finer grid
    start = (flat.start - offset) * scale + (scale - 1) / 2
    end = (flat.end - offset) * scale + (scale - 1) / 2
    # a filled polygon covers its rim's pixels, half a pixel too much
    radius = np.maximum(flat.radius * scale - 0.5, 0.4)
    label = np.zeros(((bottom - top) * scale, (right - left) * scale), dtype=np.uint8)
    _fill(label, outlines(start, end, radius), np.arange(1, len(radius) + 1))
    fine = np.zeros((*label.shape, 4), dtype=np.float32)
    rows, columns = np.nonzero(label)
    if rows.size:
        fine[rows, columns] = _shade(label[rows, columns], rows, columns, (start, end, radius, flat), light, weave)
    return f32(cv2.resize(fine, (right - left, bottom - top), interpolation=cv2.INTER_AREA))


def _shade(
    label: NDArray[np.uint8],
    rows: NDArray[np.int64],
    columns: NDArray[np.int64],
    cones: tuple[Array, Array, Array, Flat],
    light: Lit,
    weave: Image,
) -> Image:
    """Lambert light on round cones, colour and a 1 for coverage (n, 4); `weave` is the cloth's and skin's texture."""
    start, end, radius, flat = cones
    axis = end - start
    square = np.maximum((axis**2).sum(1), 1e-6)
    table = np.column_stack(
        [start, axis, 1 / square, radius[:, 0], np.diff(radius)[:, 0], flat.round_ends, flat.pattern, flat.dim]
    ).astype(np.float32)
    which = label.astype(np.intp) - 1
    cell = table[which].T
    dx, dy = columns - cell[0], rows - cell[1]
    raw = (dx * cell[2] + dy * cell[3]) * cell[4]
    s = np.clip(raw, 0, 1)
    # past a limb's end only a round part (head, hand) curves away; elsewhere the next part carries on
    beyond = s + (raw - s) * (1 - cell[7])
    inverse = 1 / (cell[5] + s * cell[6])
    nx, ny = (dx - beyond * cell[2]) * inverse, (dy - beyond * cell[3]) * inverse
    nz = np.sqrt(np.maximum(1 - nx * nx - ny * ny, 0.03))
    sun, up = light.sun.astype(np.float32), light.up.astype(np.float32)
    direct = np.maximum(nx * sun[0] + ny * sun[1] - nz * sun[2], 0)
    sky = 0.60 + 0.40 * (nx * up[0] + ny * up[1] - nz * up[2])
    i = (s * 37 + which * 11).astype(np.intp) % weave.shape[0]
    j = (np.clip(nx + ny + 1.5, 0, 3) * 15).astype(np.intp) % weave.shape[1]
    tone = (1 + cell[8] * weave[i, j]) * cell[9]
    colour = flat.colour.astype(np.float32)[which] * tone[:, None]
    out = np.ones((rows.size, 4), dtype=np.float32)
    level = direct[:, None] * light.sun_colour.astype(np.float32) + sky[:, None] * light.sky_colour.astype(np.float32)
    out[:, :3] = colour * level
    return out


def shadow_outlines(lens: Lens, actor: Actor, joints: Array, to_sun: Array) -> Array:
    """Outlines (P, n, 2) [px] of the cones' shadows on the ground z = 0.

    A sphere's shadow is an ellipse: its radius across the sun's azimuth, radius / sin(elevation) along it.
    """
    shape = actor.shapes
    ends = np.einsum("pej,jk->pek", shape.ends, joints)
    foot = ends - ends[..., 2:3] / to_sun[2] * to_sun
    along = to_sun[:2] / np.linalg.norm(to_sun[:2])
    across = np.array([-along[1], along[0]])
    stretch = 1 / to_sun[2]
    flat = np.stack([foot[..., :2] @ along / stretch, foot[..., :2] @ across], axis=-1)
    ring = outlines(flat[:, 0], flat[:, 1], shape.radius_m)
    ground = (ring[..., :1] * stretch) * along + ring[..., 1:] * across
    points = np.concatenate([ground, np.zeros((*ground.shape[:2], 1))], axis=-1)
    return lens.project(points)


def draw_shadow(polygons: Array, crop: Box, *, blur_px: float) -> Image:
    """Share of the sun hidden (h, w) in `crop`."""
    left, top, right, bottom = crop
    scale = 2
    mask = np.zeros(((bottom - top) * scale, (right - left) * scale), dtype=np.uint8)
    placed = (polygons - np.array([left, top])) * scale + (scale - 1) / 2
    placed = placed[np.isfinite(placed).all(axis=(1, 2)) & (np.abs(placed).max(axis=(1, 2)) < 3e4)]
    _fill(mask, placed, np.full(len(placed), 255))
    small = f32(cv2.resize(mask, (right - left, bottom - top), interpolation=cv2.INTER_AREA)) / np.float32(255)
    return f32(cv2.GaussianBlur(small, (0, 0), max(blur_px, 0.3)))
