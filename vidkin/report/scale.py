"""The lane as the camera model sees it: lines, and a metre scale hung below the near line, as curves in pixels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np

from vidkin.core import optics
from vidkin.report.canvas import INK, MODEL, PAPER, Box, Picture, dashes, put_text, stroke, text_width, unit_px
from vidkin.report.placing import overlap
from vidkin.stages import Array, Camera, Lane

Kind = Literal["line", "centre", "metre", "five", "start"]

_REACH_M: Final = 150.0
_STEP_M: Final = 0.1
_TICK_M: Final = {"metre": 0.09, "five": 0.2}
#: Ticks closer than this cannot be told apart [px of a 1920 x 1080 picture].
_CLOSEST_PX: Final = 9.0
_NUMBER_PX: Final = 19.0
#: How often a number is moved down by half its size to get off a mark.
_LOWER: Final = 6


@dataclass(frozen=True, slots=True, kw_only=True)
class Curve:
    """A curve (N, 2) in pixels; `beyond` True where it lies outside the stretch that the marks hold."""

    kind: Kind
    uv_px: Array
    beyond: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class LaneDrawing:
    """All curves, and the numbers: (text, foot of its tick (2,) [px])."""

    curves: tuple[Curve, ...] = ()
    numbers: tuple[tuple[str, Array], ...] = ()
    stretch_m: tuple[float, float] | None = None


def lane_drawing(camera: Camera, lane: Lane) -> LaneDrawing:
    """Draw the lane's lines, centre and metre scale through the full model, distortion included.

    Empty where no ground of the lane lies in the picture.
    """
    size = (camera.width_px, camera.height_px)
    unit = unit_px(*size)
    seen = _stretch(camera, lane, _CLOSEST_PX * unit)
    if seen is None:
        return LaneDrawing()
    first, last = seen
    held = _held(camera, first, last)
    side = 1.0 if camera.position_m[1] > lane.centre_y_m else -1.0
    near_y = lane.centre_y_m + side * lane.width_m / 2
    far_y = lane.centre_y_m - side * lane.width_m / 2
    curves: list[Curve] = []

    def add(kind: Kind, points_m: Array, beyond: bool) -> None:
        uv = optics.project(camera.parameters, points_m, size)
        uv = uv[np.all(np.isfinite(uv), axis=1)]
        if len(uv) > 1:
            curves.append(Curve(kind=kind, uv_px=uv, beyond=beyond))

    lines: tuple[tuple[Kind, float], ...] = (("line", near_y), ("line", far_y), ("centre", lane.centre_y_m))
    for kind, y in lines:
        for a, b, beyond in ((first, held[0], True), (held[0], held[1], False), (held[1], last, True)):
            if b - a > _STEP_M / 2:
                x = np.linspace(a, b, max(2, round((b - a) / _STEP_M) + 1))
                add(kind, np.column_stack([x, np.full_like(x, y), np.zeros_like(x)]), beyond)
    numbers: list[tuple[str, Array]] = []
    last_number_u = -np.inf
    for x in np.arange(np.ceil(first), np.floor(last) + 1) + 0.0:
        beyond = not held[0] - 1e-9 <= x <= held[1] + 1e-9
        five = x % 5 == 0
        depth = _TICK_M["five" if five else "metre"]
        ends = np.column_stack([np.full(5, x), np.full(5, near_y), np.linspace(0.0, -depth, 5)])
        add("five" if five else "metre", ends, beyond)
        if five:
            add("five", _across(float(x), near_y, far_y), beyond)
            foot = optics.project(camera.parameters, ends[-1:], size)[0]
            if np.all(np.isfinite(foot)) and abs(foot[0] - last_number_u) > 70 * unit:
                numbers.append((f"{x:g} m", foot))
                last_number_u = foot[0]
    if first <= lane.start_x_m <= last:
        add("start", _across(lane.start_x_m, near_y, far_y), not held[0] <= lane.start_x_m <= held[1])
    return LaneDrawing(curves=tuple(curves), numbers=tuple(numbers), stretch_m=(first, last))


def _across(x_m: float, near_y_m: float, far_y_m: float) -> Array:
    return np.column_stack([np.full(9, x_m), np.linspace(near_y_m, far_y_m, 9), np.zeros(9)])


def _stretch(camera: Camera, lane: Lane, closest_px: float) -> tuple[float, float] | None:
    """First and last x [m] of the lane centre's ground in the picture, as far as metres can be told apart."""
    middle = float(np.mean([m.xyz_m[0] for m in camera.marks])) if camera.marks else float(camera.position_m[0])
    x = middle + np.arange(-_REACH_M, _REACH_M + _STEP_M / 2, _STEP_M)
    points = np.column_stack([x, np.full_like(x, lane.centre_y_m), np.zeros_like(x)])
    uv = optics.project(camera.parameters, points, (camera.width_px, camera.height_px))
    u, v = uv.T
    with np.errstate(invalid="ignore"):
        inside = (u >= 0) & (u <= camera.width_px - 1) & (v >= 0) & (v <= camera.height_px - 1)
        inside &= np.hypot(np.gradient(u), np.gradient(v)) / _STEP_M >= closest_px
    rows = np.flatnonzero(inside)
    if rows.size < 2:
        return None
    runs = np.split(rows, np.flatnonzero(np.diff(rows) > 1) + 1)
    run = max(runs, key=len)
    return (float(x[run[0]]), float(x[run[-1]])) if len(run) > 1 else None


