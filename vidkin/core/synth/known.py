"""What is true of a scene: path, speed, contacts and the named quantities that an analysis should find."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from vidkin.constants import G_MPS2
from vidkin.core.synth.film import plan, poses
from vidkin.core.synth.law import Sprint, drag_constant, moist_air_density
from vidkin.core.synth.lens import Lens
from vidkin.core.synth.paint import Actor, flatten, joints_in_frame
from vidkin.core.synth.scene import Scene
from vidkin.core.synth.shapes import shapes
from vidkin.stages import Array, Bools

_RATE_HZ = 1000.0
_SPLIT_M = 5.0
_NEAR_TOP = 0.97
_RF_FROM_S = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Truth:
    """Truth of the measured runner (`scene.runner`).

    `t_s` (N,) clip time at 1 kHz over the clip; `x_m`, `y_m`, `z_m` (N,) the mass-weighted centre of the body;
    `vx_mps` (N,) its exact time derivative, step-periodic wobble included; `law_x_m`, `law_v_mps`, `law_a_mps2` (N,)
    the law, which is the step average. `contact_on_s`, `contact_off_s`, `contact_x_m`, `contact_y_m` (C,) foot contacts
    that begin inside the clip (ball of the foot); `contact_left` (C,).
    `view_s` first and last time at which the whole body is in the picture; equal where it never is.
    `quantities` by the project's names: SI units, shares in %, F0 and P_max per kilogram, `top_speed_at` from the
    start line, `step_rate` and `step_length` over the steps within 3 % of top speed (at least the last two).
    `splits_s` {metres: seconds} from the first movement to the law's centre of mass crossing start line + metres, for
    places reached in the clip (empty for a flying run, which has no first movement).
    """

    t_s: Array
    x_m: Array
    y_m: Array
    z_m: Array
    vx_mps: Array
    law_x_m: Array
    law_v_mps: Array
    law_a_mps2: Array
    contact_on_s: Array
    contact_off_s: Array
    contact_x_m: Array
    contact_y_m: Array
    contact_left: Bools
    view_s: tuple[float, float]
    quantities: Mapping[str, float]
    splits_s: Mapping[float, float]


def whole_in_view(scene: Scene, t_s: Array) -> Bools:
    """Whether the measured runner's whole outline is inside the picture at `t_s` (N,)."""
    w, h = scene.size_px
    lens = Lens(scene.camera, scene.size_px)
    actor = Actor(poses=poses(scene, scene.runner), shapes=shapes(scene.runner))
    seen = np.zeros(t_s.size, dtype=bool)
    all_joints = joints_in_frame(lens, actor, t_s, t_s=0.0, readout_s=0.0)
    for i, joints in enumerate(all_joints):
        flat = flatten(lens, actor, joints) if np.isfinite(lens.project(joints)).all() else None
        if flat is not None:
            left, top, right, bottom = flat.box
            seen[i] = left > 0 and top > 0 and right < w - 1 and bottom < h - 1
    return seen


def truth(scene: Scene) -> Truth:
    """Truth of the scene's measured runner."""
    sprint, contacts, route = plan(scene, scene.runner)
    t = np.arange(0, round(scene.duration_s * _RATE_HZ) + 1) / _RATE_HZ
    com, velocity = route.com(t), route.velocity(t)
    coarse = t[::10]
    seen = whole_in_view(scene, coarse)
    view = (float(coarse[seen][0]), float(coarse[seen][-1])) if seen.any() else (0.0, 0.0)
    during = (contacts.on_s >= 0) & (contacts.on_s <= scene.duration_s)
    return Truth(
        t_s=t,
        x_m=com[:, 0],
        y_m=com[:, 1],
        z_m=com[:, 2],
        vx_mps=velocity[:, 0],
        law_x_m=sprint.x(t),
        law_v_mps=sprint.v(t),
        law_a_mps2=sprint.a(t),
        contact_on_s=contacts.on_s[during],
        contact_off_s=contacts.off_s[during],
        contact_x_m=contacts.x_m[during],
        contact_y_m=contacts.y_m[during],
        contact_left=contacts.left[during],
        view_s=view,
        quantities=_quantities(scene, sprint, contacts.on_s, contacts.x_m, view),
        splits_s=_splits(scene, sprint),
    )


def _quantities(
    scene: Scene, sprint: Sprint, on_s: Array, foot_x: Array, view: tuple[float, float]
) -> dict[str, float]:
    runner, wind = scene.runner, float(scene.air.wind_mps or 0.0)
    density, k = moist_air_density(scene.air), drag_constant(runner, scene.air)
    out = {
        "F0": runner.F0_n_kg,
        "V0": runner.V0_mps,
        "P_max": runner.F0_n_kg * runner.V0_mps / 4,
        "k_drag": k,
        "drag_area": runner.drag_area_m2,
        "air_density": density,
    }
    if runner.start == "standing":
        out["first_movement"] = runner.first_movement_s
        out |= _effectiveness(runner.first_movement_s, sprint, k, wind, view[1])
    if view[1] > view[0]:
        t = np.linspace(view[0], view[1], 2001)
        v = sprint.v(t)
        best = int(np.argmax(v))
        top = float(v[best])
        out["top_speed"] = top
        out["top_speed_at"] = float(sprint.x(t[best : best + 1])[0]) - scene.lane.start_x_m
        out["drag_force"] = 0.5 * density * runner.drag_area_m2 * (top - wind) * abs(top - wind)
        forward = runner.mass_kg * runner.F0_n_kg * (1 - top / runner.V0_mps)
        out["drag_power_share"] = 100 * out["drag_force"] / forward
        seen = np.flatnonzero((on_s >= view[0]) & (on_s <= view[1]))
        fast = seen[sprint.v(on_s[seen]) >= _NEAR_TOP * top]
        fast = seen[-3:] if fast.size < 3 else fast
        if fast.size >= 2:
            out["step_rate"] = float((fast.size - 1) / (on_s[fast[-1]] - on_s[fast[0]]))
            out["step_length"] = float((foot_x[fast[-1]] - foot_x[fast[0]]) / (fast.size - 1))
    return out


def _effectiveness(start_s: float, sprint: Sprint, k: float, wind: float, end_s: float) -> dict[str, float]:
    """RF at 0.3 s and the slope of RF on speed from there to the end of the view, in % (Samozino et al. 2016; MEM)."""
    t = np.arange(start_s + _RF_FROM_S, end_s, 0.01)
    if t.size < 10:
        return {}
    v = sprint.v(t)
    force = sprint.a(t) + k * (v - wind) * np.abs(v - wind)
    ratio = 100 * force / np.hypot(force, G_MPS2)
    return {"RF_max": float(ratio[0]), "D_RF": float(np.polyfit(v, ratio, 1)[0])}


def _splits(scene: Scene, sprint: Sprint) -> dict[float, float]:
    if not sprint.still:
        return {}
    end, line = scene.duration_s, scene.lane.start_x_m
    reached = float(sprint.x(np.array([end]))[0]) - line
    return {
        float(d): brentq(lambda t, d=d: float(sprint.x(np.array([t]))[0]) - line - d, sprint.start_s, end, xtol=1e-9)
        - sprint.start_s
        for d in np.arange(_SPLIT_M, reached, _SPLIT_M)
    }
