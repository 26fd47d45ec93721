"""The marker overlay: one frame with every mark as clicked, where the model puts it, and how far they part."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

import numpy as np

from vidkin.report.canvas import (
    CLICKED,
    ERROR,
    MODEL,
    MUTED,
    PAPER,
    Box,
    Picture,
    arrow,
    disc,
    panel,
    put_text,
    ring,
    stroke,
    text_width,
    unit_px,
)
from vidkin.report.placing import nearest_on, place_labels
from vidkin.report.scale import draw_lane, draw_numbers, lane_drawing, number_boxes
from vidkin.stages import Array, Camera, Lane

_MAGNIFICATIONS: Final = (1, 2, 5, 10, 20, 50, 100, 200, 500)
#: A typical arrow should be about this long, and none longer than the second [px of a 1920 x 1080 picture].
_TYPICAL_PX: Final = 36.0
_LONGEST_PX: Final = 130.0
_RING_PX: Final = 10.0
_DOT_PX: Final = 3.6


def magnification(errors_px: Array, *, unit: float = 1.0) -> int:
    """Factor by which error arrows (M, 2) are drawn longer than they are: the largest of a fixed row that fits."""
    length = np.hypot(*np.asarray(errors_px, dtype=np.float64).reshape(-1, 2).T)
    if not length.size or length.max() < 1e-6:
        return 1
    typical = max(float(np.median(length)), 1e-6)
    allowed = min(_TYPICAL_PX * unit / typical, _LONGEST_PX * unit / float(length.max()))
    return max([m for m in _MAGNIFICATIONS if m <= allowed], default=1)


def rms_px(camera: Camera) -> float | None:
    """Root mean square length of the errors of the marks used [px]; None without marks."""
    return float(np.sqrt(np.mean(np.sum(camera.mark_error_px[camera.used] ** 2, axis=1)))) if camera.marks else None


def rms_m(camera: Camera) -> float | None:
    """The same at the marks' distances, across the line of sight [m]."""
    return float(np.sqrt(np.mean(camera.mark_error_m[camera.used] ** 2))) if camera.marks else None


def heading(camera: Camera, lane: Lane) -> tuple[str, ...]:
    """What the heading strip says, item by item."""
    px, m = rms_px(camera), rms_m(camera)
    fit = ["no marks"]
    if px is not None and m is not None:
        left_out = int(np.count_nonzero(~camera.used))
        count = f"{len(camera.marks)} marks" + (f", {left_out} left out" if left_out else "")
        fit = [count, f"rms {px:.2f} px = {100 * m:.2f} cm"]
    where = camera.position_m
    items = [
        *fit,
        f"focal length {camera.parameters[0]:.0f} px, field of view {camera.hfov_deg:.1f}° wide",
        f"camera {where[2]:.2f} m high, {abs(where[1] - lane.centre_y_m):.2f} m from lane centre",
    ]
    if len(camera.x_sd_m):
        low, high = 100 * camera.x_sd_m[:, 1].min(), 100 * camera.x_sd_m[:, 1].max()
        items.append(f"position sd along the lane {low:.1f} to {high:.1f} cm")
    return tuple(items)


def draw_overlay(camera: Camera, lane: Lane, frame_rgb: Picture) -> Picture:
    """Draw the calibration upon a frame so that the eye sees whether it fits.

    Parameters
    ----------
    camera : Camera
    lane : Lane
    frame_rgb : (H, W, 3) uint8, the size the camera was calibrated at

    Returns
    -------
    (H, W, 3) uint8, a new picture

    Raises
    ------
    ValueError
        The frame has another size or type than the camera's pictures.
    """
    if frame_rgb.shape != (camera.height_px, camera.width_px, 3) or frame_rgb.dtype != np.uint8:
        raise ValueError(
            f"draw_overlay: frame {frame_rgb.shape} {frame_rgb.dtype}, expected "
            f"{(camera.height_px, camera.width_px, 3)} uint8: the camera belongs to pictures of that size"
        )
    picture = frame_rgb.copy()
    unit = unit_px(camera.width_px, camera.height_px)
    drawing = lane_drawing(camera, lane)
    draw_lane(picture, drawing)
    rings = [_around(mark.uv_px[None, :], _RING_PX * unit) for mark in camera.marks]
    numbers = number_boxes(drawing, (camera.width_px, camera.height_px), keep_off_px=rings)
    factor = magnification(camera.mark_error_px, unit=unit)
    extra = () if drawing.stretch_m else ("the lane's ground is not in the picture",)
    strip = _strip(picture, camera, (*heading(camera, lane), *extra), factor)
    tips = camera.mark_uv_px + factor * camera.mark_error_px
    _labels(picture, camera, tips, [strip, *(box for _, box in numbers)])
    for mark, model, tip in zip(camera.marks, camera.mark_uv_px, tips, strict=True):
        ring(picture, mark.uv_px, _RING_PX * unit, CLICKED, width=2.4 * unit, casing=1.3 * unit)
        arrow(picture, (model, tip), ERROR, width=2.8 * unit, casing=1.3 * unit)
        disc(picture, model, _DOT_PX * unit, MODEL, casing=1.3 * unit)
    draw_numbers(picture, numbers)
    return picture


