"""Random scenes: athlete, camera, light and place drawn from what a coach with a phone would meet."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from vidkin.core import optics
from vidkin.core.synth.law import integrate
from vidkin.core.synth.scene import Colour, Light, Markers, Outfit, Place, Runner, Scene, Sensor
from vidkin.stages import Air, Athlete, Lane

_SURFACES = ("red", "blue", "grey", "grass")
_BACKDROPS = ("trees", "fence", "stand", "open")
_STANDING_SHARE = 0.7
#: How far the set position reaches behind the start line [m].
_BEHIND_M = 1.1
#: Half a view shorter than this [m] gets marks twice as dense.
_SHORT_M = 11.0


def random_scene(rng: np.random.Generator, **overrides: Any) -> Scene:
    """A random scene; `overrides` replace fields of `Scene` (the camera follows a changed picture size)."""
    runner, air, lane = _athlete(rng), _air(rng), Lane()
    runner = replace(runner, y_m=lane.centre_y_m + float(np.clip(rng.normal(0, 0.1), -0.3, 0.3)))
    size = overrides.get("size_px", (1920, 1080))
    scene = Scene(
        camera=(1000.0, 0.0, 0.0, 0.0, -10.0, 1.5, np.pi / 2, 0.0, 0.0),
        size_px=size,
        rate_hz=float(rng.choice([60.0, 120.0, 240.0], p=[0.35, 0.45, 0.2])),
        runner=runner,
        lane=lane,
        air=air,
        light=Light(
            azimuth_deg=float(rng.uniform(0, 360)),
            elevation_deg=float(rng.uniform(28, 65)),
            overcast=float(rng.choice([rng.uniform(0, 0.3), rng.uniform(0.7, 1.0)])),
        ),
        sensor=Sensor(
            exposure_s=1 / float(rng.uniform(250, 1000)),
            readout_s=float(rng.uniform(0.004, 0.016)),
            shot=float(10 ** rng.uniform(-4.7, -3.8)),
            read=float(10 ** rng.uniform(-3.1, -2.5)),
        ),
        place=Place(
            surface=_SURFACES[rng.integers(4)],  # type: ignore[arg-type]
            backdrop=_BACKDROPS[rng.integers(4)],  # type: ignore[arg-type]
            backdrop_m=float(rng.uniform(3, 15)),
            lanes_far=int(rng.integers(1, 8)),
            lanes_near=int(rng.integers(0, 4)),
            contrast=float(rng.uniform(0.6, 1.2)),
            sway_px=float(rng.uniform(0, 0.6)),
        ),
        seed=int(rng.integers(2**31)),
    )
    scene = _filmed(scene, rng)
    return replace(scene, **overrides)


def _athlete(rng: np.random.Generator) -> Runner:
    female = bool(rng.random() < 0.5)
    stature = float(rng.uniform(1.55, 1.82) if female else rng.uniform(1.65, 1.95))
    index = float(rng.uniform(18.5, 22.5) if female else rng.uniform(20, 25.5))
    mass = index * stature**2
    # body size to drag area: Arsac & Locatelli, J. Appl. Physiol. 92 (2002) 1781 (MEM); people differ by some 10 %
    usual = 0.9 * 0.266 * 0.2025 * stature**0.725 * mass**0.425
    standing = bool(rng.random() < _STANDING_SHARE)
    force, speed = float(rng.uniform(6, 9)), float(rng.uniform(8.5, 11.5))
    return Runner(
        athlete=Athlete(label="X", mass_kg=round(mass, 1), stature_m=round(stature, 2)),
        F0_n_kg=force,
        V0_mps=speed,
        drag_area_m2=usual * float(np.exp(rng.normal(0, 0.10))),
        start="standing" if standing else "flying",
        first_movement_s=float(rng.uniform(0.3, 1.0)),
        set_back_m=float(rng.uniform(0.24, 0.32)),
        entry_mps=speed * float(rng.uniform(0.82, 0.95)),
        step_rate_hz=float(rng.uniform(4.3, 4.8)),
        wobble_mps=float(rng.uniform(0.15, 0.3)),
        lean_deg=float(rng.uniform(4, 13)),
        arm_swing=float(rng.uniform(0.75, 1.2)),
        sex="F" if female else "M",
        lead_left=bool(rng.random() < 0.6),
        outfit=_outfit(rng),
    )


def _outfit(rng: np.random.Generator) -> Outfit:
    skins: tuple[Colour, ...] = ((0.55, 0.36, 0.27), (0.42, 0.25, 0.17), (0.25, 0.13, 0.08), (0.09, 0.05, 0.035))

    def cloth() -> Colour:
        level = 10 ** rng.uniform(-1.6, -0.2)
        tint = rng.dirichlet([1.2, 1.2, 1.2]) * 3
        mix = level * (0.35 + 0.65 * tint)
        return tuple(float(c) for c in np.clip(mix, 0.015, 0.8))  # type: ignore[return-value]

    return Outfit(
        skin=skins[rng.integers(4)],
        hair=((0.02, 0.015, 0.012), (0.10, 0.06, 0.03), (0.30, 0.20, 0.10))[rng.integers(3)],
        top=cloth(),
        shorts=cloth(),
        shoes=cloth(),
        sleeves=bool(rng.random() < 0.6),
        leg_cover=float(rng.choice([0.25, 0.45, 0.55, 0.95, 1.5])),
    )


def _air(rng: np.random.Generator) -> Air:
    return Air(
        temperature_c=round(float(rng.uniform(8, 32)), 1),
        pressure_hpa=round(float(rng.uniform(930, 1030)), 1),
        humidity_pct=round(float(rng.uniform(25, 85)), 0),
        wind_mps=round(float(np.clip(rng.normal(0, 1.0), -2.5, 2.5)), 1),
    )


def _filmed(scene: Scene, rng: np.random.Generator) -> Scene:
    """Place the camera so that the start (or a flying pass) is in the picture, and set the clip's length."""
    w, h = scene.size_px
    side = int(rng.choice([-1, 1]))
    distance = float(rng.uniform(8, 25))
    half_view = np.radians(float(rng.uniform(55, 75))) / 2
    f = 0.5 * w / np.tan(half_view)
    near = distance * np.tan(half_view) < _SHORT_M
    markers = Markers(tick_every_m=2.5 if near else 5.0, cone_every_m=5.0 if near else 10.0)
    lane = scene.lane
    standing = scene.runner.start == "standing"
    yaw = float(np.clip(rng.normal(0, 3), -7, 7)) if distance > 10 else float(np.clip(rng.normal(0, 1.5), -3, 3))
    centre = 0.0 if standing else float(rng.uniform(20, 45))
    height = float(rng.uniform(1.0, 2.5))
    turn = np.radians(yaw)
    k1 = float(rng.uniform(-0.1, 0.05))
    camera: tuple[float, ...] = (
        f,
        k1,
        float(rng.uniform(-0.02, 0.02)),
        centre,
        lane.centre_y_m - side * distance,
        height,
        side * np.pi / 2 - side * turn,
        np.radians(float(np.clip(rng.normal(-1.5, 1.5), -6, 3))) - np.arctan((height - 1.2) / distance) * 0.5,
        np.radians(float(np.clip(rng.normal(0, 1.0), -3, 3))),
    )
    camera = tuple(float(c) for c in camera)
    if standing:  # move along the lane until the set position stands a little inside the picture's edge
        inset = float(rng.uniform(0.02, 0.08)) * w
        edge = np.array([[inset if side > 0 else w - 1 - inset, h / 2]])
        seen_x = optics.to_plane(np.array(camera), edge, (w, h), axis=1, value_m=lane.centre_y_m)[0, 0]
        camera = (*camera[:3], lane.start_x_m - _BEHIND_M - float(seen_x), *camera[4:])
    scene = replace(scene, camera=camera, markers=markers)
    lower, upper = _lane_in_view(scene)
    runner = scene.runner
    if not standing:
        entry = lower - float(rng.uniform(1.5, 3.0))
        runner = replace(runner, entry_x_m=entry)
        scene = replace(scene, runner=runner)
    sprint = integrate(runner, scene.air, start_x_m=lane.start_x_m, until_s=8.0)
    t = np.arange(0, 8.0, 0.01)
    gone = sprint.x(t) > upper + 1.5
    leaves = float(t[gone][0]) if gone.any() else 8.0
    return replace(scene, duration_s=round(min(leaves + 0.3, 7.0), 2))


def _lane_in_view(scene: Scene) -> tuple[float, float]:
    """First and last x [m] on the lane's centre line whose points at 0.9 m height are in the picture."""
    x = scene.lane.start_x_m + np.arange(-40.0, 120.0, 0.05)
    points = np.column_stack([x, np.full(x.size, scene.lane.centre_y_m), np.full(x.size, 0.9)])
    uv = optics.project(np.array(scene.camera), points, scene.size_px)
    with np.errstate(invalid="ignore"):
        seen = (uv >= 0).all(axis=1) & (uv[:, 0] <= scene.size_px[0] - 1) & (uv[:, 1] <= scene.size_px[1] - 1)
    return (float(x[seen][0]), float(x[seen][-1])) if seen.any() else (float(x[0]), float(x[-1]))
