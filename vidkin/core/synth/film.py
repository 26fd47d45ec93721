"""Frames of a scene: the static picture, runners and shadows over it, blur, rolling shutter, noise.

Time stamps: frame i has t = i / rate, and t is the MIDDLE of the exposure of the MIDDLE row. Row v is exposed
around t + readout (v - (H - 1) / 2) / H, for `exposure_s`.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import lru_cache

import cv2
import numpy as np
from numpy.typing import NDArray

from vidkin.core.synth.body import Poses, solve_poses
from vidkin.core.synth.gait import Contacts, Path, path, plan_steps
from vidkin.core.synth.ground import static_picture
from vidkin.core.synth.law import Sprint, integrate
from vidkin.core.synth.lens import Lens
from vidkin.core.synth.paint import (
    Actor,
    Box,
    Lit,
    draw,
    draw_shadow,
    flatten,
    joints_in_frame,
    lit,
    shadow_outlines,
)
from vidkin.core.synth.picture import Noise, Planes, planes, scaled
from vidkin.core.synth.props import draw_cones
from vidkin.core.synth.scene import Runner, Scene
from vidkin.core.synth.shapes import shapes
from vidkin.core.synth.texture import Image, f32
from vidkin.stages import Air, Array, Frame

_POSE_S = 1e-3
_INSTANTS = (5, 10)
#: Crops larger than this are sampled once a pixel and instant: a large body has few edge pixels for its size.
_LARGE_PX = 90_000
#: Low-discrepancy steps in the unit square (powers of the plastic number).
_STEPS = np.array([0.7548776662466927, 0.5698402909980532])
_AMBIENT = 0.30
_MARGIN_PX = 8
_GUSTS_HZ = np.array([0.31, 0.83, 1.9])
_CLOUDS_HZ = np.array([0.23, 0.61, 1.3])
_STRAIGHT_UP = np.array([1e-6, 0.0, 1.0])


def plan(scene: Scene, runner: Runner) -> tuple[Sprint, Contacts, Path]:
    """Law, contacts and path of one runner of the scene."""
    return _plan(runner, scene.air, scene.lane.start_x_m, scene.duration_s)


def poses(scene: Scene, runner: Runner) -> Poses:
    """Joints of one runner on a millisecond grid over the clip."""
    return _poses(runner, scene.air, scene.lane.start_x_m, scene.duration_s)


@lru_cache(maxsize=8)
def _plan(runner: Runner, air: Air, start_x_m: float, end_s: float) -> tuple[Sprint, Contacts, Path]:
    sprint = integrate(runner, air, start_x_m=start_x_m, until_s=end_s)
    contacts = plan_steps(runner, sprint, end_s)
    return sprint, contacts, path(runner, sprint, contacts, end_s)


@lru_cache(maxsize=8)
def _poses(runner: Runner, air: Air, start_x_m: float, end_s: float) -> Poses:
    sprint, contacts, route = _plan(runner, air, start_x_m, end_s)
    return solve_poses(runner, sprint, contacts, route, np.arange(-0.05, end_s + 0.05, _POSE_S))


class Film:
    """A scene ready to be filmed: holds all that is the same in every frame; `frame` draws any one of them."""

    def __init__(self, scene: Scene) -> None:
        self.scene, self.lens = scene, Lens(scene.camera, scene.size_px)
        self.light: Lit = lit(scene.light, self.lens)
        still = static_picture(scene, self.lens, self.light)
        self.front = draw_cones(scene, self.lens, self.light, still.light, still.ground)
        blur = scene.sensor.blur_px
        self.linear = f32(cv2.GaussianBlur(still.light, (0, 0), blur))
        # exposure control: a middle grey, weighted towards the ground as where the runner is
        weight = 0.3 + 0.7 * still.ground
        mean = float((self.linear.mean(axis=2) * weight).sum() / weight.sum())
        self.gain = float(np.clip(0.18 / mean, 0.4, 3.0))
        w, h = scene.size_px
        across, down = np.meshgrid(np.linspace(-1, 1, w), np.linspace(-h / w, h / w, h))
        fall = 1 - scene.sensor.vignette * (across**2 + down**2) / (1 + (h / w) ** 2)
        #: what the lens and the exposure make of the scene's light
        self.gains: Image = (self.gain * fall[..., None]).astype(np.float32)
        self.linear *= self.gains
        self.ground = still.ground
        self.empty = planes(self.linear)
        self.noise = Noise(scene.sensor, scene.size_px, np.random.default_rng([scene.seed, 2]))
        self.sd = self.noise.sd_map(self.empty.luma)
        weave = np.random.default_rng([scene.seed, 3]).standard_normal((64, 48))
        weave = np.asarray(cv2.GaussianBlur(weave, (0, 0), 1.0))
        self.weave = f32(weave / weave.std())
        self.actors = [
            Actor(poses=poses(scene, runner), shapes=shapes(runner)) for runner in (scene.runner, *scene.others)
        ]
        self.rng = np.random.default_rng([scene.seed, 4])
        self._prepare_leaves(still.leaves)

    def _prepare_leaves(self, leaves: Image) -> None:
        """Leaves move: the picture's gradient, masked, is added with slowly changing weights."""
        rows = np.flatnonzero(leaves.max(axis=1) > 0.3)
        self.leaf_rows = slice(int(rows[0]), int(rows[-1]) + 1) if rows.size else slice(0, 0)
        luma = self.empty.luma[self.leaf_rows].astype(np.float32)
        self.sway: list[NDArray[np.int16]] = []
        if luma.size:
            slope = np.gradient(luma, axis=1) * leaves[self.leaf_rows]
            columns = np.linspace(0, 3 * np.pi, luma.shape[1])
            self.sway = [(slope * np.sin(columns + k)).astype(np.int16) for k in (0.0, np.pi / 2)]
        self.gusts = self.rng.uniform(0, 2 * np.pi, (2, 3))

    def frame(self, index: int) -> Frame:
        """Draw frame `index`. The noise is drawn in the order of the calls."""
        t = index / self.scene.rate_hz
        luma, u, v = self.empty.luma, self.empty.u, self.empty.v
        sd = self.sd
        drawn = self._runners(t)
        swaying = self.scene.place.sway_px > 0 and bool(self.sway)
        if drawn is not None or swaying:
            luma, u, v = luma.copy(), u.copy(), v.copy()
        if swaying:
            strip = luma[self.leaf_rows]
            for field, phase in zip(self.sway, self.gusts, strict=True):
                gust = float(np.sin(2 * np.pi * _GUSTS_HZ * t + phase).mean())
                weight = self.scene.place.sway_px * gust
                strip = np.asarray(cv2.addWeighted(strip, 1.0, field, weight, 0, dtype=cv2.CV_16S), dtype=np.int16)
            luma[self.leaf_rows] = strip
        if drawn is not None:
            (left, top, right, bottom), crop = drawn
            luma[top:bottom, left:right] = crop.luma
            half = np.s_[top // 2 : bottom // 2, left // 2 : right // 2]
            u[half], v[half] = crop.u, crop.v
            sd = sd.copy()
            sd[top:bottom, left:right] = self.noise.sd_map(crop.luma)
        if self.scene.light.flicker > 0:
            slow = np.sin(2 * np.pi * _CLOUDS_HZ * t + self.gusts[0] * 1.7).mean()
            luma = scaled(luma, 1 + 1.8 * self.scene.light.flicker * float(slow), 16)
        return Frame(
            index=index,
            t_s=t,
            luma=self.noise.luma(luma, sd),
            chroma_u=self.noise.colour(u),
            chroma_v=self.noise.colour(v),
        )

    def _joints(self, actor: Actor, t: float, lags_s: Array) -> Array:
        return joints_in_frame(self.lens, actor, lags_s, t_s=t, readout_s=self.scene.sensor.readout_s)

    def _runners(self, t: float) -> tuple[Box, Planes] | None:
        """The box that holds bodies and shadows, drawn; None where nothing of them is in the picture."""
        exposure = self.scene.sensor.exposure_s
        cast: list[Array] = []
        under_body: list[Array] = []
        edges: list[Array] = []
        reach = 0.0
        for actor in self.actors:
            early, middle, late = self._joints(actor, t, exposure * np.array([-0.5, 0.0, 0.5]))
            flat = flatten(self.lens, actor, middle)
            if flat is None:
                continue
            edges.append(flat.box)
            cast.append(shadow_outlines(self.lens, actor, middle, self.light.to_sun))
            under_body.append(shadow_outlines(self.lens, actor, middle, _STRAIGHT_UP))
            moved = np.linalg.norm(self.lens.project(late) - self.lens.project(early), axis=1)
            reach = max(reach, float(np.nanmax(moved, initial=0.0)))
        box = self._crop(edges, cast) if edges else None
        if box is None:
            return None
        total = self._bodies(t, box, int(np.clip(np.ceil(0.8 * reach), *_INSTANTS)))
        left, top, right, bottom = box
        bare = self.linear[top:bottom, left:right]
        lit_up = bare * self._dimming(cast, under_body, box)
        lit_up = lit_up * (1 - total[..., 3:]) + total[..., :3] * self.gains[top:bottom, left:right]
        front = self.front[top:bottom, left:right, None]
        if front.any():
            lit_up = lit_up * (1 - front) + bare * front
        return box, planes(np.asarray(lit_up, dtype=np.float32))

    def _bodies(self, t: float, box: Box, instants: int) -> Image:
        """Colour times coverage, and coverage (h, w, 4): the mean over the exposure, blurred like the picture."""
        lags = self.scene.sensor.exposure_s * ((np.arange(instants) + 0.5) / instants - 0.5)
        joints = [self._joints(actor, t, lags) for actor in self.actors]
        total = np.zeros((box[3] - box[1], box[2] - box[0], 4), np.float32)
        scale = 1 if total.shape[0] * total.shape[1] > _LARGE_PX else 2
        for k in range(instants):
            # far runners first; painting one over another is exact where they do not touch
            layers = sorted(
                zip(self.actors, joints, strict=True), key=lambda pair: -_distance(self.lens.centre_m, pair[1][k])
            )
            shift = (np.mod((k + 0.5) * _STEPS, 1.0) - 0.5) / scale
            now: Image | None = None
            for actor, path_of in layers:
                flat = flatten(self.lens, actor, path_of[k])
                if flat is not None:
                    layer = draw(flat, self.light, self.weave, box, scale=scale, shift_px=shift)
                    now = layer if now is None else now * (1 - layer[..., 3:]) + layer
            if now is not None:
                total += now
        return f32(cv2.GaussianBlur(total / np.float32(instants), (0, 0), self.scene.sensor.blur_px))

    def _crop(self, bodies: list[Array], cast: list[Array]) -> Box | None:
        """Even-sided box around bodies and shadows inside the picture; None if nothing is in the picture."""
        w, h = self.scene.size_px
        edges = list(bodies)
        for polygons in cast:
            good = polygons[np.isfinite(polygons).all(axis=(1, 2))].reshape(-1, 2)
            if good.size:
                edges.append(np.concatenate([good.min(axis=0), good.max(axis=0)]))
        every = np.array(edges)
        low, high = every[:, :2].min(axis=0) - _MARGIN_PX, every[:, 2:].max(axis=0) + _MARGIN_PX
        left, top = (2 * int(np.clip(np.floor(e / 2), 0, s // 2)) for e, s in zip(low, (w, h), strict=True))
        right, bottom = (2 * int(np.clip(np.ceil(e / 2), 0, s // 2)) for e, s in zip(high, (w, h), strict=True))
        return (left, top, right, bottom) if right - left >= 2 and bottom - top >= 2 else None

    def _dimming(self, cast: list[Array], under_body: list[Array], box: Box) -> Image:
        """Factor (h, w, 3) on the ground's light: sun hidden by the bodies, and less sky beneath them."""
        left, top, right, bottom = box
        hidden = np.zeros((bottom - top, right - left), np.float32)
        near = np.zeros_like(hidden)
        metre = max(self.scene.camera[0] / 20, 4.0)
        for polygons, below in zip(cast, under_body, strict=True):
            hidden = np.maximum(hidden, draw_shadow(polygons, box, blur_px=metre * 0.012))
            near = np.maximum(near, draw_shadow(below, box, blur_px=metre * 0.05))
        direct, sky = self.light.on_ground
        kept = (direct * (1 - hidden)[..., None] + sky * (1 - _AMBIENT * near)[..., None]) / (direct + sky)
        ground = self.ground[top:bottom, left:right, None]
        return np.asarray(1 - ground * (1 - kept), dtype=np.float32)


def _distance(eye: Array, joints: Array) -> float:
    return float(np.linalg.norm(joints[0] - eye))


def render(scene: Scene) -> Iterator[Frame]:
    """Frames in order; frame i has t = i / rate. The same scene gives the same frames."""
    stage = Film(scene)
    for index in range(scene.frames):
        yield stage.frame(index)


def empty_picture(scene: Scene) -> NDArray[np.float32]:
    """The static picture in linear light (H, W, 3), with neither runners nor noise."""
    return Film(scene).linear