def _labels(picture: Picture, camera: Camera, tips: Array, obstacles: Sequence[Box]) -> None:
    """Number and error in cm beside each mark."""
    unit = unit_px(camera.width_px, camera.height_px)
    size = 19.0 * unit
    texts = [(f"{i + 1}", f"{100 * e:.1f} cm") for i, e in enumerate(camera.mark_error_m)]
    if not texts:
        return
    space = 0.45 * size
    wide = [(text_width(a, size, bold=True), text_width(b, size)) for a, b in texts]
    sizes = np.array([[a + b + 3 * space, 1.45 * size] for a, b in wide])
    clicked = np.array([m.uv_px for m in camera.marks])
    paths = [_around(np.stack([a, b]), 2.0 * unit) for a, b in zip(camera.mark_uv_px, tips, strict=True)]
    boxes = place_labels(
        clicked,
        sizes,
        (camera.width_px, camera.height_px),
        gap_px=(_RING_PX + 9.0) * unit,
        obstacles=[*obstacles, *paths],
    )
    for box, point in zip(boxes, clicked, strict=True):
        end = nearest_on(np.array(box), point)
        reach = float(np.hypot(*(end - point)))
        if reach > (_RING_PX + 12.0) * unit:
            start = point + (end - point) * (_RING_PX * unit / reach)
            stroke(picture, np.stack([start, end]), MUTED, width=1.3 * unit, casing=1.0 * unit)
    for box, (number, error), (first, _) in zip(boxes, texts, wide, strict=True):
        panel(picture, box, opacity=0.72)
        base = box[1] + 1.07 * size
        put_text(picture, number, (box[0] + space, base), size_px=size, colour=CLICKED, bold=True)
        put_text(picture, error, (box[0] + 2 * space + first, base), size_px=size, colour=PAPER)


def _around(points_px: Array, grow_px: float) -> Box:
    low, high = points_px.min(axis=0) - grow_px, points_px.max(axis=0) + grow_px
    return (float(low[0]), float(low[1]), float(high[0]), float(high[1]))


def _strip(picture: Picture, camera: Camera, items: Sequence[str], factor: int) -> Box:
    """Heading and legend on a dark strip, at the end of the picture where fewer marks lie; returns its box."""
    unit = unit_px(camera.width_px, camera.height_px)
    size, pad = 20.0 * unit, 15.0 * unit
    small, symbol = 0.86 * size, 34 * unit
    legend = _legend(factor, bool(camera.marks))
    item_px = [text_width(t, size, bold=k < 2) + 1.3 * size for k, t in enumerate(items)]
    entry_px = [symbol + text_width(t, small) + 1.4 * size for _, t in legend]
    room = camera.width_px - 2 * pad + 1.3 * size
    lines, rows = _wrap(item_px, room), _wrap(entry_px, room)
    height = 2 * pad + 1.5 * size * (len(lines) + len(rows)) - 0.4 * size
    v = camera.mark_uv_px[:, 1]
    at_bottom = np.sum(v < height) > np.sum(v > camera.height_px - height)
    top = camera.height_px - height if at_bottom else 0.0
    box = (0.0, float(top), float(camera.width_px), float(top + height))
    panel(picture, box)
    base = top + pad + 0.8 * size
    for line in lines:
        x = pad
        for k in range(*line.indices(len(items))):
            put_text(picture, items[k], (x, base), size_px=size, bold=k < 2)
            x += item_px[k]
        base += 1.5 * size
    for row in rows:
        x = pad
        for k in range(*row.indices(len(legend))):
            kind, text = legend[k]
            _symbol(picture, kind, (x, base - 0.3 * size), unit)
            put_text(picture, text, (x + symbol, base), size_px=small, colour=MUTED)
            x += entry_px[k]
        base += 1.5 * size
    return box


def _wrap(widths: Sequence[float], width: float) -> list[slice]:
    """Break items of these widths into lines no wider than `width`."""
    starts, used = [0], 0.0
    for k, wide in enumerate(widths):
        if k > starts[-1] and used + wide > width:
            starts.append(k)
            used = 0.0
        used += wide
    return [slice(a, b) for a, b in zip(starts, [*starts[1:], len(widths)], strict=True)]


def _legend(factor: int, marks: bool) -> list[tuple[str, str]]:
    lane = [
        ("line", "lane lines and metre scale, by the model"),
        ("centre", "lane centre"),
        ("beyond", "beyond the marks"),
    ]
    if not marks:
        return lane[:2]
    size = "true size" if factor == 1 else f"drawn {factor} times longer"
    return [
        ("clicked", "as clicked"),
        ("model", "where the model puts it"),
        ("error", f"error, {size}"),
        *lane,
    ]


def _symbol(picture: Picture, kind: str, at: tuple[float, float], unit: float) -> None:
    a, b = np.array([at[0], at[1]]), np.array([at[0] + 24 * unit, at[1]])
    middle = (a + b) / 2
    if kind == "clicked":
        ring(picture, middle, 8 * unit, CLICKED, width=2.4 * unit)
    elif kind == "model":
        disc(picture, middle, _DOT_PX * 1.2 * unit, MODEL, casing=unit)
    elif kind == "error":
        arrow(picture, (a, b), ERROR, width=2.8 * unit, casing=0.0)
    elif kind == "line":
        stroke(picture, np.stack([a, b]), MODEL, width=2.2 * unit)
    else:
        step = 6 if kind == "centre" else 12
        for k in range(0, 24, step):
            piece = a + unit * np.array([[k, 0.0], [k + 0.5 * step, 0.0]])
            stroke(picture, piece, MODEL, width=1.6 * unit, casing=0.0)
