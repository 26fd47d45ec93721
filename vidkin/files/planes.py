"""Decoded pictures to upright luma and chroma planes: bit depth, subsampling, rotation, mirror; colours untouched."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final, cast

import av
import cv2
import numpy as np
from numpy.typing import NDArray

Bytes2D = NDArray[np.uint8]

#: A scale or skew in the display matrix below this counts as none [-].
_MATRIX_TOLERANCE: Final = 1e-3

#: (transpose, flip_x, flip_y) -> (clockwise rotation [deg], mirrored before it).
_TURNS: Final = {
    (False, False, False): (0, False),
    (False, True, True): (180, False),
    (False, True, False): (0, True),
    (False, False, True): (180, True),
    (True, True, False): (90, False),
    (True, False, True): (270, False),
    (True, True, True): (90, True),
    (True, False, False): (270, True),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Turn:
    """How stored pictures are turned to stand upright: transpose first, then flip."""

    transpose: bool = False
    flip_x: bool = False
    flip_y: bool = False

    @property
    def rotation_deg(self) -> int:
        """Clockwise turn [deg], after the mirroring if there is one."""
        return _TURNS[self.transpose, self.flip_x, self.flip_y][0]

    @property
    def mirrored(self) -> bool:
        """True if the stored picture is mirrored left to right before it is turned."""
        return _TURNS[self.transpose, self.flip_x, self.flip_y][1]

    def apply(self, plane: Bytes2D) -> Bytes2D:
        """Turn one plane (H, W) upright; a fresh, contiguous array."""
        turned = cv2.transpose(np.ascontiguousarray(plane)) if self.transpose else plane  # 10 times faster than a view
        turned = turned[:, ::-1] if self.flip_x else turned
        turned = turned[::-1] if self.flip_y else turned
        return np.array(turned, dtype=np.uint8, order="C")


def turn_of(matrix: NDArray[np.int32] | None) -> tuple[Turn, float] | None:
    """Read a display matrix (ISO/IEC 14496-12, track header: a b u, c d v, x y w; a-d are 16.16 fixed point).

    A stored point (p, q) is shown at (a p + c q, b p + d q).

    Returns
    -------
    (turn, aspect) or None
        `aspect` is the width over the height at which a pixel is shown; None if it turns by no multiple of 90 degrees.
    """
    if matrix is None:
        return Turn(), 1.0
    a, b, _, c, d = (float(n) for n in matrix[:5])
    straight, crossed = max(abs(a), abs(d)), max(abs(b), abs(c))
    if min(straight, crossed) > _MATRIX_TOLERANCE * max(straight, crossed) or not straight + crossed:
        return None
    if straight > crossed:
        return (Turn(flip_x=a < 0, flip_y=d < 0), abs(a / d)) if a and d else None
    return (Turn(transpose=True, flip_x=c < 0, flip_y=b < 0), abs(c / b)) if b and c else None


def display_matrix(picture: av.VideoFrame) -> NDArray[np.int32] | None:
    """The nine numbers of a picture's display matrix, or None if it has none."""
    data = cast("Mapping[str, Any]", picture.side_data).get("DISPLAYMATRIX")
    return None if data is None else np.frombuffer(bytes(data), dtype=np.int32)[:9]


def planes_of(picture: av.VideoFrame, turn: Turn) -> tuple[Bytes2D, Bytes2D, Bytes2D]:
    """Luma, U and V (uint8) of a decoded picture, upright, chroma as subsampled in the stream.

    Deeper samples are shifted down with rounding. Streams without luma (RGB, palette) have to be converted;
    everything else is taken as it is.
    """
    name = picture.format.name
    if name in ("nv12", "nv21"):
        luma, pair = _rows(picture, 0, 8), _pairs(picture)
        u, v = (pair[:, 0::2], pair[:, 1::2]) if name == "nv12" else (pair[:, 1::2], pair[:, 0::2])
        return turn.apply(luma), turn.apply(u), turn.apply(v)
    parts = picture.format.components
    if name.startswith("gray") and len(parts) == 1 and not picture.format.is_big_endian and parts[0].bits <= 16:
        luma = _rows(picture, 0, parts[0].bits)
        grey = np.full(((luma.shape[0] + 1) // 2, (luma.shape[1] + 1) // 2), 128, dtype=np.uint8)
        return turn.apply(luma), turn.apply(grey), turn.apply(grey)
    if not _planar(picture.format):
        return planes_of(picture.reformat(format="yuv444p"), turn)
    y, u, v = (turn.apply(_rows(picture, i, parts[i].bits)) for i in range(3))
    return y, u, v


def _planar(kind: av.VideoFormat) -> bool:
    """True for Y, U, V each in a plane of its own, little endian, value in the low bits."""
    parts = kind.components
    return (
        kind.name.startswith("yuv")
        and len(parts) >= 3
        and [part.plane for part in parts[:3]] == [0, 1, 2]
        and not kind.is_big_endian
        and "msb" not in kind.name
    )


def _rows(picture: av.VideoFrame, index: int, bits: int) -> Bytes2D:
    """One plane (H, W) as uint8."""
    plane = picture.planes[index]
    wide = bits > 8
    raw: NDArray[Any] = np.frombuffer(plane, dtype="<u2" if wide else np.uint8)  # type: ignore[call-overload]
    rows = raw.reshape(plane.height, abs(plane.line_size) // (2 if wide else 1))
    rows = (rows if plane.line_size >= 0 else rows[::-1])[:, : plane.width]
    if wide:  # value / 2^(bits - 8) to the nearest whole number; the top half step would round past 255
        half, top = 1 << (bits - 9), (255 << (bits - 8))
        rows = (np.minimum(rows, top) + half) >> (bits - 8)
    return np.asarray(rows, dtype=np.uint8)


def _pairs(picture: av.VideoFrame) -> Bytes2D:
    """The interleaved chroma plane of nv12 and nv21: (H/2, W), U and V by turns."""
    plane = picture.planes[1]
    raw: Bytes2D = np.frombuffer(plane, dtype=np.uint8)  # type: ignore[call-overload]
    return raw.reshape(plane.height, abs(plane.line_size))[:, : 2 * plane.width]
