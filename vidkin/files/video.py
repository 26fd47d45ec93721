"""The only door to video: opens a clip, keeps its true times, hands out upright planes frame by frame (PyAV)."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import av
import numpy as np

from vidkin.errors import FootageError
from vidkin.files.clock import check_capture_fps, evenness, slow_record, slowness
from vidkin.files.container import AGAIN, Scan, decoded, scan_track
from vidkin.files.damage import Damage
from vidkin.files.planes import Turn, display_matrix, planes_of, turn_of
from vidkin.files.video_writer import VideoWriter
from vidkin.notices import Notice, notice
from vidkin.stages import Footage, Frame, Ints

__all__ = ["Clip", "VideoWriter", "open_clip"]

#: Fewer usable pictures than this share of those announced: the clip is refused [-].
_LEAST_USABLE: Final = 0.5
#: More pictures than this share without a rising time: the clip is refused [-].
_MOST_TIMELESS: Final = 0.1
#: Pixels wider than high (or the reverse) by more than this are refused, for cameras here have square pixels [-].
_SQUARE: Final = 2e-3
#: An end this much before the announced one is early: seconds and frames, whichever is more.
_SLACK_S: Final = 0.1
_SLACK_FRAMES: Final = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class Clip:
    """A readable clip. `full_range` tells that luma runs 0-255 instead of 16-235."""

    path: Path
    footage: Footage
    full_range: bool
    track: int
    turn: Turn
    stamps: Ints

    def frames(self) -> Iterator[Frame]:
        """A fresh pass: each frame of `footage.t_s` once, with the same index and time.

        Raises
        ------
        FootageError
            If the file is no longer what `open_clip` read.
        """
        index = 0
        for picture in decoded(self.path, self.track, Damage()):
            if picture.pts == self.stamps[index]:
                yield _frame(picture, index, float(self.footage.t_s[index]), self.turn)
                index += 1
                if index == self.stamps.size:
                    return
        raise FootageError(
            f"{self.path}: only {index} of {self.stamps.size} frames could be read the second time.",
            "The file has changed while it was being analysed; run again.",
        )


@dataclass(slots=True)
class _Tally:
    """Pictures left out in the first pass, by reason."""

    seen: int = 0
    damaged: int = 0
    no_time: int = 0
    not_rising: int = 0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Look:
    """What the first picture shows of all of them."""

    stored_px: tuple[int, int]
    turn: Turn
    bit_depth: int
    full_range: bool
    interlaced: bool

    @property
    def upright_px(self) -> tuple[int, int]:
        return self.stored_px[::-1] if self.turn.transpose else self.stored_px


def open_clip(path: Path, *, capture_fps: float | None = None, visit: Callable[[Frame], None] | None = None) -> Clip:
    """Open a clip and decode it once.

    Parameters
    ----------
    path : Path
        A video file: H.264, HEVC or whatever the decoder knows, 8 or 10 bit.
    capture_fps : float, optional
        Rate at which the camera filmed [Hz], where the file plays in slow motion. It wins over the phone's own tag.
    visit : callable, optional
        Called with each frame during this pass, in order.

    Returns
    -------
    Clip
        Its footage has the true time of each frame [s], from the container's time stamps, first frame at 0.

    Raises
    ------
    FootageError
        If the file holds no usable video.
    UsageError
        If `capture_fps` is impossible.
    """
    path = Path(path)
    check_capture_fps(capture_fps)
    scan, choice = scan_track(path)
    slow = slowness(scan.rate_hz, capture_fps=capture_fps, tag=scan.tag, record=slow_record(path))
    damage, tally = Damage(), _Tally()
    stamps: list[int] = []
    look: _Look | None = None
    for picture in decoded(path, scan.track, damage):
        look = look or _look(path, picture, scan.pixel_aspect)
        tally.seen += 1
        if (picture.width, picture.height) != look.stored_px:
            raise FootageError(
                f"{path}: the picture changes size from {look.stored_px[0]} x {look.stored_px[1]} to "
                f"{picture.width} x {picture.height} px at picture {tally.seen}.",
                "Use a clip from one recording, not a joined one.",
            )
        if damage.spoils(picture):
            tally.damaged += 1
        elif picture.pts is None:
            tally.no_time += 1
        elif stamps and picture.pts <= stamps[-1]:
            tally.not_rising += 1
        else:
            stamps.append(picture.pts)
            if visit is not None:
                visit(
                    _frame(picture, len(stamps) - 1, (picture.pts - stamps[0]) * scan.tick_s / slow.factor, look.turn)
                )
    losses = _account(path, scan, tally, len(stamps))
    assert look is not None  # _account refuses a clip without pictures
    kept = np.array(stamps, dtype=np.int64)
    t_s = (kept - kept[0]) * scan.tick_s / slow.factor
    last_s = float(kept[-1] - kept[0]) * scan.tick_s
    interlaced = (notice("interlaced"),) if look.interlaced else ()
    footage = Footage(
        name=path.name,
        width_px=look.upright_px[0],
        height_px=look.upright_px[1],
        t_s=t_s,
        slow_factor=slow.factor,
        codec=scan.codec,
        bit_depth=look.bit_depth,
        rotation_deg=look.turn.rotation_deg,
        mirrored=look.turn.mirrored,
        notices=(
            *choice,
            *interlaced,
            *slow.notices,
            *losses,
            *_early_end(scan, last_s),
            *evenness(t_s, tick_s=scan.tick_s / slow.factor),
        ),
    )
    return Clip(path=path, footage=footage, full_range=look.full_range, track=scan.track, turn=look.turn, stamps=kept)


def _frame(picture: av.VideoFrame, index: int, t_s: float, turn: Turn) -> Frame:
    luma, u, v = planes_of(picture, turn)
    return Frame(index=index, t_s=t_s, luma=luma, chroma_u=u, chroma_v=v)


def _look(path: Path, picture: av.VideoFrame, pixel_aspect: float) -> _Look:
    turned = turn_of(display_matrix(picture))
    if turned is None:
        raise FootageError(
            f"{path}: the pictures are turned by an angle that is no multiple of 90 degrees.",
            "Use the clip as the phone filmed it, not one turned by another program.",
        )
    turn, aspect = turned
    stretch = aspect if abs(aspect - 1) > _SQUARE else pixel_aspect  # demuxers repeat the matrix's in the other
    if abs(stretch - 1) > _SQUARE:
        raise FootageError(
            f"{path}: its pixels are {stretch:.3f} times as wide as high; only square pixels can be measured.",
            "Use the phone's own file, or save the clip again with square pixels.",
        )
    return _Look(
        stored_px=(picture.width, picture.height),
        turn=turn,
        bit_depth=picture.format.components[0].bits,
        full_range=picture.format.name.startswith("yuvj") or int(picture.color_range) == 2,
        interlaced=picture.interlaced_frame,
    )


def _account(path: Path, scan: Scan, tally: _Tally, kept: int) -> tuple[Notice, ...]:
    """Refuse a clip of which too little is usable; otherwise say what was left out."""
    total = max(scan.announced, tally.seen)
    lost = total - tally.seen + tally.damaged
    if not tally.seen:
        raise FootageError(f"{path}: none of its {total} pictures could be decoded (codec {scan.codec}).", AGAIN)
    if lost > (1 - _LEAST_USABLE) * total or tally.seen - tally.damaged < 2:
        raise FootageError(f"{path}: {lost} of its {total} pictures are missing or damaged.", AGAIN)
    timeless = tally.no_time + tally.not_rising
    if timeless > _MOST_TIMELESS * total or kept < 2:
        raise FootageError(
            f"{path}: of {total} pictures, {tally.no_time} carry no time and {tally.not_rising} repeat or go back in "
            "time: no speed can be had from them.",
            "Use the phone's own file, not a copy changed by another program.",
        )
    said: list[Notice] = []
    if lost:
        said.append(notice("frames_lost", lost=lost, total=total))
    if tally.no_time:
        said.append(notice("times_missing", count=tally.no_time, total=total))
    if tally.not_rising:
        said.append(notice("times_not_rising", count=tally.not_rising, total=total))
    return tuple(said)


def _early_end(scan: Scan, last_s: float) -> tuple[Notice, ...]:
    """Where only a length is announced: pictures that end well before it."""
    end_s = last_s + 1.0 / scan.rate_hz
    if scan.declared_s is None or scan.declared_s - end_s <= max(_SLACK_S, _SLACK_FRAMES / scan.rate_hz):
        return ()
    return (notice("ended_early", declared=scan.declared_s, last=end_s),)
