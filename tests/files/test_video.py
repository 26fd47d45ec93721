# Opens clips made on the fly: times, planes, rotation, slow motion, and every way in which a file can be bad.
from __future__ import annotations

import os
from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import av
import numpy as np
import pytest

from vidkin.errors import FootageError, UsageError
from vidkin.files import video
from vidkin.files.video import Clip, open_clip
from vidkin.stages import Frame

MakeClip = Callable[..., Path]


def codes(clip: Clip) -> list[str]:
    return [n.code for n in clip.footage.notices]


def text(clip: Clip, code: str) -> str:
    return next(n.text for n in clip.footage.notices if n.code == code)


# --- times ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("codec", "pix_fmt", "bits"),
    [
        ("libx264", "yuv420p", 8),
        ("libx264", "yuv420p10le", 10),
        ("libx265", "yuv420p", 8),
        ("libx265", "yuv420p10le", 10),
    ],
)
def test_frames_carry_the_containers_uneven_times(
    make_clip: MakeClip, clip_shade: Any, codec: str, pix_fmt: str, bits: int
) -> None:
    steps = np.random.default_rng(3).integers(1200, 1800, 24)
    times = [4500, *(4500 + np.cumsum(steps)).tolist()]
    seen: list[Frame] = []
    clip = open_clip(make_clip(times=times, codec=codec, pix_fmt=pix_fmt), visit=seen.append)
    assert clip.footage.t_s == pytest.approx((np.array(times) - 4500) / 90_000, abs=1e-12)
    assert clip.footage.t_s[0] == 0
    assert (clip.footage.width_px, clip.footage.height_px, clip.footage.bit_depth) == (96, 64, bits)
    assert clip.footage.codec == ("h264" if codec == "libx264" else "hevc")
    assert codes(clip) == []
    assert [f.index for f in seen] == list(range(25))
    assert [f.t_s for f in seen] == clip.footage.t_s.tolist()
    assert [float(f.luma[-8:].mean()) for f in seen] == pytest.approx([clip_shade(i) for i in range(25)], abs=3)


def test_every_pass_is_the_same(make_clip: MakeClip) -> None:
    seen: list[Frame] = []
    clip = open_clip(make_clip(), visit=seen.append)
    for _ in range(2):
        again = list(clip.frames())
        assert [(f.index, f.t_s) for f in again] == [(f.index, f.t_s) for f in seen]
        for a, b in zip(again, seen, strict=True):
            for name in ("luma", "chroma_u", "chroma_v"):
                assert np.array_equal(getattr(a, name), getattr(b, name))


def test_frames_are_never_all_in_memory(make_clip: MakeClip) -> None:
    alive = 0
    most = 0

    class Probe(np.ndarray):  # counts the frames that have not been freed
        def __del__(self) -> None:
            nonlocal alive
            alive -= 1

    def visit(frame: Frame) -> None:
        nonlocal alive, most
        alive += 1
        most = max(most, alive)
        object.__setattr__(frame, "luma", frame.luma.view(Probe))

    clip = open_clip(make_clip(), visit=visit)
    assert clip.footage.t_s.size == 30
    assert most <= 2


def test_a_pass_can_be_left_early(make_clip: MakeClip) -> None:
    clip = open_clip(make_clip())
    passing = clip.frames()
    assert next(passing).index == 0
    passing.close()
    assert sum(1 for _ in clip.frames()) == 30


def test_an_error_in_visit_comes_through(make_clip: MakeClip) -> None:
    def visit(_: Frame) -> None:
        raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        open_clip(make_clip(), visit=visit)


def test_matroska_rounds_times_to_milliseconds(make_clip: MakeClip) -> None:
    clip = open_clip(make_clip("clip.mkv", times=range(0, 60 * 375, 375)))  # 240 per second: 4.17 ms
    assert "coarse_times" in codes(clip)
    assert "1 ms at 4.00 ms between frames: about 0.3 cm" in text(clip, "coarse_times")
    assert codes(open_clip(make_clip("slow.mkv", times=range(0, 30 * 3000, 3000)))) == []


