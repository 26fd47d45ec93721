"""Small known worlds for the core's tests: cameras, sighted marks, measured motions, and a film of jointed ellipses."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from types import SimpleNamespace

import cv2
import numpy as np
import pytest

from vidkin.core import optics, track
from vidkin.core.models import ForceVelocity
from vidkin.core.motion import savitzky_golay
from vidkin.core.uncertainty import wobble_kernels
from vidkin.stages import Air, Athlete, Camera, Frame, Lane, Mark, Motion, Rep

FULL_HD = (1920, 1080)
SMALL = (640, 360)
LANE = Lane()


@pytest.fixture(scope="session", autouse=True)
def _one_thread() -> None:
    """Timing and memory of the picture tests do not depend on the machine's cores."""
    cv2.setNumThreads(1)


# --- cameras and marks --------------------------------------------------------------------------


def parameters(
    *,
    size=FULL_HD,
    side=1,
    hfov_deg=65.0,
    distance_m=13.0,
    height_m=1.5,
    x_m=8.0,
    turn_deg=1.0,
    pitch_deg=-1.5,
    roll_deg=0.5,
    k1=-0.05,
    k2=0.01,
):
    """Camera parameters (9,) of a phone beside the lane; `side` 1: on the runner's right, so that x runs to the right.

    `turn_deg` turns the camera towards +x.
    """
    f = 0.5 * size[0] / np.tan(np.radians(hfov_deg) / 2)
    yaw = side * (np.pi / 2 - np.radians(turn_deg))
    place = (x_m, LANE.centre_y_m - side * distance_m, height_m)
    return np.array([f, k1, k2, *place, yaw, np.radians(pitch_deg), np.radians(roll_deg)])


def layout(p, size=FULL_HD, *, every_m=2.5, cones=True):
    """Points (M, 3) on both lane lines, every `every_m`, and cone tips beside them, that are in the picture."""
    xs = np.round(p[3] / every_m) * every_m + every_m * np.arange(-20, 21)
    points = [(x, y, 0.0) for x in xs for y in (0.0, 1.22)]
    if cones:
        points += [(x, y, 0.3) for x in xs[::2] for y in (-0.22, 1.44)]
    xyz = np.array(points)
    uv = optics.project(p, xyz, size)
    with np.errstate(invalid="ignore"):
        seen = np.all(np.isfinite(uv) & (uv >= 0) & (uv <= np.array(size) - 1), axis=1)
    return xyz[seen]


def sighted(p, xyz, size=FULL_HD, *, error_px=0.0, rng=None, sd_px=0.7, sd_m=0.0):
    """Marks at the points `xyz`, clicked with `error_px` sd of error."""
    uv = optics.project(p, np.asarray(xyz, dtype=float), size)
    if error_px:
        uv = np.clip(uv + rng.normal(0.0, error_px, uv.shape), 0, np.array(size) - 1)
    return tuple(
        Mark(
            label=f"{point[0]:g} m, y {point[1]:g} m, z {point[2]:g} m", xyz_m=point, uv_px=seen, sd_px=sd_px, sd_m=sd_m
        )
        for point, seen in zip(xyz, uv, strict=True)
    )


#: Sd of the parameters of a well resected camera (order of `CAMERA_PARAMETERS`).
CAMERA_SD = np.array([2.0, 2e-3, 2e-3, 0.02, 0.03, 0.01, 3e-4, 3e-4, 3e-4])


def known(p, size=FULL_HD, *, cov=None, marks=()):
    """A Camera with these parameters, as if resected; independent errors of `CAMERA_SD` unless `cov` is given."""
    empty = np.zeros((len(marks), 2))
    return Camera(
        width_px=size[0],
        height_px=size[1],
        parameters=p,
        cov=np.diag(CAMERA_SD**2) if cov is None else cov,
        marks=marks,
        mark_uv_px=empty,
        mark_error_px=empty,
        mark_error_m=np.zeros(len(marks)),
    )


