"""Step plan and the true path of the centre of mass: the law, plus what happens within a step."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.interpolate import CubicSpline, PPoly

from vidkin.constants import G_MPS2
from vidkin.core.synth.law import Sprint
from vidkin.core.synth.scene import Runner
from vidkin.stages import Array, Bools

_GRID_S = 1e-3
_FIRST_RATE_HZ = 3.9
_SET_HEIGHT, _RUN_HEIGHT = 0.350, 0.578
#: Way of the body over a planted foot, at most, / stature [-].
_OVER_FOOT = 0.51
_BLOCK_FRONT_S, _BLOCK_REAR_S, _FIRST_FLIGHT_S = 0.36, 0.21, 0.06


@dataclass(frozen=True, slots=True, kw_only=True)
class Contacts:
    """Foot contacts in order of touch-down (C,): times [s], ball of the foot x, y [m], left foot or right.

    A standing start begins with two contacts that started before the clip (the feet of the set position).
    """

    on_s: Array
    off_s: Array
    x_m: Array
    y_m: Array
    left: Bools


@dataclass(frozen=True, slots=True, kw_only=True)
class Path:
    """True path of the centre of mass as a cubic spline in time, and the step phase.

    `com(t)` (N, 3) [m]; `velocity(t)` is its exact derivative. `phase(t)` rises by 1 a step and is whole at
    mid-contact; the first step's is 0.
    """

    com: CubicSpline
    velocity: PPoly
    phase: CubicSpline
    first_left: bool


def smooth_step(x: Array) -> Array:
    """0 below 0, 1 above 1, with two continuous derivatives between."""
    x = np.clip(x, 0.0, 1.0)
    return np.asarray(x**3 * (10 - 15 * x + 6 * x * x))


def contact_time(v_mps: Array) -> Array:
    """Ground contact [s]: about 0.19 s in the first steps to 0.10 s at 10 m/s (references.md section 11, MEM)."""
    return np.asarray(np.clip(0.32 / np.sqrt(np.maximum(v_mps, 1.0)), 0.085, 0.19))


def height(runner: Runner, distance_m: Array) -> Array:
    """Mean height of the centre of mass [m] by distance run: from the set position to full running."""
    if runner.start == "flying":
        return np.full_like(distance_m, _RUN_HEIGHT * runner.stature_m)
    rise = 0.60 * (1 - np.exp(-distance_m / 0.7)) + 0.40 * (1 - np.exp(-distance_m / 4.5))
    return np.asarray((_SET_HEIGHT + (_RUN_HEIGHT - _SET_HEIGHT) * rise) * runner.stature_m)


def plan_steps(runner: Runner, sprint: Sprint, until_s: float) -> Contacts:
    """Lay out the contacts up to a second past `until_s`."""
    standing = runner.start == "standing"
    scale = runner.stature_m / 1.78
    rows: list[tuple[float, float, float, float, bool]] = []
    if standing:
        go, line = runner.first_movement_s, sprint.x0_m + runner.set_back_m
        early = -1e3
        rows.append((early, go + _BLOCK_REAR_S, line - 0.80 * scale, 0.07, not runner.lead_left))
        rows.append((early, go + _BLOCK_FRONT_S, line - 0.51 * scale, 0.07, runner.lead_left))
        on, left = go + _BLOCK_FRONT_S + _FIRST_FLIGHT_S, not runner.lead_left
    else:
        on, left = -0.9, runner.lead_left
    number, last_s = 0, max(until_s, on) + 1.0
    while on < last_s:
        v = float(sprint.v(np.array([on]))[0])
        full = runner.step_rate_hz
        rate = full + (min(_FIRST_RATE_HZ, full) - full) * np.exp(-number / 3.0) if standing else full
        period = 1 / rate
        longest = _OVER_FOOT * runner.stature_m / max(v, 1.0)
        contact = min(float(contact_time(np.array([v + 0.5]))[0]), period - 0.045, longest)
        mid = np.array([on + contact / 2])
        x, a = float(sprint.x(mid)[0]), float(sprint.a(mid)[0])
        z = float(height(runner, np.array([x - sprint.x0_m]))[0])
        # The ground reaction points at the centre of mass on average: it stands ahead of the foot by z a / g.
        behind = 0.03 * scale + 0.66 * z * np.clip(a, -1, 9) / G_MPS2
        apart = 0.045 + 0.075 * np.exp(-max(v, 0.0) / 4.0)
        rows.append((on, on + contact, x - behind, apart * scale, left))
        on, left, number = on + period, not left, number + 1
    table = np.array([r[:4] for r in rows])
    lefts = np.array([r[4] for r in rows])
    y = runner.y_m + np.where(lefts, 1.0, -1.0) * table[:, 3]
    return Contacts(on_s=table[:, 0], off_s=table[:, 1], x_m=table[:, 2], y_m=y, left=lefts)


def path(runner: Runner, sprint: Sprint, contacts: Contacts, until_s: float) -> Path:
    """Path of the centre of mass on a millisecond grid, splined.

    Within a step the speed dips at mid-contact (braking, then push) and, while accelerating, rises in contact
    and rests in flight; the sum's peak to peak at top speed is `wobble_mps` (0.15-0.3: references.md section 11, MEM).
    """
    standing = runner.start == "standing"
    steps = slice(2, None) if standing else slice(None)
    on, off = contacts.on_s[steps], contacts.off_s[steps]
    mid = (on + off) / 2
    phase = CubicSpline(mid, np.arange(mid.size), bc_type="natural")
    t = np.arange(-0.3, until_s + 0.4, _GRID_S)
    if standing:  # a natural spline extrapolates as a cubic: continue the first step's rate as a straight line
        lead = mid[0] - np.arange(40, 0, -1) / _FIRST_RATE_HZ
        phase = CubicSpline(np.concatenate([lead, mid]), np.arange(-40, mid.size), bc_type="natural")
    psi = 2 * np.pi * phase(t)
    rate = np.maximum(phase(t, 1), 1.0)
    v, a = sprint.v(t), sprint.a(t)
    ramp = smooth_step((t - on[0]) / 0.35) if standing else np.ones_like(t)
    flight = np.clip(np.interp(t, mid[:-1], on[1:] - off[:-1]), 0.03, 0.15)
    dip = 0.5 * runner.wobble_mps * np.clip(v / (0.9 * runner.V0_mps), 0, 1.1) * ramp
    push = 0.45 * np.maximum(a, 0) * flight * ramp
    x = sprint.x(t) - (dip * np.sin(psi) + push * np.cos(psi)) / (2 * np.pi * rate)
    # free fall from apex to touch-down and its mirror in contact, as one cosine
    stance = np.interp(t, mid, off - on)
    bob = G_MPS2 * flight * (flight + stance) / 16 * ramp
    z = height(runner, sprint.x(t) - sprint.x0_m) - bob * np.cos(psi)
    first_left = bool(contacts.left[steps][0])
    sway = 0.008 * runner.stature_m * ramp * np.cos(psi / 2) * (1 if first_left else -1)
    com = CubicSpline(t, np.column_stack([x, runner.y_m + sway, z]), axis=0)
    return Path(com=com, velocity=com.derivative(), phase=phase, first_left=first_left)
