"""Containers: open one, choose its video track, scan the packets, decode them."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import chain
from pathlib import Path
from typing import Final

import av
import numpy as np
from av.container import InputContainer
from av.packet import Packet
from av.video.stream import VideoStream

from vidkin.errors import FootageError
from vidkin.files.clock import capture_tag, stored_rate_hz
from vidkin.files.damage import Damage, intact, length_bytes
from vidkin.notices import Notice, notice
from vidkin.stages import Ints

_NO_TIME_STAMPS: Final = 0x80  # AVFMT_NOTIMESTAMPS
_NOMINAL_RATE_ONLY: Final = {"avi", "yuv4mpegpipe"}
#: "Formats" that turn text or lists of other files into video.
_NOT_FOOTAGE: Final = {"tty", "hls", "concat", "dash", "sdp", "ffmetadata"}
#: Codecs whose files hold packets that show no picture.
_HIDDEN_PACKETS: Final = {"vp8", "vp9", "av1", "libdav1d"}
_NOT_PLAYED: Final = ("attached_pic", "timed_thumbnails", "still_image")
AGAIN: Final = "Copy the clip from the phone again, or use another one."


@dataclass(frozen=True, slots=True, kw_only=True)
class Scan:
    """What a track says without being decoded.

    `stamps` rising time stamps of its shown packets, in ticks of `tick_s`; `announced` how many pictures it should
    hold (0: unknown); `declared_s` how long it should last (None: unknown or of no use); `pixel_aspect` width of a
    pixel over its height; `tag` the phone's capture rate.
    """

    track: int
    codec: str
    stamps: Ints
    tick_s: float
    announced: int
    declared_s: float | None
    pixel_aspect: float
    tag: str | None

    @property
    def rate_hz(self) -> float:
        """Pictures per second as stored [Hz]."""
        return stored_rate_hz(np.asarray(self.stamps * self.tick_s, dtype=np.float64))


# --- opening --------------------------------------------------------------------------------------


def _opened(path: Path) -> InputContainer:
    """Open a file for reading; it may point to no address of a network."""
    if not path.exists():
        raise FootageError(
            f"{path}: there is no such file.", "Check the name; a sheet's clip is relative to the sheet."
        )
    if path.is_dir():
        raise FootageError(f"{path} is a folder, not a clip.", "Name the video file in it.")
    if not path.is_file():
        raise FootageError(f"{path} is no ordinary file.", "Name a video file.")
    try:
        if path.stat().st_size == 0:
            raise FootageError(f"{path} is empty (0 bytes).", AGAIN)
        container = av.open(f"file:{path}", options={"protocol_whitelist": "file"}, metadata_errors="replace")
    except PermissionError as error:
        raise FootageError(f"{path} cannot be read: {error.strerror}.", "Check who may read the file.") from error
    except (av.FFmpegError, OSError, ValueError) as error:
        raise FootageError(
            f"{path} cannot be opened as a video: {getattr(error, 'strerror', None) or error}.",
            f"It is damaged, incomplete or no video. {AGAIN}",
        ) from error
    if container.format.name in _NOT_FOOTAGE:
        name = container.format.name
        container.close()
        raise FootageError(f"{path} is no clip but a text or playlist file ({name}).", "Name the video file itself.")
    return container


def _choose(path: Path, container: InputContainer) -> tuple[VideoStream, tuple[Notice, ...]]:
    """The video track that a player would show: the default one; of several, the one with most pictures."""
    tracks = [s for s in container.streams.video if not any(_has(s, flag) for flag in _NOT_PLAYED)]
    if not tracks:
        others = sorted({s.type for s in container.streams if s not in container.streams.video})
        held = f"only {' and '.join(others)}" if others else "nothing that moves"
        raise FootageError(f"{path} has no video track; it holds {held}.", "Name the clip that the phone filmed.")
    known = [s for s in tracks if s.codec_context is not None]
    if not known:
        raise FootageError(
            f"{path}: no decoder for its video is known.", "Film, or save the clip again, as H.264 or HEVC (H.265)."
        )
    best = max(known, key=lambda s: (_has(s, "default"), s.frames, -s.index))
    if len(tracks) == 1:
        return best, ()
    said = notice(
        "several_tracks",
        count=len(tracks),
        number=best.index,
        width=best.width,
        height=best.height,
        pictures=best.frames or "?",
    )
    return best, (said,)


def _has(stream: VideoStream, flag: str) -> bool:
    return bool(stream.disposition & getattr(type(stream.disposition), flag, 0))


def scan_track(path: Path) -> tuple[Scan, tuple[Notice, ...]]:
    """Choose the track and read its packets, undecoded."""
    with _opened(path) as container:
        stream, said = _choose(path, container)
        kind = container.format.name
        codec = stream.codec_context.name
        if container.format.flags & _NO_TIME_STAMPS or stream.time_base is None:
            raise FootageError(
                f"{path}: this kind of file ({kind}) keeps no time stamps; a nominal rate gives no speed.",
                "Use the MP4 or MOV file that the phone wrote.",
            )
        packets, discarded = 0, 0
        stamps: set[int] = set()
        for packet in _packets(container, stream):
            discarded += packet.is_discard
            if not packet.is_discard:
                packets += 1
                stamps |= {packet.pts} if packet.pts is not None else set()
        # Nothing of a stream may be asked once its container is closed.
        track, tick_s, audio = stream.index, float(stream.time_base), len(container.streams.audio)
        declared_s = None if stream.frames else _declared_s(stream, container.duration if not audio else None)
        pixel_aspect = float(stream.sample_aspect_ratio or 1)
        tag = capture_tag({**stream.metadata, **container.metadata})
        announced = 0 if codec in _HIDDEN_PACKETS else max(packets, stream.frames - discarded)
    if packets == 1:
        raise FootageError(f"{path} holds a single picture ({kind}).", "A speed needs a moving picture: name a clip.")
    if len(stamps) < 2:
        raise FootageError(
            f"{path}: {packets} pictures, of which {len(stamps)} have a time stamp.",
            "Use the MP4 or MOV file that the phone wrote.",
        )
    scan = Scan(
        track=track,
        codec=codec,
        stamps=np.array(sorted(stamps), dtype=np.int64),
        tick_s=tick_s,
        announced=announced,
        declared_s=declared_s,
        pixel_aspect=pixel_aspect,
        tag=tag,
    )
    if kind in _NOMINAL_RATE_ONLY:
        said = (*said, notice("nominal_times", container=kind, rate=scan.rate_hz))
    return scan, said


def _declared_s(stream: VideoStream, container_us: int | None) -> float | None:
    """How long the track should last [s]: its own word, a DURATION tag (h:m:s), else the file's length."""
    if stream.duration is not None and stream.time_base is not None:
        return float(stream.duration * stream.time_base)
    try:
        hours, minutes, seconds = stream.metadata["DURATION"].split(":")
        return 3600 * int(hours) + 60 * int(minutes) + float(seconds)
    except (KeyError, ValueError):
        return container_us / 1e6 if container_us is not None else None