# --- motions ------------------------------------------------------------------------------------


#: Sizes of the wobble [m] in the order of `wobble_kernels`, as the fitting core expects them before it has seen a rep.
WOBBLE_M = (0.015, 0.008, 0.01, 0.008)


def wobble(t_s, rng, *, start_s=None, sizes=WOBBLE_M, rate_hz=4.5):
    """One draw (N,) of the silhouette's motion about the centre of mass [m], from the stated kernels.

    `start_s` of a standing start: next to nothing before it, four times as much in the first step, easing off within
    half a second (the fitting core's stated model). None: the same throughout.
    """
    loud = np.ones_like(t_s)
    if start_s is not None:
        loud = np.where(t_s < start_s, 0.05, 1 + 3 * np.exp(-np.maximum(t_s - start_s, 0) / 0.4))
    total = np.zeros_like(t_s)
    for size, kernel in zip(sizes, wobble_kernels(t_s, rate_hz=rate_hz), strict=True):
        values, vectors = np.linalg.eigh(kernel)
        total += size * (vectors * np.sqrt(np.maximum(values, 0))) @ rng.standard_normal(t_s.size)
    return loud * total


def as_motion(t_s, x_m, *, shared_m=None, names=(), x_sd_m=0.003, window_s=0.45, rate_hz=4.5, v_sd_mps=0.1):
    """A Motion of measured positions `x_m`, smoothed as the motion stage does."""
    smoother = savitzky_golay(t_s, window_s=window_s)
    return Motion(
        t_s=t_s,
        x_m=x_m,
        z_m=np.full(t_s.size, 0.95),
        x_sd_m=np.full(t_s.size, x_sd_m),
        shared_m=np.zeros((t_s.size, 0)) if shared_m is None else shared_m,
        shared_names=names,
        smooth_x_m=smoother.position @ x_m,
        v_mps=smoother.velocity @ x_m,
        a_mps2=smoother.acceleration @ x_m,
        v_sd_mps=np.full(t_s.size, v_sd_mps),
        a_sd_mps2=np.full(t_s.size, 1.0),
        inside=smoother.inside,
        window_s=window_s,
        step_rate_hz=rate_hz,
    )


@dataclass(frozen=True, kw_only=True)
class Truth:
    """A simulated rep: the law from `start_s` on, the centre of mass at `x0_m` then; the air and body of `REP`."""

    law: ForceVelocity
    start_s: float = 0.5
    x0_m: float = -0.3

    def x(self, t_s):
        return self.x0_m + self.law.position(np.asarray(t_s) - self.start_s)

    def v(self, t_s):
        return self.law.speed(np.asarray(t_s) - self.start_s)


#: Invented body and weather; the drag constant that follows from them is the simulated truth's.
REP = Rep(
    clip="rep.mp4",
    athlete=Athlete(label="A", mass_kg=70.0, stature_m=1.75),
    air=Air(temperature_c=20.0, pressure_hpa=1013.25, humidity_pct=50.0, wind_mps=0.0),
)