def test_a_gap_is_named(make_clip: MakeClip) -> None:
    times = [1500 * i for i in range(30) if i not in (11, 12)]
    clip = open_clip(make_clip(times=times))
    assert codes(clip) == ["uneven_times"]
    assert "1 of 27 frame intervals are uneven; the longest lasts 50 ms, at 0.167 s (usual: 16.7 ms)" in text(
        clip, "uneven_times"
    )


def test_a_nominal_rate_only_is_said(make_clip: MakeClip) -> None:
    clip = open_clip(make_clip("clip.avi", codec="mjpeg", pix_fmt="yuvj420p", times=range(30), tick=Fraction(1, 60)))
    assert codes(clip) == ["nominal_times"]
    assert "(avi) keeps no time for each frame, only one rate, 60.00" in text(clip, "nominal_times")


def test_a_stream_without_time_stamps_is_refused(make_clip: MakeClip) -> None:
    with pytest.raises(FootageError, match=r"\(h264\) keeps no time stamps; a nominal rate gives no speed"):
        open_clip(make_clip("clip.h264"))


def _stts(data: bytes, mp4_boxes: Any) -> int:
    return int(mp4_boxes(data, (b"moov", b"trak", b"mdia", b"minf", b"stbl", b"stts"))[0][0])


def test_repeated_times_are_left_out(make_clip: MakeClip, mp4_boxes: Any) -> None:
    # stts (ISO/IEC 14496-12 8.6.1.2): counts and durations of samples; a duration of 0 repeats a time stamp.
    path = make_clip(times=[1500 * i + (7 if i == 20 else 0) for i in range(30)], options={"bf": "0"})
    data = bytearray(path.read_bytes())
    at = _stts(bytes(data), mp4_boxes) + 8
    runs = [tuple(int.from_bytes(data[at + 8 * i + k : at + 8 * i + k + 4], "big") for k in (0, 4)) for i in range(4)]
    assert runs[1] == (1, 1507)
    data[at + 12 : at + 16] = (0).to_bytes(4, "big")
    path.write_bytes(data)
    clip = open_clip(path)
    assert clip.footage.t_s.size == 29
    assert "1 of 30 pictures repeat or go back in time" in text(clip, "times_not_rising")
    data[at + 4 : at + 8] = (0).to_bytes(4, "big")  # 19 samples at the same time
    path.write_bytes(data)
    with pytest.raises(FootageError, match="0 carry no time and 20 repeat or go back in time: no speed"):
        open_clip(path)


def test_missing_times_are_left_out_or_refused(make_clip: MakeClip, monkeypatch: pytest.MonkeyPatch) -> None:
    path = make_clip()
    real = video.decoded

    def without(share: int) -> Any:
        def decoded(*args: Any) -> Any:
            for number, picture in enumerate(real(*args)):
                if number % share == 0:
                    picture.pts = None
                yield picture

        return decoded

    monkeypatch.setattr(video, "decoded", without(15))
    clip = open_clip(path)
    assert clip.footage.t_s.size == 28
    assert "2 of 30 pictures carry no time" in text(clip, "times_missing")
    monkeypatch.setattr(video, "decoded", without(3))
    with pytest.raises(FootageError, match="10 carry no time and 0 repeat"):
        open_clip(path)


# --- slow motion ----------------------------------------------------------------------------------


