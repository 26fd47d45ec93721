"""The clip with the track drawn on it: body box, centroid, trail, clock, current speed, metre scale."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

import cv2
import numpy as np
from numpy.typing import NDArray

from vidkin.report.canvas import (
    CLICKED,
    ERROR,
    MODEL,
    MUTED,
    PAPER,
    Box,
    Picture,
    disc,
    frame_rgb,
    panel,
    put_text,
    stroke,
    text_width,
    unit_px,
    yuv_to_rgb,
)
from vidkin.report.scale import draw_lane, draw_numbers, lane_drawing, number_boxes
from vidkin.report.words import first_movement_s, half_width_factor, why_missing
from vidkin.stages import Analysis, Array, Camera, Frame, Motion, Track

_TRAIL_S: Final = 2.0
#: Outside the measured pass: is a body found in this frame or not?
_BESIDE: Final = {True: "No speed: body not measured here.", False: "Runner not in view."}


@dataclass(frozen=True, slots=True, kw_only=True)
class _Layer:
    """A still drawing over rows `top`:`bottom`: its colours times its cover, and what shines through."""

    top: int
    bottom: int
    colours: NDArray[np.uint8]
    through: NDArray[np.uint8]

    def lay_on(self, picture: Picture) -> None:
        rows = picture[self.top : self.bottom]
        cv2.multiply(rows, self.through, dst=rows, scale=1.0 / 255)
        cv2.add(rows, self.colours, dst=rows)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Reading:
    """What the head-up panel says of one moment."""

    clock: str
    place: str = ""
    speed: str = ""
    interval: str = ""
    remark: str = ""


def output_size(width_px: int, height_px: int, *, longest_px: int) -> tuple[int, int]:
    """Width and height of the drawn video: even numbers, the longest side at most `longest_px`, never enlarged."""
    zoom = min(1.0, longest_px / max(width_px, height_px))
    return max(2, 2 * round(width_px * zoom / 2)), max(2, 2 * round(height_px * zoom / 2))


def tracked_frames(
    analysis: Analysis, frames: Iterator[Frame], *, width_px: int = 1280, full_range: bool = False
) -> Iterator[tuple[float, Picture]]:
    """Draw what was found on each frame of the clip.

    Parameters
    ----------
    analysis : Analysis
        Stages that could not answer leave out what hangs on them.
    frames : the clip's frames, in order
    width_px : longest side of the drawn pictures
    full_range : the clip's luma runs 0-255 instead of 16-235

    Yields
    ------
    (t_s, picture (h, w, 3) uint8 RGB); both sides even.
    """
    w, h = analysis.footage.width_px, analysis.footage.height_px
    size = output_size(w, h, longest_px=width_px)
    zoom = size[0] / w
    layer = _scale_layer(analysis, size, zoom)
    track = analysis.track if isinstance(analysis.track, Track) else None
    row_of = {int(f): k for k, f in enumerate(track.frame)} if track is not None else {}
    at_bottom = track is not None and _panel_at_bottom(track, h)
    panel_px = _panel_size(unit_px(*size))
    top = size[1] - panel_px[1] if at_bottom else 0.0
    box = (0.0, top, panel_px[0], top + panel_px[1])
    for frame in frames:
        picture = _downscaled(frame, size, full_range=full_range)
        if layer is not None:
            layer.lay_on(picture)
        row = row_of.get(frame.index)
        if track is not None:
            _draw_track(picture, track, row, frame.t_s, zoom)
        _draw_panel(picture, box, _reading(analysis, row, frame.t_s))
        yield frame.t_s, picture


def _downscaled(frame: Frame, size: tuple[int, int], *, full_range: bool) -> Picture:
    """Shrink the planes first, then convert: the conversion is what costs."""
    if (frame.luma.shape[1], frame.luma.shape[0]) == size:
        return frame_rgb(frame, full_range=full_range)
    half = (size[0] // 2, size[1] // 2)
    how = cv2.INTER_AREA if 2 * size[0] < frame.luma.shape[1] else cv2.INTER_LINEAR
    luma = cv2.resize(frame.luma, size, interpolation=how)
    chroma = [cv2.resize(c, half, interpolation=cv2.INTER_LINEAR) for c in (frame.chroma_u, frame.chroma_v)]
    planes = [np.asarray(p, dtype=np.uint8) for p in (luma, *chroma)]
    return yuv_to_rgb(planes[0], planes[1], planes[2], full_range=full_range)


def _scale_layer(analysis: Analysis, size: tuple[int, int], zoom: float) -> _Layer | None:
    """The lane's lines and metre scale, drawn once on black and once on white to learn what shines through."""
    if not isinstance(analysis.camera, Camera):
        return None
    drawing = lane_drawing(analysis.camera, analysis.rep.lane)
    if drawing.stretch_m is None:
        return None
    over = []
    for background in (0, 255):
        picture = np.full((size[1], size[0], 3), background, np.uint8)
        draw_lane(picture, drawing, zoom=zoom)
        draw_numbers(picture, number_boxes(drawing, size, zoom=zoom))
        over.append(picture)
    black, white = over
    through = np.clip(white.astype(np.int16) - black, 0, 255).astype(np.uint8)
    rows = np.flatnonzero((through < 255).any(axis=(1, 2)))
    top, bottom = int(rows[0]), int(rows[-1]) + 1
    return _Layer(
        top=top,
        bottom=bottom,
        colours=np.ascontiguousarray(black[top:bottom]),
        through=np.ascontiguousarray(through[top:bottom]),
    )


