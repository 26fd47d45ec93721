"""Drawing on an RGB picture: smooth strokes with a dark casing, and type set from real outlines.

Everything is drawn in place on a uint8 array (H, W, 3). Pixel positions are real numbers; the centre of the top left
pixel is (0, 0). One palette for every picture: what the user clicked is amber, what the model says is cyan, what
differs is pink.
"""

from __future__ import annotations

import warnings
from functools import lru_cache
from typing import Final

import cv2
import numpy as np
from matplotlib.font_manager import FontProperties
from matplotlib.textpath import TextPath
from numpy.typing import NDArray

from vidkin.stages import Array, Frame

Picture = NDArray[np.uint8]
Colour = tuple[int, int, int]
#: left, top, right, bottom [px]
Box = tuple[float, float, float, float]

INK: Final[Colour] = (13, 17, 23)
PAPER: Final[Colour] = (246, 244, 239)
MUTED: Final[Colour] = (178, 186, 194)
CLICKED: Final[Colour] = (255, 193, 61)
MODEL: Final[Colour] = (84, 222, 240)
ERROR: Final[Colour] = (255, 110, 178)

_SHIFT = 4
_FINE = 4
_DESIGN: Final = 64.0
#: R, G, B from Y, Cb, Cr in full swing: ITU-R BT.709-6, from Kr = 0.2126 and Kb = 0.0722 (MEM).
_BT709: Final = np.array([[1.0, 0.0, 1.5748], [1.0, -0.1873243, -0.4681243], [1.0, 1.8556, 0.0]])
#: Zero and swing of luma and chroma [8-bit steps]: limited range of BT.709-6, and full range.
_LIMITED: Final = ((16.0, 219.0), (128.0, 224.0))
_FULL: Final = ((0.0, 255.0), (128.0, 255.0))


def yuv_to_rgb(
    luma: NDArray[np.uint8], chroma_u: NDArray[np.uint8], chroma_v: NDArray[np.uint8], *, full_range: bool = False
) -> Picture:
    """BT.709 planes to RGB (H, W, 3); chroma of any subsampling is stretched to the luma's size.

    Source: ITU-R BT.709-6 items 3.2-3.4 (matrix and quantisation).
    """
    size = (luma.shape[1], luma.shape[0])
    u, v = (
        c if c.shape == luma.shape else cv2.resize(c, size, interpolation=cv2.INTER_LINEAR)
        for c in (chroma_u, chroma_v)
    )
    (luma_zero, luma_swing), (chroma_zero, chroma_swing) = _FULL if full_range else _LIMITED
    matrix = _BT709 * (255.0 / np.array([luma_swing, chroma_swing, chroma_swing]))
    offset = -matrix @ np.array([luma_zero, chroma_zero, chroma_zero])
    yuv = cv2.merge([luma, u, v])
    return np.asarray(cv2.transform(yuv, np.column_stack([matrix, offset])), dtype=np.uint8)


def frame_rgb(frame: Frame, *, full_range: bool = False) -> Picture:
    """A decoded frame as RGB (H, W, 3) uint8; `full_range` where luma runs 0-255 instead of 16-235."""
    return yuv_to_rgb(frame.luma, frame.chroma_u, frame.chroma_v, full_range=full_range)


def unit_px(width_px: int, height_px: int) -> float:
    """How many pixels one "design pixel" of a 1920 x 1080 picture is in this one [-]."""
    return float(np.sqrt(width_px * height_px / (1920.0 * 1080.0)))


def _fixed(uv_px: Array) -> NDArray[np.int32]:
    return np.round(np.asarray(uv_px, dtype=np.float64) * (1 << _SHIFT)).astype(np.int32)