# --- decoding -------------------------------------------------------------------------------------


def _packets(container: InputContainer, stream: VideoStream) -> Iterator[Packet[VideoStream]]:
    """The track's packets up to the end of what can be read."""
    try:
        for packet in container.demux(stream):
            if packet.size or packet.pts is not None:  # the last one is empty: PyAV's sign to flush
                yield packet
    except (av.FFmpegError, OSError):
        return


def decoded(path: Path, track: int, damage: Damage) -> Iterator[av.VideoFrame]:
    """Every picture that the decoder gives out, in showing order; `damage` is told of each fault."""
    with _opened(path) as container:
        stream = next(s for s in container.streams.video if s.index == track)
        stream.thread_type = "AUTO"
        codec = stream.codec_context.name
        length = length_bytes(codec, stream.codec_context.extradata)
        for packet in chain(_packets(container, stream), [None]):  # None: give out what is still held back
            if packet is not None:
                wiped = length > 0 and not packet.is_corrupt and not intact(bytes(packet), codec, length)
                if packet.is_corrupt or wiped:  # corrupt by the container's word: the file ends inside it
                    damage.skipped(wiped=wiped)
                    continue
                damage.sent(packet)
            try:
                yield from stream.decode(packet)
            except av.FFmpegError:
                damage.failed(max(1, stream.thread_count))
