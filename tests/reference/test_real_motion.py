# Real footage, where it is at hand: what must hold whatever the scale, and one flight with real metres.
# Facts and licences: the README beside the footage (open gait-analysis repository, MIT; open biomechanics course,
# CC BY 4.0). READ: the course's digitised track and its scale.
from __future__ import annotations

from pathlib import Path

import cv2
import numpy as np
import pytest

from vidkin.core import optics
from vidkin.core.motion import savitzky_golay
from vidkin.core.pipeline import Scan, analyse
from vidkin.files.video import open_clip
from vidkin.stages import Analysis, Camera, Frame, Lane, Mark, Motion, Rep, Steps, Track

SIZE = (1920, 1080)
#: A plausible camera for the walk: the figure is about 756 px high, say 1.75 m; the walker moves to the left.
FOCAL_PX = 1500.0
DISTANCE_M = FOCAL_PX / (756 / 1.75)


def walk_marks() -> tuple[Mark, ...]:
    """Marks that such a camera would see; the metres are made up, the picture is real."""
    p = np.array([FOCAL_PX, 0, 0, 0, 0.61 + DISTANCE_M, 1.2, -np.pi / 2, 0, 0])
    points = [(x, y, z) for x in (-1.8, -0.6, 0.6, 1.8) for y, z in ((0.61, 0.0), (0.61, 1.5), (-1.0, 0.0))]
    uv = optics.project(p, np.array(points), SIZE)
    seen = np.all((uv > 0) & (uv < np.array(SIZE) - 1), axis=1)
    return tuple(Mark(label=f"{p}", xyz_m=np.array(p), uv_px=c) for p, c, s in zip(points, uv, seen, strict=True) if s)


@pytest.fixture(scope="module")
def walk(real_footage: Path) -> Analysis:
    scan = Scan(Rep(clip="walk", lane=Lane(), marks=walk_marks()))
    clip = open_clip(real_footage / "garden_walk_1080p60.mp4", visit=scan.visit)
    return analyse(scan, clip.footage, clip.frames)


def test_walk_is_tracked_in_every_frame_in_the_right_direction(walk: Analysis) -> None:
    assert isinstance(walk.track, Track), walk.track
    assert walk.track.frame.tolist() == list(range(135))
    assert walk.track.direction == -1


def test_walk_has_the_known_image_speed(walk: Analysis) -> None:
    """About -573 px/s and steady (READ)."""
    assert isinstance(walk.track, Track)
    t, u = walk.track.t_s, walk.track.uv_px[:, 0]
    assert np.polyfit(t, u, 1)[0] == pytest.approx(-573, rel=0.02)
    thirds = np.array_split(np.arange(t.size), 3)
    speeds = [np.polyfit(t[i], u[i], 1)[0] for i in thirds]
    assert np.allclose(speeds, -573, rtol=0.08), speeds


def test_walk_has_the_known_step_rate(walk: Analysis) -> None:
    """About 1.8 steps/s (READ)."""
    assert isinstance(walk.steps, Steps), walk.steps
    assert walk.steps.step_rate_hz == pytest.approx(1.8, abs=0.1)


def test_walk_gives_motion_up_the_lane(walk: Analysis) -> None:
    assert isinstance(walk.motion, Motion), walk.motion
    assert np.all(walk.motion.v_mps > 0)


def ball(frame: Frame, background: np.ndarray) -> np.ndarray | None:
    """Centre (2,) [px] of the ball: the round bright blob of about 32 px; brightness-weighted."""
    more = cv2.blur(frame.luma.astype(np.float32) - background, (3, 3))
    count, labels, stats, _ = cv2.connectedComponentsWithStats((more > 25).astype(np.uint8))
    for k in range(1, count):
        w, h, area = (int(stats[k, i]) for i in (cv2.CC_STAT_WIDTH, cv2.CC_STAT_HEIGHT, cv2.CC_STAT_AREA))
        if 26 <= w <= 38 and 26 <= h <= 38 and area > 0.65 * w * h:
            ys, xs = np.nonzero(labels == k)
            weight = more[ys, xs].astype(float)
            return np.array([np.average(xs, weights=weight), np.average(ys, weights=weight)])
    return None


def test_flight_agrees_with_the_digitised_track(real_footage: Path) -> None:
    """Position within 10 mm rms and horizontal velocity within 3 % of a hand-digitised flight (READ).

    t_file = frame/120.018 + 0.020 s; x_m = 0.001718 u - 0.571; the file's first five rows are skipped. The scale is
    that of reference dots 0.80 m apart at (330.5, 495) and (797.5, 495) px.
    """
    frames: list[Frame] = []
    clip = open_clip(real_footage / "projectile" / "projectile.mp4", visit=frames.append)
    background = np.median([f.luma for f in frames[::6]], axis=0).astype(np.float32)
    found = [(f.t_s, c) for f in frames if (c := ball(f, background)) is not None]
    t = np.array([s for s, _ in found]) + 0.020
    uv = np.array([c for _, c in found])
    # A camera square to the flight's plane: 1/0.001718 px/m at any distance; x and z of its axis follow from u0, v0.
    size = (clip.footage.width_px, clip.footage.height_px)
    px_per_m, focal = 1 / 0.001718, 1500.0
    u0 = optics.centre_px(size)[0]
    p = np.array([focal, 0, 0, 0.001718 * u0 - 0.571, -focal / px_per_m, 0.0, np.pi / 2, 0, 0])
    camera = Camera(width_px=size[0], height_px=size[1], parameters=p, cov=np.eye(9) * 1e-12)
    points = optics.to_plane(camera.parameters, uv, size, axis=1, value_m=0.0)

    table = np.loadtxt(real_footage / "projectile" / "digitised_track.txt", skiprows=2)[5:]
    inside = (table[:, 0] > t[0]) & (table[:, 0] < t[-1])
    table = table[inside]
    assert len(table) > 100
    x = np.interp(table[:, 0], t, points[:, 0])
    assert np.sqrt(np.mean((x - table[:, 1]) ** 2)) < 0.010
    # Height: the file's zero is its own, so only the shape counts.
    z = np.interp(table[:, 0], t, points[:, 2])
    off = z - table[:, 2]
    assert np.std(off) < 0.010

    window = 0.2
    ours = savitzky_golay(t, window_s=window)
    theirs = savitzky_golay(table[:, 0], window_s=window)
    v_ours = np.interp(table[theirs.inside, 0], t, ours.velocity @ points[:, 0])
    v_theirs = (theirs.velocity @ table[:, 1])[theirs.inside]
    assert np.mean(v_ours) == pytest.approx(np.mean(v_theirs), rel=0.03)
    assert np.sqrt(np.mean((v_ours / v_theirs - 1) ** 2)) < 0.03