# --- a small film -------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Person:
    """Somebody made of ellipses and limbs that swing in opposition, so that the middle of the outline is `x_m(t)`.

    `luma` and `tint` (U, V) of the clothes; `step_hz` of the legs, which do not move before
    `still_s`; `sun_m` length of the shadow along x, 0 for none.
    """

    x_m: Callable[[float], float]
    y_m: float = LANE.centre_y_m
    luma: int = 45
    tint: tuple[int, int] = (120, 150)
    stature_m: float = 1.75
    step_hz: float = 4.0
    still_s: float = 0.0
    sun_m: float = 0.0

    def outline(self, t_s):
        """Polygons (K, 3) [m] of head, trunk, arms and legs."""
        h, x = self.stature_m, float(self.x_m(t_s))
        swing = 0.55 * np.cos(np.pi * self.step_hz * max(t_s - self.still_s, 0.0))
        turn = np.linspace(0, 2 * np.pi, 40, endpoint=False)

        def ellipse(height, wide, high):
            return np.column_stack([wide * np.cos(turn), height + high * np.sin(turn)])

        def limb(height, length, radius, angle):
            across = np.array([np.cos(angle), np.sin(angle)])
            along = np.array([np.sin(angle), -np.cos(angle)])
            body = np.column_stack([radius * np.cos(turn), 0.5 * length + (0.5 * length) * np.sin(turn) ** 3])
            return np.array([0.0, height]) + body[:, :1] * across + body[:, 1:] * along

        flat = [ellipse(0.93 * h, 0.10, 0.12), ellipse(0.66 * h, 0.16, 0.30)]
        flat += [limb(0.52 * h, 0.51 * h, 0.08, s * swing) for s in (-1, 1)]
        flat += [limb(0.80 * h, 0.36 * h, 0.05, s * swing) for s in (-1, 1)]
        return [np.column_stack([x + q[:, 0], np.full(q.shape[0], self.y_m), q[:, 1]]) for q in flat]

    def shadow(self, t_s):
        """Outline (K, 3) [m] of what the body shades on the ground."""
        x, turn = float(self.x_m(t_s)), np.linspace(0, 2 * np.pi, 40, endpoint=False)
        along = x + 0.5 * self.sun_m + 0.5 * abs(self.sun_m) * np.cos(turn)
        return np.column_stack([along, self.y_m + 0.05 + 0.25 * np.sin(turn), np.zeros(turn.size)])


