"""The body's surface: round cones between points that are blends of joints, each with a material."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from vidkin.core.synth.body import INDEX, JOINTS
from vidkin.core.synth.scene import Colour, Outfit, Runner
from vidkin.stages import Array

#: A point as joint or as a blend "from joint a, a share towards joint b".
_ROUND: Final = ("face", "vertex", "fingers")
_Point = str | tuple[str, str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Shapes:
    """Round cones (P,): `ends` (P, 2, J) blend joints into the two centres, `radius_m` (P, 2), `colour` (P, 3).

    `pattern` (P,) strength of the cloth's or skin's texture; `order` (P,) nudges the drawing order [m]
    (positive is nearer to the camera), for parts that lie on one another; `round_ends` (P,) 1 where an end is
    shaded as a ball, 0 where another part carries on.
    """

    ends: Array
    radius_m: Array
    colour: Array
    pattern: Array
    order: Array
    round_ends: Array


def _limb(side: str, outfit: Outfit) -> list[tuple[_Point, _Point, float, float, str, float]]:
    def j(name: str) -> str:
        return f"{name}_{side}"

    hip, knee, ankle, heel, ball, toe = (j(n) for n in ("hip", "knee", "ankle", "heel", "ball", "toe"))
    shoulder, elbow, wrist, fingers = (j(n) for n in ("shoulder", "elbow", "wrist", "fingers"))
    cover = outfit.leg_cover
    parts: list[tuple[_Point, _Point, float, float, str, float]] = [
        (hip, (hip, knee, 0.45), 0.0500, 0.0440, "skin", 0.0),
        ((hip, knee, 0.45), knee, 0.0440, 0.0300, "skin", 0.0),
        (knee, (knee, ankle, 0.32), 0.0290, 0.0305, "skin", 0.0),
        ((knee, ankle, 0.32), (knee, ankle, 0.62), 0.0305, 0.0225, "skin", 0.0),
        ((knee, ankle, 0.62), ankle, 0.0225, 0.0165, "skin", 0.0),
        (ankle, (ankle, heel, 0.75), 0.0170, 0.0185, "shoes", 0.003),
        ((ankle, heel, 0.75), ball, 0.0180, 0.0150, "shoes", 0.004),
        (ankle, ball, 0.0180, 0.0155, "shoes", 0.004),
        (ball, toe, 0.0150, 0.0110, "shoes", 0.004),
        (shoulder, (shoulder, elbow, 0.45), 0.0300, 0.0270, "top" if outfit.sleeves else "skin", 0.0),
        ((shoulder, elbow, 0.45), elbow, 0.0265, 0.0215, "skin", -0.001),
        (elbow, (elbow, wrist, 0.35), 0.0215, 0.0220, "skin", 0.0),
        ((elbow, wrist, 0.35), wrist, 0.0220, 0.0150, "skin", 0.0),
        (wrist, (wrist, fingers, 0.75), 0.0155, 0.0225, "skin", 0.0),
        ((wrist, fingers, 0.5), fingers, 0.0200, 0.0140, "skin", 0.0),
    ]
    # the cloth: shorts or tights over the thigh, looser at the hem
    if cover <= 0.6:
        parts.append((hip, (hip, knee, cover), 0.0560, 0.0500, "shorts", 0.006))
    else:
        parts.append((hip, (hip, knee, 0.45), 0.0515, 0.0455, "shorts", 0.006))
        parts.append(((hip, knee, 0.45), knee, 0.0455, 0.0310, "shorts", 0.006))
        if cover > 1:
            parts.append((knee, (knee, ankle, 0.32), 0.0305, 0.0320, "shorts", 0.006))
            parts.append(((knee, ankle, 0.32), (knee, ankle, 0.9), 0.0320, 0.0200, "shorts", 0.006))
    return parts


def _middle(outfit: Outfit) -> list[tuple[_Point, _Point, float, float, str, float]]:
    del outfit
    return [
        ("pelvis", "waist", 0.0600, 0.0560, "shorts", 0.0),
        (("pelvis", "waist", 0.55), ("waist", "chest", 0.3), 0.0565, 0.0600, "top", 0.002),
        (("waist", "chest", 0.3), "chest", 0.0600, 0.0680, "top", 0.002),
        ("chest", ("chest", "shoulder_mid", 0.75), 0.0680, 0.0560, "top", 0.002),
        ("shoulder_l", "shoulder_mid", 0.0330, 0.0420, "top", 0.0),
        ("shoulder_r", "shoulder_mid", 0.0330, 0.0420, "top", 0.0),
        ("shoulder_mid", "neck", 0.0330, 0.0300, "skin", 0.0),
        ("neck", ("jaw", "vertex", 0.25), 0.0300, 0.0340, "skin", 0.0),
        ("face", ("jaw", "face", 0.45), 0.0330, 0.0280, "skin", 0.004),
        ("occiput", ("face", "occiput", 0.4), 0.0420, 0.0400, "skin", 0.0),
        (("jaw", "vertex", 0.78), "occiput", 0.0380, 0.0440, "hair", 0.003),
    ]


def shapes(runner: Runner) -> Shapes:
    """The surface of a runner: widths grow with the square root of the body-mass index (22.5 kg/m^2: as listed)."""
    size = runner.stature_m
    girth = float(np.sqrt(runner.mass_kg / size**2 / 22.5)) * size
    outfit = runner.outfit
    parts = _middle(outfit) + _limb("l", outfit) + _limb("r", outfit)

    def row(point: _Point) -> Array:
        weights = np.zeros(len(JOINTS))
        if isinstance(point, str):
            weights[INDEX[point]] = 1
        else:
            weights[INDEX[point[0]]], weights[INDEX[point[1]]] = 1 - point[2], point[2]
        return weights

    colours: Final[dict[str, Colour]] = {
        name: getattr(outfit, name) for name in ("skin", "hair", "top", "shorts", "shoes")
    }
    texture = {"skin": 0.06, "hair": 0.35, "top": 0.16, "shorts": 0.14, "shoes": 0.25}
    return Shapes(
        ends=np.array([[row(p[0]), row(p[1])] for p in parts]),
        radius_m=np.array([[p[2], p[3]] for p in parts]) * girth,
        colour=np.array([colours[p[4]] for p in parts]),
        pattern=np.array([texture[p[4]] for p in parts]),
        order=np.array([p[5] for p in parts]) * 3,
        round_ends=np.array([float(any(name in f"{p[0]} {p[1]}" for name in _ROUND)) for p in parts]),
    )
