"""The jointed body: segment lengths and masses, joints from a pose, and the exact centre of mass.

Lengths as fractions of stature: Winter, Biomechanics and Motor Control of Human Movement (drawn from Drillis & Contini;
MEM, values from memory). Masses and mass centres: de Leva, J. Biomech. 29 (1996) 1223 (READ).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from vidkin.core.synth.gait import Contacts, Path, smooth_step
from vidkin.core.synth.law import Sprint
from vidkin.core.synth.legs import Feet, feet, reach
from vidkin.core.synth.scene import Runner
from vidkin.stages import Array

#: Segment lengths / stature [-].
LENGTHS: Final = {
    "trunk": 0.288,
    "neck": 0.044,
    "head": 0.130,
    "upper_arm": 0.186,
    "forearm": 0.146,
    "hand": 0.060,
    "thigh": 0.245,
    "shank": 0.246,
    "half_hips": 0.050,
    "half_shoulders": 0.105,
}

#: Mass fraction [-] and mass centre from the first-named end [-], de Leva 1996: {sex: {segment: (mass, centre)}}.
SEGMENTS: Final = {
    "F": {
        "head": (0.0668, 0.5894),
        "trunk": (0.4257, 0.3782),
        "upper_arm": (0.0255, 0.5754),
        "forearm": (0.0138, 0.4559),
        "hand": (0.0056, 0.7474),
        "thigh": (0.1478, 0.3612),
        "shank": (0.0481, 0.4416),
        "foot": (0.0129, 0.4014),
    },
    "M": {
        "head": (0.0694, 0.5976),
        "trunk": (0.4346, 0.4310),
        "upper_arm": (0.0271, 0.5772),
        "forearm": (0.0162, 0.4574),
        "hand": (0.0061, 0.7900),
        "thigh": (0.1416, 0.4095),
        "shank": (0.0433, 0.4459),
        "foot": (0.0137, 0.4415),
    },
}

_SINGLE: Final = ("pelvis", "waist", "chest", "shoulder_mid", "neck", "jaw", "vertex", "face", "occiput")
_PAIRED: Final = ("hip", "knee", "ankle", "heel", "ball", "toe", "shoulder", "elbow", "wrist", "fingers")
#: Joint names in the order of every joint array; paired joints end in _l or _r.
JOINTS: Final = _SINGLE + tuple(f"{name}_{side}" for name in _PAIRED for side in "lr")
INDEX: Final = {name: i for i, name in enumerate(JOINTS)}

#: Segment: (de Leva's name, first end, second end).
_ENDS: Final = (
    ("head", "vertex", "jaw"),
    ("trunk", "shoulder_mid", "pelvis"),
    *(
        (segment, f"{a}_{side}", f"{b}_{side}")
        for segment, a, b in (
            ("upper_arm", "shoulder", "elbow"),
            ("forearm", "elbow", "wrist"),
            ("hand", "wrist", "fingers"),
            ("thigh", "hip", "knee"),
            ("shank", "knee", "ankle"),
            ("foot", "heel", "toe"),
        )
        for side in "lr"
    ),
)


# Share of the gap taken in each pass: all of it, then less for the poses that overshoot.
_PASSES: Final = (1.0,) * 20 + (0.5,) * 25 + (0.2,) * 60 + (0.03,) * 200


def mass_weights(sex: str) -> Array:
    """Weights (J,) with com = weights @ joints; they sum to 1 (the table's rounding, < 1e-4, is scaled away)."""
    weights = np.zeros(len(JOINTS))
    for segment, first, second in _ENDS:
        mass, centre = SEGMENTS[sex][segment]
        weights[INDEX[first]] += mass * (1 - centre)
        weights[INDEX[second]] += mass * centre
    return np.asarray(weights / weights.sum())


@dataclass(frozen=True, slots=True, kw_only=True)
class Poses:
    """Joints (N, J, 3) [m] at times `t_s` (N,) on an even grid; the mass-weighted centre is the path, exactly."""

    t_s: Array
    joints_m: Array

    def at(self, t_s: Array) -> Array:
        """Joints (..., J, 3) at clip times (..., J), each joint at its own time (linear between grid points)."""
        step = self.t_s[1] - self.t_s[0]
        place = np.clip((np.asarray(t_s) - self.t_s[0]) / step, 0, self.t_s.size - 1.001)
        low = place.astype(np.int64)
        part = (place - low)[..., None]
        joint = np.arange(len(JOINTS))
        return np.asarray((1 - part) * self.joints_m[low, joint] + part * self.joints_m[low + 1, joint])


def _turn(angle: Array) -> tuple[Array, Array]:
    """Unit vectors in the x-z plane: up leaning forward by `angle` from the vertical, and the body's front."""
    zero = np.zeros_like(angle)
    return (
        np.stack([np.sin(angle), zero, np.cos(angle)], -1),
        np.stack([np.cos(angle), zero, -np.sin(angle)], -1),
    )


def trunk_lean(runner: Runner, sprint: Sprint, t_s: Array) -> Array:
    """Forward lean of the trunk (N,) [rad]: level in the set position, 50 deg at the first step, then upright."""
    top = np.radians(runner.lean_deg)
    if runner.start == "flying":
        return np.full_like(t_s, top)
    gone = sprint.x(t_s) - sprint.x0_m
    driven = top + np.radians(42.0) * np.exp(-np.maximum(gone - 0.5, 0.0) / 6.0)
    out = smooth_step((t_s - runner.first_movement_s) / 0.42)
    return np.asarray((1 - out) * np.radians(101.0) + out * driven)


def _arms(lean: Array, phase: Array, *, offset: float, reach: float) -> tuple[Array, Array]:
    """Directions (N, 3) of an upper arm and forearm swinging against the same side's leg; `offset` in steps."""
    swing = reach * np.cos(np.pi * (phase - offset))
    angle = np.radians(-12.0) + np.radians(56.0) * swing - 0.72 * lean
    bend = np.radians(88.0) + np.radians(22.0) * swing
    out = np.full_like(angle, 0.14)
    upper = np.stack([np.sin(angle), out, -np.cos(angle)], -1)
    fore = np.stack([np.sin(angle + bend), -0.18 - 0.12 * swing, -np.cos(angle + bend)], -1)
    return _unit(upper), _unit(fore)


def _unit(v: Array) -> Array:
    return np.asarray(v / np.linalg.norm(v, axis=-1, keepdims=True))


def _two_links(first: Array, last: Array, lengths: tuple[float, float], bend: Array) -> Array:
    """Middle joint (N, 3) of two links from `first` towards `last`, bent to the side of `bend` (N, 3)."""
    gap = last - first
    d = np.linalg.norm(gap, axis=-1, keepdims=True)
    u = gap / np.maximum(d, 1e-9)
    d = np.clip(d, abs(lengths[0] - lengths[1]) + 1e-6, sum(lengths) - 1e-9)
    along = (lengths[0] ** 2 - lengths[1] ** 2 + d * d) / (2 * d)
    side = bend - np.sum(bend * u, -1, keepdims=True) * u
    side /= np.maximum(np.linalg.norm(side, axis=-1, keepdims=True), 1e-9)
    return np.asarray(first + along * u + np.sqrt(np.maximum(lengths[0] ** 2 - along**2, 0)) * side)


class _Upper:
    """Joints above the hips relative to the pelvis; the arms' hands rest on the ground in the set position."""

    def __init__(self, runner: Runner, sprint: Sprint, route: Path, t: Array) -> None:
        self.runner, self.size = runner, runner.stature_m
        self.phase = route.phase(t)
        self.lean = trunk_lean(runner, sprint, t)
        flying = runner.start == "flying"
        self.free = np.ones_like(t) if flying else smooth_step((t - runner.first_movement_s - 0.04) / 0.26)
        self.line_x = sprint.x0_m + runner.set_back_m
        self.shift = 0.0 if route.first_left else 1.0

    def place(self, joints: Array) -> None:
        """Fill in trunk, head and arms above `joints[:, pelvis]`."""
        h, n, lean = self.size, LENGTHS, self.lean
        pelvis = joints[:, INDEX["pelvis"]]
        up, front = _turn(lean)
        # the back is rounded: the waist stands behind the straight line from pelvis to shoulders
        curl = (0.010 + 0.035 * (lean / np.radians(97.0)) ** 2)[:, None] * h
        shoulder_mid = pelvis + n["trunk"] * h * up
        neck_up, _ = _turn(0.55 * lean + 0.10)
        head_up, head_front = _turn(np.where(lean > 0.9, 0.9 + 0.85 * (lean - 0.9), lean) * 0.62)
        neck = shoulder_mid + 0.018 * h * up + n["neck"] * h * neck_up
        jaw = neck + 0.010 * h * head_up
        vertex = jaw + n["head"] * h * head_up
        middle = (jaw + vertex) / 2
        joints[:, INDEX["waist"]] = pelvis + 0.40 * n["trunk"] * h * up - curl * front
        joints[:, INDEX["chest"]] = pelvis + 0.74 * n["trunk"] * h * up - 0.5 * curl * front
        joints[:, INDEX["shoulder_mid"]] = shoulder_mid
        joints[:, INDEX["neck"]] = neck
        joints[:, INDEX["jaw"]] = jaw
        joints[:, INDEX["vertex"]] = vertex
        joints[:, INDEX["face"]] = middle - 0.012 * h * head_up + 0.030 * h * head_front
        joints[:, INDEX["occiput"]] = middle + 0.010 * h * head_up - 0.020 * h * head_front
        # shoulders turn against the hips
        twist = np.radians(14.0) * np.sin(np.pi * (self.phase + self.shift) - 0.1) * self.free
        for side, sign in (("l", 1.0), ("r", -1.0)):
            across = np.stack([-np.sin(twist), np.cos(twist), np.zeros_like(twist)], -1)
            shoulder = shoulder_mid + sign * n["half_shoulders"] * h * across - 0.012 * h * up
            offset = 0.32 + (0.0 if side == "l" else 1.0) + self.shift
            upper, fore = _arms(lean, self.phase, offset=offset, reach=self.runner.arm_swing)
            flip = np.array([1.0, sign, 1.0])
            upper, fore = upper * flip, fore * flip
            upper, fore, hand = self._rest(shoulder, upper, fore, sign)
            elbow = shoulder + n["upper_arm"] * h * upper
            wrist = elbow + n["forearm"] * h * fore
            joints[:, INDEX[f"shoulder_{side}"]] = shoulder
            joints[:, INDEX[f"elbow_{side}"]] = elbow
            joints[:, INDEX[f"wrist_{side}"]] = wrist
            joints[:, INDEX[f"fingers_{side}"]] = wrist + n["hand"] * h * hand

    def _rest(self, shoulder: Array, upper: Array, fore: Array, sign: float) -> tuple[Array, Array, Array]:
        """Blend swinging arms with arms whose fingers stand on the ground behind the start line."""
        if np.all(self.free >= 1):
            return upper, fore, fore
        h, n = self.size, LENGTHS
        ground = np.array([self.line_x - 0.04, self.runner.y_m + sign * 0.125 * h, 0.004 * h])
        wrist = np.broadcast_to(ground + np.array([0.0, 0.0, n["hand"] * h]), shoulder.shape)
        bend = np.broadcast_to(np.array([-0.5, 0.6 * sign, 0.0]), shoulder.shape)
        elbow = _two_links(shoulder, wrist, (n["upper_arm"] * h, n["forearm"] * h), bend)
        free = self.free[:, None]
        blend = [(1 - free) * (elbow - shoulder), (1 - free) * (wrist - elbow), (1 - free) * np.array([0.0, 0.0, -1.0])]
        moving = (upper, fore, fore)
        scale = (n["upper_arm"] * h, n["forearm"] * h, 1.0)
        mixed = [b / s + free * m for b, s, m in zip(blend, scale, moving, strict=True)]
        return _unit(mixed[0]), _unit(mixed[1]), _unit(mixed[2])


def solve_poses(runner: Runner, sprint: Sprint, contacts: Contacts, route: Path, t_s: Array) -> Poses:
    """Joints at `t_s`: the feet follow the step plan, the pelvis is moved until the mass centre lies on the path.

    Fixed point: pelvis += path - centre(pelvis). A moved pelvis moves head, trunk and arms fully and the legs in
    part, so a pass leaves less than half of the gap; where a straight leg makes it overshoot, shorter steps follow.
    It ends below 1e-9 m.
    """
    h, com = runner.stature_m, route.com(t_s)
    weights = mass_weights(runner.sex)
    joints = np.zeros((t_s.size, len(JOINTS), 3))
    upper = _Upper(runner, sprint, route, t_s)
    plan = {side: feet(runner, sprint, contacts, route, t_s, left=side == "l") for side in "lr"}
    pelvis = com - np.array([0.03, 0.0, 0.07]) * h
    turn = np.radians(7.0) * np.sin(np.pi * (upper.phase + upper.shift)) * upper.free
    across = np.stack([-np.sin(-turn), np.cos(turn), np.zeros_like(turn)], -1)
    for share in _PASSES:
        joints[:, INDEX["pelvis"]] = pelvis
        upper.place(joints)
        for side, sign in (("l", 1.0), ("r", -1.0)):
            hip = pelvis + sign * LENGTHS["half_hips"] * h * across
            _leg(joints, side, hip, plan[side], h)
        gap = com - np.einsum("j,njk->nk", weights, joints)
        if np.abs(gap).max() < 1e-9:
            break
        pelvis = pelvis + share * gap
    return Poses(t_s=t_s, joints_m=joints)


def _leg(joints: Array, side: str, hip: Array, foot: Feet, h: float) -> None:
    """Two-link leg from the hip to a foot that keeps its ball where the plan has it (in contact)."""
    lengths = (LENGTHS["thigh"] * h, LENGTHS["shank"] * h)
    ball, ankle, heel, toe = reach(foot, hip, 0.991 * sum(lengths), h)
    bend = np.cross(ankle - hip, np.array([0.0, 1.0, 0.0]))
    joints[:, INDEX[f"hip_{side}"]] = hip
    joints[:, INDEX[f"knee_{side}"]] = _two_links(hip, ankle, lengths, bend)
    for name, place in (("ankle", ankle), ("ball", ball), ("heel", heel), ("toe", toe)):
        joints[:, INDEX[f"{name}_{side}"]] = place