def stroke(picture: Picture, uv_px: Array, colour: Colour, *, width: float, casing: float = 0.0) -> None:
    """Draw the polyline `uv_px` (N, 2), under it a dark casing that stands out `casing` px on each side."""
    uv_px = np.asarray(uv_px, dtype=np.float64)
    near = np.all(np.abs(uv_px) < 30000, axis=1)
    points = [_fixed(uv_px[near]).reshape(-1, 1, 2)]
    if near.sum() < 2:
        return
    if casing > 0:
        _lines(picture, points, INK, width + 2 * casing)
    _lines(picture, points, colour, width)


def _lines(picture: Picture, points: list[NDArray[np.int32]], colour: Colour, width: float) -> None:
    cv2.polylines(picture, points, False, colour, max(1, round(width)), cv2.LINE_AA, _SHIFT)


def dashes(uv_px: Array, *, on_px: float, off_px: float) -> list[Array]:
    """Cut a polyline (N, 2) into dashes of `on_px` with gaps of `off_px`, by length along it."""
    uv_px = np.asarray(uv_px, dtype=np.float64)
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(uv_px, axis=0).T))])
    pieces = []
    for start in np.arange(0.0, along[-1], on_px + off_px):
        s = np.linspace(start, min(start + on_px, along[-1]), 6)
        pieces.append(np.column_stack([np.interp(s, along, uv_px[:, 0]), np.interp(s, along, uv_px[:, 1])]))
    return pieces


def disc(picture: Picture, uv_px: Array, radius: float, colour: Colour, *, casing: float = 0.0) -> None:
    """Fill a disc of `radius` px at `uv_px` (2,)."""
    centre = _fixed(uv_px)
    at = (int(centre[0]), int(centre[1]))
    if casing > 0:
        cv2.circle(picture, at, round((radius + casing) * (1 << _SHIFT)), INK, -1, cv2.LINE_AA, _SHIFT)
    cv2.circle(picture, at, round(radius * (1 << _SHIFT)), colour, -1, cv2.LINE_AA, _SHIFT)


def ring(picture: Picture, uv_px: Array, radius: float, colour: Colour, *, width: float, casing: float = 0.0) -> None:
    """Draw a circle of `radius` px at `uv_px` (2,)."""
    turn = np.linspace(0, 2 * np.pi, max(24, int(radius * 4)))
    circle = np.asarray(uv_px) + radius * np.column_stack([np.cos(turn), np.sin(turn)])
    stroke(picture, circle, colour, width=width, casing=casing)


def arrow(picture: Picture, ends_px: tuple[Array, Array], colour: Colour, *, width: float, casing: float) -> None:
    """Draw an arrow between two points; too short for a head, it is a plain stroke."""
    tail, tip = (np.asarray(e, dtype=np.float64) for e in ends_px)
    reach = float(np.hypot(*(tip - tail)))
    if reach < 0.5:
        return
    along = (tip - tail) / reach
    head = min(4.5 * width, 0.6 * reach)
    base = tip - head * along
    across = np.array([-along[1], along[0]]) * head * 0.42
    triangle = np.stack([tip, base + across, base - across])
    shaft = np.stack([tail, base + 0.3 * head * along])
    outline = np.stack([*triangle, triangle[0]])
    if casing > 0:
        _lines(picture, [_fixed(shaft).reshape(-1, 1, 2)], INK, width + 2 * casing)
        _lines(picture, [_fixed(outline).reshape(-1, 1, 2)], INK, 2 * casing)
    _lines(picture, [_fixed(shaft).reshape(-1, 1, 2)], colour, width)
    cv2.fillPoly(picture, [_fixed(triangle).reshape(-1, 1, 2)], colour, cv2.LINE_AA, _SHIFT)


def panel(picture: Picture, box: Box, *, opacity: float = 0.78) -> None:
    """Darken the rectangle `box` so that light type on it can be read."""
    h, w = picture.shape[:2]
    left, top = max(0, round(box[0])), max(0, round(box[1]))
    right, bottom = min(w, round(box[2])), min(h, round(box[3]))
    if right <= left or bottom <= top:
        return
    area = picture[top:bottom, left:right]
    cv2.addWeighted(area, 1 - opacity, np.full_like(area, INK), opacity, 0, dst=area)


