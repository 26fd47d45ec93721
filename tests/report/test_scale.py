"""The lane and its metre scale are drawn through the full camera model."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import cv2
import numpy as np
import pytest

from vidkin.core import optics
from vidkin.report.scale import draw_lane, draw_numbers, lane_drawing, number_boxes
from vidkin.stages import Camera, Lane


def by_opencv(camera: Camera, points_m: np.ndarray) -> np.ndarray:
    """The same projection by OpenCV's pinhole model with k1, k2."""
    p = camera.parameters
    rotation = optics.rotation(*p[6:9])
    centre = optics.centre_px((camera.width_px, camera.height_px))
    matrix = np.array([[p[0], 0, centre[0]], [0, p[0], centre[1]], [0, 0, 1]])
    shift = -rotation @ p[3:6]
    turned = cv2.Rodrigues(rotation)[0]
    return cv2.projectPoints(points_m, turned, shift, matrix, np.array([p[1], p[2], 0, 0]))[0].reshape(-1, 2)


def test_numbers_stand_where_opencv_projects_them(camera_of: Callable[..., Camera], lane: Lane) -> None:
    """Reference library: cv2.projectPoints."""
    camera = camera_of()
    drawing = lane_drawing(camera, lane)
    said = dict(drawing.numbers)
    assert list(said) == ["0 m", "5 m", "10 m", "15 m"]
    feet = by_opencv(camera, np.array([[float(t.split()[0]), 0.0, -0.2] for t in said]))
    assert np.allclose(np.array(list(said.values())), feet, atol=1e-6)


def test_lines_bend_with_the_lens(camera_of: Callable[..., Camera], lane: Lane) -> None:
    camera = camera_of()
    curve = max((c for c in lane_drawing(camera, lane).curves if c.kind == "line"), key=lambda c: len(c.uv_px)).uv_px
    chord = curve[0] + (curve[-1] - curve[0]) * np.linspace(0, 1, len(curve))[:, None]
    off = np.abs(curve[:, 1] - np.interp(curve[:, 0], chord[:, 0], chord[:, 1])).max()
    assert off > 2.0


def test_beyond_the_marks_is_told_apart(camera_of: Callable[..., Camera], lane: Lane) -> None:
    drawing = lane_drawing(camera_of(), lane)
    edge = optics.project(camera_of().parameters, np.array([[18.0, 0.61, 0.0]]), (1920, 1080))[0, 0]
    centre = [c for c in drawing.curves if c.kind == "centre"]
    assert {c.beyond for c in centre} == {True, False}
    for curve in centre:
        middle = curve.uv_px[:, 0].mean()
        assert curve.beyond == (middle > edge or middle < 70)


def test_every_metre_has_a_tick(camera_of: Callable[..., Camera], lane: Lane) -> None:
    drawing = lane_drawing(camera_of(), lane)
    assert drawing.stretch_m is not None
    first, last = drawing.stretch_m
    whole = int(np.floor(last) - np.ceil(first)) + 1
    ticks = [c for c in drawing.curves if c.kind in ("metre", "five") and len(c.uv_px) == 5]
    assert len(ticks) == whole


def test_the_scale_hangs_below_the_line_nearer_the_camera(camera_of: Callable[..., Camera], lane: Lane) -> None:
    camera = camera_of()
    p = camera.parameters.copy()
    p[4], p[6] = 1.22 - p[4], -p[6]
    other = replace(camera, parameters=p, marks=(), used=np.zeros(0, bool), mark_uv_px=np.zeros((0, 2)),
                   mark_error_px=np.zeros((0, 2)),
                    mark_error_m=np.zeros(0))  # fmt: skip
    feet = dict(lane_drawing(other, lane).numbers)
    expected = by_opencv(other, np.array([[10.0, 1.22, -0.2]]))[0]
    assert np.allclose(feet["10 m"], expected, atol=1e-6)


@pytest.mark.parametrize("pitch", [1.0, -1.5])
def test_no_ground_in_the_picture(camera_of: Callable[..., Camera], lane: Lane, pitch: float) -> None:
    p = camera_of().parameters.copy()
    p[7] = pitch
    drawing = lane_drawing(replace(camera_of(), parameters=p), lane)
    assert drawing.stretch_m is None
    assert drawing.curves == ()


def test_zoom_moves_pixel_centres_rightly(camera_of: Callable[..., Camera], lane: Lane) -> None:
    camera = camera_of()
    drawing = lane_drawing(camera, lane)
    half = np.zeros((540, 960, 3), np.uint8)
    draw_lane(half, drawing, zoom=0.5)
    curve = next(c for c in drawing.curves if c.kind == "line" and not c.beyond)
    u, v = (curve.uv_px[len(curve.uv_px) // 2] + 0.5) * 0.5 - 0.5
    assert half[round(v), round(u)].max() > 150


def test_numbers_are_moved_off_what_they_must_keep_off(camera_of: Callable[..., Camera], lane: Lane) -> None:
    drawing = lane_drawing(camera_of(), lane)
    free = dict(number_boxes(drawing, (1920, 1080)))
    box = free["10 m"]
    moved = dict(number_boxes(drawing, (1920, 1080), keep_off_px=[box]))["10 m"]
    assert moved[1] >= box[3]
    picture = np.zeros((1080, 1920, 3), np.uint8)
    draw_numbers(picture, [("10 m", moved)])
    rows = np.flatnonzero(picture.any(axis=(1, 2)))
    assert rows.min() > box[3] - 6