def test_the_phones_tag_puts_slow_motion_back(make_clip: MakeClip) -> None:
    path = make_clip(times=range(0, 30 * 3000, 3000), metadata={"com.android.capture.fps": "240.000000"})
    clip = open_clip(path)
    assert clip.footage.slow_factor == 8
    assert clip.footage.frame_rate_hz == pytest.approx(240)
    assert "filmed at 240 pictures per second (by the phone's tag), stored at 30.00" in text(clip, "slow_motion")
    seen: list[float] = [f.t_s for f in clip.frames()]
    assert seen == clip.footage.t_s.tolist()
    stated = open_clip(path, capture_fps=120.0)
    assert stated.footage.slow_factor == pytest.approx(4)
    assert "120 pictures per second (as stated)" in text(stated, "slow_motion")
    assert open_clip(path, capture_fps=30.2).footage.slow_factor == 1


def test_an_impossible_capture_rate_is_refused(make_clip: MakeClip) -> None:
    path = make_clip()
    with pytest.raises(UsageError, match=r"capture_fps = 50 is below the 60\.00 pictures per second stored"):
        open_clip(path, capture_fps=50)
    for bad in (0.0, -30.0, float("nan"), float("inf")):
        with pytest.raises(UsageError, match="is no capture rate"):
            open_clip(path, capture_fps=bad)


# --- tracks, planes, orientation ------------------------------------------------------------------


def test_the_default_track_is_taken_and_said(make_clip: MakeClip, mp4_boxes: Any) -> None:
    path = make_clip(tracks=(12,))
    clip = open_clip(path)
    assert (clip.footage.width_px, clip.footage.t_s.size) == (96, 30)
    assert "2 video tracks; number 0 (96 x 64 px, 30 pictures) is used" in text(clip, "several_tracks")
    data = bytearray(path.read_bytes())  # tkhd flags, bit 0: track enabled; the default one of a player
    first, second = (start + 3 for start, _ in mp4_boxes(bytes(data), (b"moov", b"trak", b"tkhd")))
    data[second] |= 1
    path.write_bytes(data)
    assert open_clip(path).footage.t_s.size == 30  # both are default: the longer one
    data[first] &= ~1
    path.write_bytes(data)
    clip = open_clip(path)
    assert (clip.footage.width_px, clip.footage.t_s.size) == (128, 12)
    assert "number 1 (128 x 64 px, 12 pictures)" in text(clip, "several_tracks")


def test_sound_does_not_matter(make_clip: MakeClip) -> None:
    assert codes(open_clip(make_clip(audio=True))) == []