@lru_cache(maxsize=1024)
def _glyph(character: str, bold: bool) -> tuple[tuple[Array, ...], float]:
    """Outlines of one character (x right, y up) and its advance, at type size 1.

    Set once and kept: laying out whole lines anew for every frame of a video would cost more than drawing them.
    """
    font = FontProperties(family="DejaVu Sans", weight="bold" if bold else "normal")

    def outlines(text: str) -> list[Array]:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # a letter that the font lacks is drawn as a box
            path = TextPath((0, 0), text, size=_DESIGN, prop=font)
        return [np.asarray(p) / _DESIGN for p in path.to_polygons(closed_only=True)]

    def right_end(text: str) -> float:
        return float(max(p[:, 0].max() for p in outlines(text)))

    shapes = () if character.isspace() else tuple(outlines(character))
    return shapes, right_end(f"|{character}|") - right_end("||")


def text_width(text: str, size_px: float, *, bold: bool = False) -> float:
    """Width of a line of type [px]."""
    return size_px * sum(_glyph(c, bold)[1] for c in text)


@lru_cache(maxsize=512)
def _type(text: str, size_px: float, bold: bool) -> tuple[NDArray[np.uint8], int, int]:
    """Coverage mask (h, w) of a line of type, and where its baseline starts in it (column, row)."""
    outlines: list[Array] = []
    along = 0.0
    for character in text:
        shapes, advance = _glyph(character, bold)
        outlines.extend((shape + np.array([along, 0.0])) * size_px for shape in shapes)
        along += advance
    if not outlines:
        return np.zeros((1, 1), np.uint8), 0, 0
    every = np.concatenate(outlines)
    left, low = np.floor(every.min(axis=0)) - 1
    right, high = np.ceil(every.max(axis=0)) + 1
    shape = (int(high - low) * _FINE, int(right - left) * _FINE)
    fine = np.zeros(shape, np.uint8)
    ends = np.cumsum([len(p) for p in outlines])[:-1]
    pixels = _fixed(np.column_stack([every[:, 0] - left, high - every[:, 1]]) * _FINE - 0.5)
    cv2.fillPoly(fine, np.split(pixels, ends), 255, cv2.LINE_AA, _SHIFT)
    mask = cv2.resize(fine, (shape[1] // _FINE, shape[0] // _FINE), interpolation=cv2.INTER_AREA)
    return np.asarray(mask, dtype=np.uint8), int(-left), int(high)


def put_text(
    picture: Picture,
    text: str,
    at_px: tuple[float, float],
    *,
    size_px: float,
    colour: Colour = PAPER,
    bold: bool = False,
    casing: float = 0.0,
) -> None:
    """Set one line of type whose baseline starts at `at_px`; `casing` px of dark edge round each letter."""
    mask, start, base = _type(text, size_px, bold)
    grow = round(casing)
    left, top = round(at_px[0]) - start, round(at_px[1]) - base
    if grow:
        round_pen = cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * grow + 1, 2 * grow + 1))
        edge = cv2.dilate(np.pad(mask, grow), round_pen)
        _blend(picture, np.asarray(edge, dtype=np.uint8), left - grow, top - grow, INK)
    _blend(picture, mask, left, top, colour)


def _blend(picture: Picture, mask: NDArray[np.uint8], left: int, top: int, colour: Colour) -> None:
    h, w = picture.shape[:2]
    x0, y0, x1, y1 = max(0, left), max(0, top), min(w, left + mask.shape[1]), min(h, top + mask.shape[0])
    if x1 <= x0 or y1 <= y0:
        return
    area = picture[y0:y1, x0:x1]
    cover = mask[y0 - top : y1 - top, x0 - left : x1 - left, None].astype(np.uint16)
    ink = np.array(colour, dtype=np.uint16)
    area[:] = ((area * (255 - cover) + ink * cover + 127) // 255).astype(np.uint8)
