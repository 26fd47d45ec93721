# Makes small clips on the fly and finds the real footage, which is not part of the repository.
from __future__ import annotations

import struct
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from fractions import Fraction
from pathlib import Path
from typing import Any

import av
import numpy as np
import pytest

from vidkin import notices as notices_module
from vidkin.notices import Entry, Failure, notice
from vidkin.stages import (
    Analysis,
    Athlete,
    Camera,
    Curves,
    Fit,
    Footage,
    LawFit,
    Mark,
    Motion,
    Quantity,
    Rep,
    Settings,
    Split,
    Steps,
)


def shade(index: int) -> int:
    """Luma of the block that tells a test picture's number."""
    return 40 + 6 * (index % 30)


def picture(index: int, size: tuple[int, int]) -> np.ndarray:
    """Luma (H, W): dark, bright block at the TOP LEFT, mid-grey block at the top right, number at the bottom."""
    width, height = size
    y = np.full((height, width), 30, dtype=np.uint8)
    y[: height // 3, : width // 3] = 220
    y[: height // 3, -(width // 3) :] = 120
    y[-(height // 3) :] = shade(index)
    return y


def _frame(index: int, size: tuple[int, int], pix_fmt: str) -> av.VideoFrame:
    y = picture(index, size)
    wide = np.concatenate([y.ravel(), np.full(y.size // 4, 90, np.uint8), np.full(y.size // 4, 170, np.uint8)])
    frame = av.VideoFrame.from_ndarray(wide.reshape(size[1] * 3 // 2, size[0]), "yuv420p")
    if pix_fmt in ("yuv420p", "yuvj420p"):
        made = av.VideoFrame(*size, pix_fmt)
        for plane, source in zip(made.planes, frame.planes, strict=True):
            rows = np.frombuffer(source, np.uint8).reshape(source.height, source.line_size)[:, : source.width]
            out = np.zeros((plane.height, plane.line_size), np.uint8)
            out[:, : plane.width] = rows
            plane.update(out.tobytes())
        return made
    return frame.reformat(format=pix_fmt)


@pytest.fixture
def make_clip(tmp_path: Path) -> Callable[..., Path]:
    """Writes a clip: `times` in ticks of `tick`; `tracks` are (size, default) pairs; `audio` adds a sound track."""

    def make(
        name: str = "clip.mp4",
        *,
        times: Sequence[int] = tuple(range(0, 30 * 1500, 1500)),
        tick: Fraction = Fraction(1, 90_000),
        codec: str = "libx264",
        pix_fmt: str = "yuv420p",
        size: tuple[int, int] = (96, 64),
        gop: int = 10,
        metadata: dict[str, str] | None = None,
        tracks: Sequence[int] = (),
        audio: bool = False,
        draw: Callable[[int], av.VideoFrame] | None = None,
        options: dict[str, str] | None = None,
        container_options: dict[str, str] | None = None,
    ) -> Path:
        path = tmp_path / name
        movflags = {"movflags": "+faststart+use_metadata_tags"} if path.suffix in (".mp4", ".mov") else {}
        with av.open(str(path), "w", options=movflags | (container_options or {})) as out:
            out.metadata.update(metadata or {})
            every = [times, *(tuple(range(0, n * 1500, 1500)) for n in tracks)]
            streams = []
            for number, _ in enumerate(every):
                extra = {"g": str(gop)}
                if codec == "libx265":
                    extra = {"x265-params": f"log-level=none:keyint={gop}:pools=1"}
                stream = out.add_stream(codec, rate=60, options=extra | (options or {}))
                stream.width, stream.height = size if number == 0 else (size[0] + 32 * number, size[1])
                stream.pix_fmt = pix_fmt
                stream.codec_context.time_base = tick
                streams.append(stream)
            sound = out.add_stream("aac", rate=48_000, layout="mono") if audio else None
            for stream, stamps in zip(streams, every, strict=True):
                for i, stamp in enumerate(stamps):
                    frame = draw(i) if draw else _frame(i, (stream.width, stream.height), pix_fmt)
                    frame.pts, frame.time_base = stamp, tick
                    out.mux(stream.encode(frame))
                out.mux(stream.encode(None))
            if sound is not None:
                quiet = av.AudioFrame.from_ndarray(np.zeros((1, 4800), np.float32), format="fltp", layout="mono")
                quiet.sample_rate, quiet.pts = 48_000, 0
                out.mux(sound.encode(quiet))
                out.mux(sound.encode(None))
        return path

    return make


def boxes(data: bytes, path: Sequence[bytes]) -> list[tuple[int, int]]:
    """Start and end of the content of each box at `path` (for example moov, trak, tkhd) of an MP4 file."""
    spans = [(0, len(data))]
    for kind in path:
        found: list[tuple[int, int]] = []
        for start, end in spans:
            at = start
            while at + 8 <= end:
                length, name = struct.unpack(">I4s", data[at : at + 8])
                head = 16 if length == 1 else 8
                length = struct.unpack(">Q", data[at + 8 : at + 16])[0] if length == 1 else length or end - at
                if name == kind:
                    found.append((at + head, at + length))
                at += max(length, 8)
        spans = found
    return spans


@pytest.fixture
def mp4_boxes() -> Callable[..., list[tuple[int, int]]]:
    return boxes


@pytest.fixture
def set_matrix() -> Callable[[Path, Sequence[float]], None]:
    """Patches a, b, c, d of the first track's header (ISO/IEC 14496-12, tkhd version 0: matrix at byte 40)."""

    def patch(path: Path, abcd: Sequence[float]) -> None:
        data = bytearray(path.read_bytes())
        start, _ = boxes(bytes(data), (b"moov", b"trak", b"tkhd"))[0]
        assert data[start] == 0, "tkhd version 0 expected"
        a, b, c, d = (round(n * 65536) for n in abcd)
        data[start + 40 : start + 76] = struct.pack(">9i", a, b, 0, c, d, 0, 0, 0, 1 << 30)
        path.write_bytes(data)

    return patch


@pytest.fixture
def clip_picture() -> Any:
    return picture


@pytest.fixture
def clip_shade() -> Any:
    return shade


@pytest.fixture
def analysis(monkeypatch: pytest.MonkeyPatch) -> Analysis:
    """An analysis in which all stages answered, with odd but legal values."""
    monkeypatch.setitem(notices_module.REGISTRY, "made_up", Entry("motion", "info", "Said {n}.", 'Ünïcode, "quoted".'))
    n = 7
    t = 1 / 3 + np.arange(n) / 59.94
    line = np.linspace(1.0, 2.0, n)
    marks = tuple(
        Mark(label=f"mark {i}", xyz_m=np.array([i, 0.5, 0.0]), uv_px=np.array([100.0 * i, 7.0])) for i in range(2)
    )
    camera = Camera(
        width_px=1920,
        height_px=1080,
        parameters=np.arange(1.0, 10.0),
        cov=np.diag(np.arange(1.0, 10.0) ** 2),
        marks=marks,
        mark_uv_px=np.ones((2, 2)),
        mark_error_px=np.zeros((2, 2)),
        mark_error_m=np.array([0.01, 0.02]),
        x_sd_m=np.array([[0.0, 0.01], [10.0, 0.02]]),
        scale_sd=0.001,
    )
    motion = Motion(
        t_s=t,
        x_m=line * np.pi,
        z_m=line,
        x_sd_m=0.01 * line,
        shared_m=np.zeros((n, 1)),
        shared_names=("pose",),
        smooth_x_m=line,
        v_mps=8 * line,
        a_mps2=-line,
        v_sd_mps=0.1 * line,
        a_sd_mps2=line,
        inside=np.ones(n, bool),
        window_s=0.5,
        step_rate_hz=4.2,
        notices=(notice("made_up", n=3),),
    )
    steps = Steps(
        on_s=np.array([0.4, 0.6]),
        off_s=np.array([0.5, 0.7]),
        x_m=np.array([1.0, 3.1]),
        step_rate_hz=4.2,
        step_rate_sd_hz=0.1,
        lateral_m=0.6,
        lateral_sd_m=0.05,
        lateral_source="feet",
    )
    law = LawFit(
        name="mono",
        words="speed rises exponentially",
        parameters={"v_max": 9.5, "tau": 1.2},
        sd={"v_max": 0.1, "tau": float("inf")},
        criterion=-12.5,
        weight=0.8,
        t_s=t,
        x_m=line,
        v_mps=line,
        a_mps2=line,
        residual_m=np.zeros(n),
    )
    curves = Curves(
        t_s=t,
        x_m=line,
        v_mps=line,
        v_low_mps=line,
        v_high_mps=line,
        a_mps2=line,
        force_n_kg=line,
        power_w_kg=line,
        drag_n=np.zeros(0),
    )
    fit = Fit(
        start="standing",
        law="mono",
        laws={"mono": law},
        curves=curves,
        quantities={
            "top_speed": Quantity(name="top_speed", value=9.12, low=9.05, high=9.19, unit="m/s", method="profile"),
            "k_drag": Quantity(
                name="k_drag",
                value=0.003,
                low=None,
                high=None,
                unit="1/m",
                method="given",
                why_no_interval="not fitted",
            ),
        },
        splits=(
            Split(distance_m=5.0, time_s=1.4, low_s=1.38, high_s=1.42),
            Split(distance_m=10.0, time_s=2.1, low_s=2.0, high_s=2.2),
        ),
        refused=(Failure(stage="fit", code="no_drag", reason="too short", hint="film more"),),
    )
    return Analysis(
        rep=Rep(clip="a.mp4", athlete=Athlete(label="A")),
        settings=Settings(level=0.9),
        footage=Footage(name="a.mp4", width_px=1920, height_px=1080, t_s=t),
        camera=camera,
        steps=steps,
        motion=motion,
        fit=fit,
        provenance={
            "vidkin": "0.1.0",
            "inputs": {"a.mp4": "00ff"},
            "numbers": np.array([1.5, 2.5]),
            "count": np.int64(3),
            "python-version": "3.11",
            "path": Path("a"),
            "nothing": None,
            "when": datetime(2030, 5, 4, 3, 2, 1, tzinfo=UTC),
        },
    )
