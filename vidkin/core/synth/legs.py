"""Where the feet go: balls fixed on the ground in contact, a high-knee recovery between contacts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from scipy.interpolate import CubicSpline, PchipInterpolator

from vidkin.core.synth.gait import Contacts, Path
from vidkin.core.synth.law import Sprint
from vidkin.core.synth.scene import Runner
from vidkin.stages import Array

#: Ball of the foot above the ground, ball to ankle, ball to heel, ball to toe tip, all / stature.
BALL_Z: Final = 0.014
_ANKLE: Final = (-0.092, 0.034)
_HEEL: Final = (-0.116, 0.000)
_TOE: Final = (0.038, 0.000)

# Recovery of the ball of the foot at shares of the swing, relative to the centre of mass, / stature: x, z.
_SHARE: Final = np.array([0.14, 0.28, 0.40, 0.52, 0.66, 0.80, 0.91])
_HIGH: Final = np.array(
    [
        [-0.405, -0.395],
        [-0.290, -0.310],
        [-0.155, -0.296],
        [0.015, -0.345],
        [0.180, -0.428],
        [0.272, -0.482],
        [0.258, -0.540],
    ]
)
_LOW: Final = np.array(
    [
        [-0.410, -0.420],
        [-0.310, -0.395],
        [-0.200, -0.380],
        [-0.080, -0.370],
        [0.060, -0.365],
        [0.135, -0.375],
        [0.120, -0.425],
    ]
)
# Foot pitch (heel up) through the swing [deg].
_PITCH: Final = np.array([88.0, 108.0, 92.0, 60.0, 28.0, 6.0, 0.0])
_PITCH_LOW: Final = np.array([82.0, 85.0, 76.0, 62.0, 42.0, 24.0, 16.0])
# Pitch at fifths of the contact, at first steps and at speed [deg].
_STANCE_LOW: Final = np.array([24.0, 20.0, 24.0, 42.0, 62.0])
_STANCE_HIGH: Final = np.array([10.0, 8.0, 14.0, 34.0, 62.0])
_OFF_DEG: Final = 62.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Feet:
    """One foot's plan: ball (N, 3) [m], pitch (N,) [rad] (heel up), True where it stands on the ground."""

    ball_m: Array
    pitch_rad: Array
    down: Array


def feet(runner: Runner, sprint: Sprint, contacts: Contacts, route: Path, t: Array, *, left: bool) -> Feet:
    """Plan of the left or right foot at times `t` (N,)."""
    h = runner.stature_m
    mine = np.flatnonzero(contacts.left == left)
    on, off = contacts.on_s[mine], contacts.off_s[mine]
    spot = np.column_stack([contacts.x_m[mine], contacts.y_m[mine], np.full(mine.size, BALL_Z * h)])
    ball, pitch, down = np.tile(spot[0], (t.size, 1)), np.zeros(t.size), np.zeros(t.size, dtype=bool)
    for i in range(mine.size):
        here = (t >= on[i]) & (t <= off[i]) if i else t <= off[i]
        block = on[i] < -100
        ball[here], down[here] = spot[i], True
        if block:
            pitch[here] = _block_pitch(t[here], off[i], runner)
        else:
            keys = PchipInterpolator(np.linspace(0, 1, 5), _stance(sprint, on[i]))
            pitch[here] = np.radians(keys((t[here] - on[i]) / (off[i] - on[i])))
        if i + 1 < mine.size:
            air = (t > off[i]) & (t < on[i + 1])
            if air.any():
                ball[air], pitch[air] = _swing(route, sprint, t[air], (off[i], on[i + 1]), spot[i : i + 2], h)
    return Feet(ball_m=ball, pitch_rad=pitch, down=down.astype(np.float64))


def _block_pitch(t: Array, off: float, runner: Runner) -> Array:
    set_deg = 48.0
    share = np.clip((t - runner.first_movement_s) / (off - runner.first_movement_s), 0, 1)
    return np.asarray(np.radians(set_deg + (_OFF_DEG - set_deg) * share**2))


def _at_speed(speed: float) -> float:
    """0 in the first steps, 1 from about 7.5 m/s on."""
    return float(np.clip((speed - 2.5) / 5.0, 0.0, 1.0))


