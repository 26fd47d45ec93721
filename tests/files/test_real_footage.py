# Real phone files, not in the repository: each opens upright with its true times. Skips, with the reason, without them.
from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np
import pytest

from vidkin.files.video import Clip, open_clip
from vidkin.stages import Frame

#: file -> (width, height, frames, codec, bits, rotation, slow factor, median rate [Hz], longest interval [ms], said).
#: As seen with PyAV: track headers, tags and packet times; README of the footage agrees where it says anything.
FACTS: dict[str, tuple[int, int, int, str, int, int, float, float, float, list[str]]] = {
    # 5 packets, one of them discarded by the edit list
    "containers/dolbyVision-hdr.MOV": (720, 1280, 4, "hevc", 10, 90, 1, 30.0, 33.33, []),
    # tag 30 at 29.98 stored: real time; a data track comes first
    "containers/h265_with_metadata_track.mp4": (1080, 1920, 3, "hevc", 8, 90, 1, 29.98, 33.36, []),
    "containers/hdr10-video-with-sdr-container.mp4": (1920, 1080, 28, "hevc", 10, 0, 1, 30.03, 99.91, ["uneven_times"]),
    # both tracks are flagged default; the second holds one picture of 2048 x 1536
    "containers/pixel-motion-photo-2-hevc-tracks.mp4": (
        768,
        1024,
        58,
        "hevc",
        8,
        90,
        1,
        29.99,
        108.36,
        ["several_tracks", "uneven_times"],
    ),
    "containers/portrait_4k60.mp4": (2160, 3840, 18, "h264", 8, 90, 1, 60.04, 17.24, []),
    # tag 240, stored 30: 8 times slow; the first frame lasts 325 ms as stored
    "containers/sample_android_slow_motion.mp4": (
        1280,
        720,
        7,
        "h264",
        8,
        0,
        8,
        240.0,
        40.67,
        ["slow_motion", "uneven_times"],
    ),
    "containers/sample_portrait.mp4": (720, 1080, 30, "h264", 8, 0, 1, 29.97, 33.37, []),
    "containers/sample_rotate_and_reflect.mp4": (720, 1080, 30, "h264", 8, 270, 1, 29.97, 33.37, []),
    # 64 packets, one discarded by the edit list; tag 240, stored 30; a record of slow stretches at the end of the file
    "containers/sample_sef_slow_motion.mp4": (320, 240, 63, "h264", 8, 0, 8, 240.0, 4.17, ["slow_motion"]),
    # the record says slow motion, no tag says how slow
    "containers/sample_sef_super_slow_motion.mp4": (
        160,
        120,
        435,
        "h264",
        8,
        0,
        1,
        30.0,
        33.33,
        ["slow_motion_unknown"],
    ),
    "garden_walk_1080p60.mp4": (1920, 1080, 135, "h264", 8, 0, 1, 59.701, 16.75, []),
    "moving_camera/following_walk.mp4": (320, 480, 344, "h264", 8, 0, 1, 29.97, 33.37, []),
    "moving_camera/panning_walk.mp4": (960, 540, 95, "h264", 8, 0, 1, 30.0, 33.33, []),
    "projectile/projectile.mp4": (1080, 1920, 138, "h264", 8, 0, 1, 120.018, 8.332, []),
}


def opened(folder: Path, name: str) -> tuple[Clip, Frame]:
    """The clip and its first frame."""
    path = folder / name
    if not path.is_file():
        pytest.skip(f"no real footage: {path} is not there")
    first: list[Frame] = []
    clip = open_clip(path, visit=lambda frame: first.append(frame) if not first else None)
    return clip, first[0]


@pytest.mark.parametrize("name", FACTS)
def test_it_opens_with_true_times(real_footage: Path, name: str) -> None:
    width, height, count, codec, bits, rotation, slow, rate, longest, notices = FACTS[name]
    clip, frame = opened(real_footage, name)
    footage = clip.footage
    assert (footage.width_px, footage.height_px, footage.t_s.size) == (width, height, count)
    assert (footage.codec, footage.bit_depth, footage.rotation_deg) == (codec, bits, rotation)
    assert footage.slow_factor == slow
    assert footage.frame_rate_hz == pytest.approx(rate, rel=2e-4)
    assert 1000 * np.diff(footage.t_s).max() == pytest.approx(longest, abs=0.01)
    assert [n.code for n in footage.notices] == notices
    assert frame.luma.shape == (height, width)
    assert frame.luma.std() > 10


def _small(frame: Frame) -> np.ndarray:
    return cv2.resize(frame.luma, (72, 108), interpolation=cv2.INTER_AREA).astype(float)


def test_a_turned_and_mirrored_file_shows_the_same_scene(real_footage: Path) -> None:
    upright = _small(opened(real_footage, "containers/sample_portrait.mp4")[1])
    turned = _small(opened(real_footage, "containers/sample_rotate_and_reflect.mp4")[1])
    assert np.corrcoef(upright.ravel(), turned.ravel())[0, 1] > 0.98
    for wrong in (turned[:, ::-1], turned[::-1], turned[::-1, ::-1]):
        assert np.corrcoef(upright.ravel(), wrong.ravel())[0, 1] < 0.8


@pytest.mark.parametrize("name", ["containers/dolbyVision-hdr.MOV", "containers/pixel-motion-photo-2-hevc-tracks.mp4"])
def test_the_sky_is_at_the_top(real_footage: Path, name: str) -> None:
    luma = opened(real_footage, name)[1].luma
    third = luma.shape[0] // 3
    assert luma[:third].mean() > luma[-third:].mean() + 20


def test_the_balls_times_are_those_of_its_digitised_track(real_footage: Path) -> None:
    # README of the footage: t_file = frame / 120.018 + 0.020 s; skip the first 5 rows. Its times have three decimals.
    clip, _ = opened(real_footage, "projectile/projectile.mp4")
    t_file = np.loadtxt(real_footage / "projectile" / "digitised_track.txt", usecols=0, skiprows=2)[5:]
    lag = (t_file - 0.020)[:, None] - clip.footage.t_s
    lag_s = lag[np.arange(t_file.size), np.abs(lag).argmin(axis=1)]
    assert np.abs(lag_s - lag_s.mean()).max() < 1e-3
    assert abs(lag_s.mean()) < 2e-3