def _held(camera: Camera, first_m: float, last_m: float) -> tuple[float, float]:
    """The part of the stretch that lies between the outermost marks; all of it without marks."""
    if not camera.marks:
        return first_m, last_m
    x = [float(m.xyz_m[0]) for m in camera.marks]
    low, high = np.clip([min(x), max(x)], first_m, last_m)
    return float(low), float(high)


def draw_lane(picture: Picture, drawing: LaneDrawing, *, zoom: float = 1.0) -> None:
    """Stroke the curves of a lane drawing on a picture whose pixels are `zoom` times the camera's."""
    unit = unit_px(picture.shape[1], picture.shape[0])
    widths = {"line": 2.2, "centre": 1.4, "metre": 1.8, "five": 2.4, "start": 4.5}
    for casing in (True, False):
        for curve in drawing.curves:
            uv = (curve.uv_px + 0.5) * zoom - 0.5
            width = max(1.0, widths[curve.kind] * unit * (0.7 if curve.beyond else 1.0))
            broken = curve.beyond or curve.kind == "centre"
            on, off = (12.0, 12.0) if curve.kind == "centre" else (16.0, 12.0)
            pieces = dashes(uv, on_px=on * unit, off_px=off * unit) if broken else [uv]
            colour = PAPER if curve.kind == "start" else MODEL
            for piece in pieces:
                if casing:
                    edge = 0.7 if curve.kind == "centre" else 1.3
                    stroke(picture, piece, INK, width=width + 2 * max(edge, edge * unit))
                else:
                    stroke(picture, piece, colour, width=width)


def number_boxes(
    drawing: LaneDrawing, size_px: tuple[int, int], *, zoom: float = 1.0, keep_off_px: Sequence[Box] = ()
) -> list[tuple[str, Box]]:
    """Each number of the scale with the box it takes in a picture of `size_px`, below what it must keep off."""
    size = _NUMBER_PX * unit_px(*size_px)
    boxes: list[tuple[str, Box]] = []
    for text, foot in drawing.numbers:
        at = (foot + 0.5) * zoom - 0.5
        wide = text_width(text, size)
        left = float(np.clip(at[0] - wide / 2, 2, max(2, size_px[0] - wide - 2)))
        box = (left, float(at[1] + 0.2 * size), left + wide, float(at[1] + 1.3 * size))
        for _ in range(_LOWER):
            if all(overlap(box, other) == 0 for other in keep_off_px):
                break
            box = (box[0], box[1] + 0.5 * size, box[2], box[3] + 0.5 * size)
        boxes.append((text, box))
    return boxes


def draw_numbers(picture: Picture, numbers: Sequence[tuple[str, Box]]) -> None:
    """Set the scale's numbers in their boxes."""
    unit = unit_px(picture.shape[1], picture.shape[0])
    size = _NUMBER_PX * unit
    for text, box in numbers:
        put_text(picture, text, (box[0], box[3] - 0.25 * size), size_px=size, colour=MODEL, casing=2.2 * unit)