def _stance(sprint: Sprint, on: float) -> Array:
    high = _at_speed(float(sprint.v(np.array([on]))[0]))
    return np.asarray((1 - high) * _STANCE_LOW + high * _STANCE_HIGH)


def _swing(
    route: Path, sprint: Sprint, t: Array, times: tuple[float, float], spots: Array, h: float
) -> tuple[Array, Array]:
    """Ball and pitch between two contacts: a spline through the recovery's points, relative to the centre of mass."""
    span = times[1] - times[0]
    speed = float(sprint.v(np.array([times[0] + span / 2]))[0])
    high = _at_speed(speed)
    keys = np.column_stack([_SHARE, (1 - high) * _LOW + high * _HIGH])
    ends = spots - route.com(np.array(times))
    ahead = route.velocity(np.array(times))
    share = np.concatenate([[0.0], keys[:, 0], [1.0]])
    pull = 0.55 * span
    x = CubicSpline(
        share,
        np.concatenate([[ends[0, 0]], keys[:, 1] * h, [ends[1, 0]]]),
        bc_type=_clamped(-ahead[0, 0] * pull, -ahead[1, 0] * pull),
    )
    z = CubicSpline(
        share,
        np.concatenate([[ends[0, 2]], keys[:, 2] * h, [ends[1, 2]]]),
        bc_type=_clamped(1.0 * span, -1.2 * span),
    )
    s = (t - times[0]) / span
    com = route.com(t)
    y = (1 - s) * ends[0, 1] + s * ends[1, 1]
    ball = com + np.column_stack([x(s), y, z(s)])
    ball[:, 2] = np.maximum(ball[:, 2], BALL_Z * h)
    tilt = (1 - high) * _PITCH_LOW + high * _PITCH
    deg = PchipInterpolator(share, np.concatenate([[_OFF_DEG], tilt, _stance(sprint, times[1])[:1]]))
    return ball, np.radians(deg(s))


def _clamped(first: float, last: float) -> Any:
    """End slopes, as the spline wants them (its type hints know only arrays)."""
    return (1, first), (1, last)


def reach(foot: Feet, hip: Array, leg_m: float, h: float) -> tuple[Array, Array, Array, Array]:
    """Ball, ankle, heel and toe (N, 3) [m] with the ankle within `leg_m` of the hip.

    A planned foot out of reach is tipped about its ball (the heel rises). Only a foot in the air may move as a whole.
    """
    r = float(np.hypot(*_ANKLE)) * h
    flat = np.arctan2(_ANKLE[1], _ANKLE[0])
    gap = hip - foot.ball_m
    across = gap[:, 1]
    limit = np.sqrt(leg_m**2 - across**2)
    d = np.hypot(gap[:, 0], gap[:, 2])
    towards = np.arctan2(gap[:, 2], gap[:, 0])
    angle = flat - foot.pitch_rad
    # circle of the ankle about the ball against the circle of the leg about the hip
    cosine = (d * d + r * r - limit**2) / (2 * d * r)
    widest = np.arccos(np.clip(cosine, -1.0, 1.0))
    off = np.angle(np.exp(1j * (angle - towards)))
    angle = towards + np.clip(off, -widest, widest)
    pitch = flat - angle
    ball = foot.ball_m
    excess = np.maximum(d - (r + limit) * 0.9995, 0.0)
    if np.any(excess > 0):
        pull = (excess / d)[:, None] * np.column_stack([gap[:, 0], np.zeros_like(d), gap[:, 2]])
        ball = ball + np.where(foot.down[:, None] > 0, 0.0, pull)

    # the toes bend where the sole meets the ground
    room = np.clip((ball[:, 2] - 0.8 * BALL_Z * h) / (_TOE[0] * h), 0.0, 1.0)
    bent = np.minimum(pitch, np.arcsin(room))
    return ball, _on_foot(ball, pitch, _ANKLE, h), _on_foot(ball, pitch, _HEEL, h), _on_foot(ball, bent, _TOE, h)


def _on_foot(ball: Array, pitch: Array, offset: tuple[float, float], h: float) -> Array:
    c, s = np.cos(pitch), np.sin(pitch)
    x, z = offset[0] * c + offset[1] * s, -offset[0] * s + offset[1] * c
    return np.asarray(ball + h * np.column_stack([x, np.zeros_like(x), z]))