@dataclass(frozen=True, kw_only=True)
class SmallFilm:
    """Frames of people in front of a textured, noisy background, seen by the camera `p`.

    `gain(t)` of the exposure; `pan_px(t)` shifts the whole picture; `blank` frames show nobody; `post_px` columns
    covered by a post in front of everybody.
    """

    people: Sequence[Person]
    p: np.ndarray = field(default_factory=lambda: parameters(size=SMALL, distance_m=9.0, x_m=5.0))
    size: tuple[int, int] = SMALL
    rate_hz: float = 60.0
    duration_s: float = 2.6
    noise: float = 1.5
    gain: Callable[[float], float] = lambda _: 1.0
    pan_px: Callable[[float], float] = lambda _: 0.0
    blank: frozenset[int] = frozenset()
    post_px: tuple[int, int] | None = None
    lane: Lane = LANE
    seed: int = 7

    def _seen(self, polygons):
        """Pixels (K, P, 2) of polygons (K, P, 3) of world points; none where one is behind the lens."""
        uv = optics.project(self.p, np.reshape(polygons, (-1, 3)), self.size)
        return uv.reshape(len(polygons), -1, 2) if np.all(np.isfinite(uv)) else np.zeros((0, 0, 2))

    def _cover(self, seen, scale):
        """Cover (h, w) of polygons (K, P, 2) [px], 0 to 1, and its box in a plane `scale` times smaller."""
        w, h = self.size[0] // scale, self.size[1] // scale
        if not seen.size:
            return np.zeros((0, 0), np.float32), np.s_[0:0, 0:0]
        seen = seen / scale
        left, top = (int(np.clip(np.floor(seen[..., i].min()) - 1, 0, n)) for i, n in enumerate((w, h)))
        right, bottom = (int(np.clip(np.ceil(seen[..., i].max()) + 2, 0, n)) for i, n in enumerate((w, h)))
        mask = np.zeros((max(bottom - top, 0), max(right - left, 0)), np.uint8)
        if mask.size:
            for corners in np.round((seen - (left, top)) * 16).astype(np.int32):
                cv2.fillPoly(mask, [corners], 255, cv2.LINE_AA, shift=4)
        return mask.astype(np.float32) / 255, np.s_[top:bottom, left:right]

    def frames(self) -> Iterator[Frame]:
        """A fresh pass; the same frames each time."""
        w, h = self.size
        rng = np.random.default_rng(self.seed)
        wide = (h, w + 200)
        rough = cv2.GaussianBlur(rng.standard_normal(wide), (0, 0), 2.5)
        slow = cv2.GaussianBlur(rng.standard_normal(wide), (0, 0), 25)
        scene = (118 + 10 * rough / rough.std() + 16 * slow / slow.std()).astype(np.float32)
        chroma = [(128 + c + 3 * slow / slow.std()).astype(np.float32)[::2, ::2] for c in (-6, 9)]
        grain = (self.noise * rng.standard_normal((h + 64, w + 64))).astype(np.float32)
        faint = 0.4 * grain
        for i in range(round(self.rate_hz * self.duration_s)):
            t = i / self.rate_hz
            shift = int(self.pan_px(t)) // 2 * 2
            luma = scene[:, shift : shift + w].copy()
            u, v = (c[:, shift // 2 : (shift + w) // 2].copy() for c in chroma)
            for who in () if i in self.blank else sorted(self.people, key=lambda q: -abs(q.y_m - self.p[4])):
                self._paint(who, t, luma, u, v)
            if self.post_px is not None:
                luma[:, slice(*self.post_px)] = 190
            gain = self.gain(t)
            a, b, c = rng.integers(0, 64, 3)
            noisy = cv2.scaleAdd(luma, gain, grain[a : a + h, b : b + w] + np.float32(16 * (1 - gain)))
            planes = [cv2.add(q, faint[c : c + h // 2, d : d + w // 2], dtype=cv2.CV_8U) for q, d in ((u, a), (v, b))]
            yield Frame(
                index=i,
                t_s=t,
                luma=cv2.convertScaleAbs(noisy),
                chroma_u=planes[0],
                chroma_v=planes[1],
            )

    def _paint(self, who, t, luma, u, v):
        if who.sun_m:
            seen = self._seen([who.shadow(t)])
            for plane, scale, black in ((luma, 1, 16), (u, 2, 128), (v, 2, 128)):
                cover, box = self._cover(seen, scale)
                plane[box] = black + (1 - 0.4 * cover) * (plane[box] - black)
        seen = self._seen(who.outline(t))
        for plane, scale, value in ((luma, 1, who.luma), (u, 2, who.tint[0]), (v, 2, who.tint[1])):
            cover, box = self._cover(seen, scale)
            plane[box] += cover * (value - plane[box])

    def camera(self):
        return known(self.p, self.size)

    def follow(self):
        """What the track stage makes of the film: a first pass for the background, a second one to follow."""
        ready = track.sampler(self.camera(), self.lane)
        if not isinstance(ready, tuple):
            return ready
        area, samples = ready
        frames = list(self.frames())
        for frame in frames:
            samples.add(frame)
        return track.follow(iter(frames), area, samples)


def running(start_s, x0_m, *, speed_mps=6.0, tau_s=0.5):
    """Place [m] in time [s] of somebody who stands still until `start_s` and then runs."""

    def x(t_s):
        u = max(t_s - start_s, 0.0)
        return x0_m + speed_mps * (u - tau_s * (1 - np.exp(-u / tau_s)))

    return x


@pytest.fixture(scope="session")
def world() -> SimpleNamespace:
    """Everything above by name: test files cannot import one another."""
    return SimpleNamespace(
        CAMERA_SD=CAMERA_SD,
        FULL_HD=FULL_HD,
        LANE=LANE,
        Person=Person,
        REP=REP,
        SMALL=SMALL,
        SmallFilm=SmallFilm,
        Truth=Truth,
        WOBBLE_M=WOBBLE_M,
        as_motion=as_motion,
        known=known,
        layout=layout,
        parameters=parameters,
        running=running,
        sighted=sighted,
        wobble=wobble,
    )