def _panel_at_bottom(track: Track, height_px: int) -> bool:
    """Whether the runner passes through the top of the picture more than through the bottom."""
    band = 0.2 * height_px
    return bool(np.sum(track.box_px[:, 1] < band) > np.sum(track.box_px[:, 3] > height_px - band))


def _draw_track(picture: Picture, track: Track, row: int | None, t_s: float, zoom: float) -> None:
    unit = unit_px(picture.shape[1], picture.shape[0])
    last = row if row is not None else int(np.searchsorted(track.t_s, t_s)) - 1
    if last < 0:
        return
    recent = np.flatnonzero(track.whole[: last + 1] & (track.t_s[: last + 1] > t_s - _TRAIL_S))
    if recent.size > 1:
        path = (track.uv_px[recent] + 0.5) * zoom - 0.5
        stroke(picture, path, CLICKED, width=2.6 * unit, casing=1.4 * unit)
    if row is None:
        return
    whole = bool(track.whole[row])
    colour = CLICKED if whole else ERROR
    box = (track.box_px[row] + 0.5) * zoom - 0.5
    _brackets(picture, box, colour, unit)
    if whole:
        disc(picture, (track.uv_px[row] + 0.5) * zoom - 0.5, 6.5 * unit, CLICKED, casing=2.0 * unit)
    else:
        _tag(picture, "cut by the edge, not used", box, unit)


def _brackets(picture: Picture, box: Array, colour: tuple[int, int, int], unit: float) -> None:
    """Corners of the body's box."""
    left, top, right, bottom = box
    arm = 0.16 * min(right - left, bottom - top)
    for x, y, dx, dy in ((left, top, 1, 1), (right, top, -1, 1), (left, bottom, 1, -1), (right, bottom, -1, -1)):
        corner = np.array([[x + dx * arm, y], [x, y], [x, y + dy * arm]])
        stroke(picture, corner, colour, width=2.6 * unit, casing=1.4 * unit)


def _tag(picture: Picture, text: str, box: Array, unit: float) -> None:
    """A label above the box, kept inside the picture."""
    size = 24.0 * unit
    wide, high = text_width(text, size) + size, 1.6 * size
    left = float(np.clip(box[0], 2, max(2, picture.shape[1] - wide - 2)))
    top = float(np.clip(box[1] - high - 6 * unit, 2, max(2, picture.shape[0] - high - 2)))
    panel(picture, (left, top, left + wide, top + high))
    put_text(picture, text, (left + size / 2, top + 1.12 * size), size_px=size, colour=ERROR)


def _reading(analysis: Analysis, row: int | None, t_s: float) -> _Reading:
    start = first_movement_s(analysis)
    clock = f"{t_s:.2f} s in clip" if start is None or t_s < start else f"{t_s - start:.2f} s from first movement"
    motion = analysis.motion
    if not isinstance(motion, Motion):
        return _Reading(clock=clock, remark=f"No speed. {why_missing(analysis, 'motion').reason}")
    if not motion.t_s[0] - 1e-6 <= t_s <= motion.t_s[-1] + 1e-6:
        return _Reading(clock=clock, remark=_BESIDE[row is not None])
    k = int(np.argmin(np.abs(motion.t_s - t_s)))
    v, sd, x = (float(np.interp(t_s, motion.t_s, c)) for c in (motion.v_mps, motion.v_sd_mps, motion.smooth_x_m))
    half = half_width_factor(analysis.settings.level) * sd
    return _Reading(
        clock=clock,
        place=f"{x - analysis.rep.lane.start_x_m:.1f} m",
        speed=f"{v:.2f}",
        interval=f"{100 * analysis.settings.level:g} % interval {v - half:.2f} to {v + half:.2f}",
        remark="" if motion.inside[k] else "end of the pass: less certain",
    )


def _panel_size(unit: float) -> tuple[float, float]:
    return 560.0 * unit, 178.0 * unit


def _draw_panel(picture: Picture, box: Box, said: _Reading) -> None:
    unit = unit_px(picture.shape[1], picture.shape[0])
    panel(picture, box)
    left, top = box[0] + 24 * unit, box[1]
    small = 26.0 * unit
    room = box[2] - left - 12 * unit
    if said.speed:
        big = 66.0 * unit
        put_text(picture, said.speed, (left, top + 72 * unit), size_px=big, bold=True)
        after = left + text_width(said.speed, big, bold=True) + 14 * unit
        put_text(picture, "m/s", (after, top + 72 * unit), size_px=34 * unit, colour=MUTED)
        put_text(picture, said.place, (after + 110 * unit, top + 72 * unit), size_px=34 * unit, colour=MODEL)
        put_text(picture, said.interval, (left, top + 116 * unit), size_px=small, colour=PAPER)
    elif said.remark:
        for k, line in enumerate(_broken(said.remark, small, room, lines=3)):
            put_text(picture, line, (left, top + (44 + 36 * k) * unit), size_px=small, colour=CLICKED)
    tail = f"{said.clock}{'   ' + said.remark if said.speed and said.remark else ''}"
    size = min(small, small * room / max(1.0, text_width(tail, small)))
    put_text(picture, tail, (left, top + 156 * unit), size_px=size, colour=MUTED)


def _broken(text: str, size: float, room: float, *, lines: int) -> list[str]:
    """Break a sentence into at most `lines` lines; what does not fit ends in an ellipsis."""
    out: list[str] = [""]
    for word in text.split():
        longer = f"{out[-1]} {word}".strip()
        if text_width(longer, size) <= room or not out[-1]:
            out[-1] = longer
        elif len(out) < lines:
            out.append(word)
        else:
            out[-1] += " …"
            break
    return out