@pytest.mark.parametrize(
    ("abcd", "rotation", "mirrored"),
    [
        ((1, 0, 0, 1), 0, False),
        ((0, 1, -1, 0), 90, False),
        ((-1, 0, 0, -1), 180, False),
        ((0, -1, 1, 0), 270, False),
        ((-1, 0, 0, 1), 0, True),
        ((0, -1, -1, 0), 90, True),
        ((1, 0, 0, -1), 180, True),
        ((0, 1, 1, 0), 270, True),
    ],
)
def test_pictures_stand_upright(
    make_clip: MakeClip, set_matrix: Any, abcd: tuple[int, ...], rotation: int, mirrored: bool
) -> None:
    path = make_clip()
    set_matrix(path, abcd)
    clip = open_clip(path)
    assert (clip.footage.rotation_deg, clip.footage.mirrored) == (rotation, mirrored)
    frame = next(clip.frames())
    assert frame.luma.shape == (clip.footage.height_px, clip.footage.width_px)
    assert frame.chroma_u.shape == frame.chroma_v.shape == tuple(n // 2 for n in frame.luma.shape)
    # ISO/IEC 14496-12: a stored point (p, q) is shown at (a p + c q, b p + d q); follow the bright block's centre.
    a, b, c, d = abcd
    stored = np.array([-1.0, -1.0])  # top left, from the picture's centre
    shown = np.array([a * stored[0] + c * stored[1], b * stored[0] + d * stored[1]])
    height, width = frame.luma.shape
    u, v = int((0.5 + 0.35 * shown[0]) * width), int((0.5 + 0.35 * shown[1]) * height)
    assert frame.luma[v, u] == pytest.approx(220, abs=4)
    # and what PyAV itself makes of the angle agrees (it reports counter-clockwise and knows no mirror)
    if not mirrored:
        with av.open(str(path)) as container:
            assert next(container.decode(video=0)).rotation % 360 == -rotation % 360


def test_a_tilted_picture_is_refused(make_clip: MakeClip, set_matrix: Any) -> None:
    path = make_clip()
    set_matrix(path, (0.8, 0.6, -0.6, 0.8))
    with pytest.raises(FootageError, match="turned by an angle that is no multiple of 90"):
        open_clip(path)


@pytest.mark.parametrize(("abcd", "aspect"), [((2, 0, 0, 1), "2.000"), ((0, 1, -0.5, 0), "0.500")])
def test_pixels_that_are_not_square_are_refused(
    make_clip: MakeClip, set_matrix: Any, abcd: tuple[float, ...], aspect: str
) -> None:
    path = make_clip()
    set_matrix(path, abcd)
    with pytest.raises(FootageError, match=f"pixels are {aspect} times as wide as high"):
        open_clip(path)


def test_an_anamorphic_stream_is_refused(make_clip: MakeClip) -> None:
    def draw(_: int) -> av.VideoFrame:
        return av.VideoFrame.from_ndarray(np.full((96, 64), 80, np.uint8), "yuv420p")

    path = make_clip(size=(64, 64), draw=draw, options={"aspect": "4:3"})
    with pytest.raises(FootageError, match=r"pixels are 1\.333 times as wide as high"):
        open_clip(path)


@pytest.mark.parametrize(
    ("name", "codec", "pix_fmt", "chroma"),
    [
        ("a.mp4", "libx264", "yuv422p", (64, 48)),
        ("a.mp4", "libx264", "yuv444p", (64, 96)),
        ("a.mp4", "libx264", "yuvj420p", (32, 48)),
        ("a.mp4", "libx264", "yuv422p10le", (64, 48)),
        ("a.mkv", "rawvideo", "nv12", (32, 48)),
        ("a.mkv", "rawvideo", "nv21", (32, 48)),
        ("a.mkv", "ffv1", "gray", (32, 48)),
        ("a.mkv", "ffv1", "gray10le", (32, 48)),
        ("a.mkv", "ffv1", "yuv420p12le", (32, 48)),
        ("a.mkv", "ffv1", "yuv420p16le", (32, 48)),
        ("a.mkv", "rawvideo", "yuyv422", (64, 96)),
    ],
)
def test_every_sampling_gives_the_same_luma(
    make_clip: MakeClip, clip_picture: Any, name: str, codec: str, pix_fmt: str, chroma: tuple[int, int]
) -> None:
    clip = open_clip(make_clip(name, codec=codec, pix_fmt=pix_fmt, times=range(0, 8 * 3000, 3000)))
    frame = list(clip.frames())[5]
    assert frame.luma.dtype == frame.chroma_u.dtype == np.uint8
    expected = clip_picture(5, (96, 64)).astype(float)
    if pix_fmt.startswith("gray"):  # the maker's converter stretches grey to full range (ITU-R BT.601: 16-235)
        expected = (expected - 16) * 255 / 219
    assert np.abs(frame.luma - expected).mean() < 3
    assert frame.chroma_u.shape == frame.chroma_v.shape == chroma
    wanted = (128, 128) if pix_fmt.startswith("gray") else (90, 170)
    assert (frame.chroma_u.mean(), frame.chroma_v.mean()) == pytest.approx(wanted, abs=4)
    assert clip.full_range == (pix_fmt == "yuvj420p")


def test_a_stream_of_colours_is_turned_into_luma(make_clip: MakeClip) -> None:
    def draw(index: int) -> av.VideoFrame:
        return av.VideoFrame.from_ndarray(np.full((64, 96, 3), 10 * index, np.uint8), "rgb24").reformat(format="bgr0")

    clip = open_clip(make_clip("a.mkv", codec="ffv1", pix_fmt="bgr0", times=range(0, 24000, 3000), draw=draw))
    frame = list(clip.frames())[5]
    assert frame.luma == pytest.approx(np.full((64, 96), 16 + 50 * 219 / 255), abs=1)  # ITU-R BT.601 and BT.709
    assert frame.chroma_u == pytest.approx(np.full((64, 96), 128), abs=1)


def test_deep_samples_are_rounded_not_cut(make_clip: MakeClip) -> None:
    values = np.tile(np.arange(1024, dtype=np.uint16), (4, 1))

    def draw(_: int) -> av.VideoFrame:
        frame = av.VideoFrame(1024, 4, "yuv420p10le")
        for plane, content in zip(frame.planes, (values, values[:2, ::2], values[:2, ::2]), strict=True):
            rows = np.zeros((plane.height, plane.line_size // 2), np.uint16)
            rows[:, : plane.width] = content
            plane.update(rows.tobytes())
        return frame

    clip = open_clip(
        make_clip("a.mkv", codec="ffv1", pix_fmt="yuv420p10le", size=(1024, 4), draw=draw, times=[0, 3000, 6000])
    )
    luma = next(clip.frames()).luma[0]
    assert np.array_equal(luma, np.minimum((np.arange(1024) + 2) // 4, 255))


def test_interlaced_pictures_are_said(make_clip: MakeClip) -> None:
    path = make_clip(size=(96, 96), options={"flags": "+ildct+ilme", "x264-params": "tff=1"})
    assert "interlaced" in codes(open_clip(path))


def test_a_picture_that_changes_size_is_refused(make_clip: MakeClip) -> None:
    a, b = make_clip("a.ts"), make_clip("b.ts", size=(128, 64), times=range(90_000, 135_000, 1500))
    joined = a.with_name("joined.ts")
    joined.write_bytes(a.read_bytes() + b.read_bytes())
    with pytest.raises(FootageError, match="the picture changes size from 96 x 64 to 128 x 64 px at picture"):
        open_clip(joined)


# --- bad files ------------------------------------------------------------------------------------


def test_what_is_no_clip_is_refused(tmp_path: Path) -> None:
    def refused(path: Path, words: str) -> None:
        with pytest.raises(FootageError, match=words) as caught:
            open_clip(path)
        assert caught.value.hint
        assert str(path) in caught.value.message

    refused(tmp_path / "none.mp4", "there is no such file")
    refused(tmp_path, "is a folder, not a clip")
    empty = tmp_path / "empty.mp4"
    empty.touch()
    refused(empty, r"is empty \(0 bytes\)")
    noise = tmp_path / "noise.mp4"
    noise.write_bytes(np.random.default_rng(1).bytes(5000))
    refused(noise, "cannot be opened as a video")
    note = tmp_path / "note.txt"
    note.write_text("a few words\n" * 100)
    refused(note, r"text or playlist file \(tty\)")
    os.mkfifo(tmp_path / "pipe.mp4")
    refused(tmp_path / "pipe.mp4", "is no ordinary file")


def test_sound_alone_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "sound.m4a"
    with av.open(str(path), "w", format="mp4") as out:
        stream = out.add_stream("aac", rate=48_000)
        stream.layout = "mono"
        frame = av.AudioFrame.from_ndarray(np.zeros((1, 4800), np.float32), format="fltp", layout="mono")
        frame.sample_rate = 48_000
        out.mux(stream.encode(frame))
        out.mux(stream.encode(None))
    with pytest.raises(FootageError, match="has no video track; it holds only audio"):
        open_clip(path)


def test_a_cover_picture_is_no_video_track(tmp_path: Path) -> None:
    path = tmp_path / "song.mka"
    with av.open(str(path), "w", format="matroska") as out:
        stream = out.add_stream("aac", rate=48_000)
        stream.layout = "mono"
        out.add_attachment("cover.jpg", "image/jpeg", _jpeg(tmp_path))
        frame = av.AudioFrame.from_ndarray(np.zeros((1, 4800), np.float32), format="fltp", layout="mono")
        frame.sample_rate = 48_000
        out.mux(stream.encode(frame))
        out.mux(stream.encode(None))
    with av.open(str(path)) as container:
        assert len(container.streams.video) == 1  # the cover shows as a video track
    with pytest.raises(FootageError, match="has no video track; it holds only audio"):
        open_clip(path)


def _jpeg(tmp_path: Path) -> bytes:
    with av.open(str(tmp_path / "cover.jpg"), "w", format="image2") as out:
        stream = out.add_stream("mjpeg", rate=1)
        stream.width, stream.height, stream.pix_fmt = 64, 48, "yuvj420p"
        frame = av.VideoFrame(64, 48, "yuvj420p")
        out.mux(stream.encode(frame))
        out.mux(stream.encode(None))
    return (tmp_path / "cover.jpg").read_bytes()


def test_a_still_picture_is_refused(tmp_path: Path, make_clip: MakeClip) -> None:
    _jpeg(tmp_path)
    with pytest.raises(FootageError, match=r"holds a single picture \((image2|jpeg_pipe)\)"):
        open_clip(tmp_path / "cover.jpg")
    with pytest.raises(FootageError, match=r"holds a single picture \(mov"):
        open_clip(make_clip(times=[0]))


def test_a_file_that_may_not_be_read(make_clip: MakeClip, monkeypatch: pytest.MonkeyPatch) -> None:
    path = make_clip()

    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(av, "open", refuse)
    with pytest.raises(FootageError, match="cannot be read: Permission denied"):
        open_clip(path)


def test_odd_metadata_does_not_matter(make_clip: MakeClip) -> None:
    path = make_clip(metadata={"title": "QQQQ"})
    data = path.read_bytes()
    assert b"QQQQ" in data
    path.write_bytes(data.replace(b"QQQQ", b"\xe9\xe9\xff\xe9"))
    assert codes(open_clip(path)) == []


def test_a_name_that_looks_like_an_address(make_clip: MakeClip) -> None:
    path = make_clip()
    odd = path.with_name("concat:a|b %d.mp4")
    path.rename(odd)
    assert open_clip(odd).footage.t_s.size == 30


@pytest.mark.parametrize("codec", ["libx264", "libx265"])
def test_a_truncated_clip_keeps_what_decodes(make_clip: MakeClip, codec: str) -> None:
    whole_path = make_clip("whole.mp4", codec=codec)
    whole = [f.luma for f in open_clip(whole_path).frames()]
    data = whole_path.read_bytes()
    cut_path = whole_path.with_name("cut.mp4")
    outcomes = set()
    for cut in np.linspace(200, len(data) - 1, 24).astype(int):
        cut_path.write_bytes(data[:cut])
        try:
            clip = open_clip(cut_path)
        except FootageError:
            outcomes.add("refused")
            continue
        n = clip.footage.t_s.size
        assert 15 <= n < 30
        assert f"{30 - n} of 30 pictures are missing or damaged" in text(clip, "frames_lost")
        for frame in clip.frames():
            assert np.array_equal(frame.luma, whole[round(frame.t_s * 60)])
        outcomes.add("kept")
    assert outcomes == {"kept", "refused"}


def test_a_clip_without_its_index_is_refused(make_clip: MakeClip) -> None:
    path = make_clip(container_options={"movflags": "use_metadata_tags"})
    data = path.read_bytes()
    path.write_bytes(data[: data.rindex(b"moov") - 4])
    with pytest.raises(FootageError, match="cannot be opened as a video"):
        open_clip(path)


def test_a_matroska_file_cut_short_says_so(make_clip: MakeClip) -> None:
    path = make_clip("clip.mkv", times=range(0, 90 * 1500, 1500))
    data = path.read_bytes()
    assert b"DURATION" in data
    for whole in (data, data.replace(b"DURATION", b"DURATIOX")):  # the track's own word, or else the file's
        path.write_bytes(whole)
        assert "ended_early" not in codes(open_clip(path))
        path.write_bytes(whole[: int(0.7 * len(data))])
        assert "announces 1.50 s but its pictures end at" in text(open_clip(path), "ended_early")


@pytest.mark.parametrize("codec", ["libx264", "libx265"])
def test_damage_is_left_out_up_to_the_next_key_frame(make_clip: MakeClip, codec: str) -> None:
    rng = np.random.default_rng(8)
    texture = rng.integers(40, 200, (64, 400), dtype=np.uint8)

    def draw(index: int) -> av.VideoFrame:
        y = texture[:, 4 * index : 4 * index + 96]
        return av.VideoFrame.from_ndarray(np.repeat(y[..., None], 3, axis=2).copy(), "rgb24").reformat(format="yuv420p")

    path = make_clip(times=range(0, 60 * 1500, 1500), draw=draw, gop=10, codec=codec)
    whole = [f.luma.astype(int) for f in open_clip(path).frames()]
    data = path.read_bytes()
    start = data.index(b"mdat")
    lost, refused = [], 0
    for _ in range(15):
        bad = bytearray(data)
        at = int(rng.integers(start + 3000, len(data) - 300))
        bad[at : at + 200] = bytes(200)  # a block wiped by a failing card; both decoders play over it silently
        path.write_bytes(bad)
        try:
            clip = open_clip(path)
        except FootageError:
            refused += 1
            continue
        lost.append(60 - clip.footage.t_s.size)
        if lost[-1]:
            assert f"{lost[-1]} of 60 pictures are missing or damaged" in text(clip, "frames_lost")
        worst = max(float(np.abs(f.luma - whole[clip.stamps[f.index] // 1500]).mean()) for f in clip.frames())
        assert worst < 1, "a damaged picture was handed out"
    assert refused == 0
    assert 1 <= np.mean(lost) <= 15


def test_nothing_decodable_is_refused(make_clip: MakeClip) -> None:
    path = make_clip()
    data = bytearray(path.read_bytes())
    at = data.index(b"mdat") + 4
    data[at:] = bytes(len(data) - at)
    path.write_bytes(data)
    with pytest.raises(FootageError, match=r"none of its 30 pictures could be decoded \(codec h264\)"):
        open_clip(path)


def test_an_unknown_codec_is_refused(make_clip: MakeClip) -> None:
    path = make_clip()
    path.write_bytes(path.read_bytes().replace(b"avc1", b"zzzz").replace(b"avcC", b"zzzC"))
    with pytest.raises(FootageError, match="no decoder for its video is known"):
        open_clip(path)


def test_mostly_damaged_is_refused(make_clip: MakeClip) -> None:
    path = make_clip(gop=6)
    data = bytearray(path.read_bytes())
    start = data.index(b"mdat") + 4
    at = start + (len(data) - start) // 2
    data[at:] = bytes(len(data) - at)
    path.write_bytes(data)
    with pytest.raises(FootageError, match=r"\d+ of its 30 pictures are missing or damaged"):
        open_clip(path)


def test_a_codec_without_times_at_all(make_clip: MakeClip, monkeypatch: pytest.MonkeyPatch) -> None:
    path = make_clip()
    from vidkin.files import container

    real = container._packets

    def without(*args: Any) -> Any:
        for packet in real(*args):
            packet.pts = None
            yield packet

    monkeypatch.setattr(container, "_packets", without)
    with pytest.raises(FootageError, match="30 pictures, of which 0 have a time stamp"):
        open_clip(path)


def test_a_clip_that_changes_between_passes(make_clip: MakeClip) -> None:
    path = make_clip()
    clip = open_clip(path)
    make_clip(times=range(0, 10 * 1500, 1500))
    with pytest.raises(FootageError, match="only 10 of 30 frames could be read the second time"):
        list(clip.frames())
