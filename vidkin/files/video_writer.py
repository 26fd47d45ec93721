"""Writes H.264 video that browsers play: true (also uneven) times, BT.709 colours, index at the front of the file."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from itertools import pairwise
from pathlib import Path
from types import TracebackType
from typing import Final, Literal, Self

import av
import cv2
import numpy as np
from av.video.stream import VideoStream
from numpy.typing import NDArray

from vidkin.errors import ExportError

Bytes2D = NDArray[np.uint8]

#: Ticks per second of the written times; 1/90000 s is the usual clock of video.
_TICKS_HZ: Final = 90_000
#: H.273 code points: 1 is BT.709 for primaries, transfer and matrix; 1 and 2 are limited and full range.
_BT709: Final = 1
_LIMITED, _FULL = 1, 2


class VideoWriter:
    """H.264 High, 4:2:0, in MP4. Use it as a context manager; a file left by an error inside is removed.

    Parameters
    ----------
    path : Path
        The file to write.
    size_px : tuple of int
        Width, height [px]; an odd one is filled up by repeating the last column or row.
    rate : float
        Pictures per second [Hz]; with `times_s` only a hint to the encoder.
    times_s : sequence of float, optional
        Rising true time of each picture [s]. Without it, pictures stand 1/`rate` apart.
    crf, preset : int, str
        The encoder's constant rate factor (0-51, smaller is better) and preset.
    full_range : bool
        The planes given to `write_planes` run 0-255 (RGB is always written limited unless this is set).

    Raises
    ------
    ExportError
        If the file cannot be written.
    ValueError
        If sizes, times or the number of pictures do not fit together.
    """

    def __init__(
        self,
        path: Path,
        size_px: tuple[int, int],
        *,
        rate: float,
        times_s: Sequence[float] | None = None,
        crf: int = 20,
        preset: str = "veryfast",
        full_range: bool = False,
    ) -> None:
        width, height = size_px
        if width < 2 or height < 2 or not rate > 0:
            raise ValueError(f"VideoWriter: size {size_px} must be at least 2 x 2 px and rate {rate} > 0")
        self._path, self._size, self._full = Path(path), (width, height), full_range
        self._ticks = None if times_s is None else _ticks(times_s)
        self._step = _TICKS_HZ / rate
        self._count = 0
        self._lasts: dict[int, int] = {}  # picture's tick -> ticks that it is shown
        try:
            self._path.open("wb").close()  # the library itself would only say so at the first picture
            self._container = av.open(str(self._path), "w", format="mp4", options={"movflags": "+faststart"})
            self._stream = self._add_stream(rate, {"crf": str(crf), "preset": preset, "profile": "high"})
        except (av.FFmpegError, OSError) as error:
            raise self._cannot(error) from error

    def _add_stream(self, rate: float, options: dict[str, str]) -> VideoStream:
        stream = self._container.add_stream("libx264", rate=Fraction(rate).limit_denominator(1001), options=options)
        width, height = self._size
        stream.width, stream.height = width + width % 2, height + height % 2
        # yuvj420p is 4:2:0 at full range; the sample layout is the same.
        stream.pix_fmt = "yuvj420p" if self._full else "yuv420p"
        context = stream.codec_context
        context.time_base = Fraction(1, _TICKS_HZ)
        if self._ticks is not None:
            context.max_b_frames = 0  # reordered pictures at uneven times make players end the video too early
        context.gop_size = max(1, round(rate / 2))  # a key frame each half second, for quick seeking
        context.color_range = _FULL if self._full else _LIMITED
        context.color_primaries = context.color_trc = context.colorspace = _BT709
        return stream

    def write_rgb(self, picture: Bytes2D) -> None:
        """Append a picture (H, W, 3), uint8, RGB."""
        width, height = self._size
        if picture.shape != (height, width, 3) or picture.dtype != np.uint8:
            raise ValueError(f"write_rgb: {picture.dtype} {picture.shape}, expected uint8 {(height, width, 3)}")
        even = np.ascontiguousarray(np.pad(picture, ((0, height % 2), (0, width % 2), (0, 0)), mode="edge"))
        frame = av.VideoFrame.from_ndarray(even, "rgb24").reformat(
            format=self._stream.pix_fmt,
            src_color_range=_FULL,
            dst_color_range=_FULL if self._full else _LIMITED,
            dst_colorspace="ITU709",
        )
        self._encode(frame)

    def write_planes(self, luma: Bytes2D, chroma_u: Bytes2D, chroma_v: Bytes2D) -> None:
        """Append a picture as planes, uint8: luma (H, W), chroma of any subsampling (averaged to half size)."""
        width, height = self._size
        if luma.shape != (height, width):
            raise ValueError(f"write_planes: luma {luma.shape}, expected {(height, width)}")
        frame = av.VideoFrame(self._stream.width, self._stream.height, self._stream.pix_fmt or "yuv420p")
        half = ((width + 1) // 2, (height + 1) // 2)
        for plane, values in zip(frame.planes, (luma, _halved(chroma_u, half), _halved(chroma_v, half)), strict=True):
            rows = np.zeros((plane.height, plane.line_size), dtype=np.uint8)
            even = np.pad(
                values, ((0, plane.height - values.shape[0]), (0, plane.width - values.shape[1])), mode="edge"
            )
            rows[:, : plane.width] = even
            plane.update(rows.tobytes())
        self._encode(frame)

    def _encode(self, frame: av.VideoFrame) -> None:
        if self._ticks is not None and self._count >= len(self._ticks):
            raise ValueError(f"VideoWriter: more pictures than the {len(self._ticks)} times given")
        frame.pts = self._tick(self._count)
        self._lasts[frame.pts] = self._tick(self._count + 1) - frame.pts
        frame.time_base = Fraction(1, _TICKS_HZ)
        frame.color_range = _FULL if self._full else _LIMITED
        frame.colorspace = _BT709
        self._count += 1
        try:
            self._mux(frame)
        except (av.FFmpegError, OSError) as error:
            raise self._cannot(error) from error

    def _tick(self, index: int) -> int:
        """Time of a picture [ticks]; one past the last lasts as long as the usual one."""
        if self._ticks is None:
            return round(index * self._step)
        return self._ticks[index] if index < len(self._ticks) else self._ticks[-1] + round(self._step)

    def _mux(self, frame: av.VideoFrame | None) -> None:
        for packet in self._stream.encode(frame):
            # The encoder leaves this out; without it players end the video before its last picture.
            packet.duration = self._lasts.pop(packet.pts if packet.pts is not None else -1, round(self._step))
            self._container.mux(packet)

    def _cannot(self, error: Exception) -> ExportError:
        why = getattr(error, "strerror", None) or error
        return ExportError(
            f"{self._path} cannot be written: {why}.", "Check the folder, its rights and the free space."
        )

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> Literal[False]:
        try:
            if kind is None:
                if not self._count:
                    raise ValueError("VideoWriter: no picture was written")
                self._mux(None)
            self._container.close()
        except (av.FFmpegError, OSError) as failed:
            self._path.unlink(missing_ok=True)
            if kind is None:
                raise self._cannot(failed) from failed
        finally:
            if kind is not None or not self._count:
                self._path.unlink(missing_ok=True)
        return False


def _ticks(times_s: Sequence[float]) -> list[int]:
    ticks = [round((t - times_s[0]) * _TICKS_HZ) for t in times_s]
    if any(b <= a for a, b in pairwise(ticks)):
        raise ValueError("VideoWriter: times_s must rise by at least 1/90000 s")
    return ticks


def _halved(plane: Bytes2D, half: tuple[int, int]) -> Bytes2D:
    """A chroma plane at half size (width, height), averaged where it is finer."""
    if plane.shape == half[::-1]:
        return plane
    return np.asarray(cv2.resize(plane, half, interpolation=cv2.INTER_AREA), dtype=np.uint8)
