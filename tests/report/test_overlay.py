"""The marker overlay: what is drawn lies where the camera says, and the strip says what it must."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from vidkin.report import overlay
from vidkin.report.canvas import CLICKED, ERROR, MODEL
from vidkin.stages import Camera, Lane

SIZES = [(1280, 720), (1920, 1080), (3840, 2160)]


def blank(camera: Camera, level: int = 90) -> np.ndarray:
    return np.full((camera.height_px, camera.width_px, 3), level, np.uint8)


def near(picture: np.ndarray, uv: np.ndarray, colour: tuple[int, int, int], reach: int = 2) -> bool:
    """Whether `colour` is found within `reach` px of a place."""
    u, v = round(float(uv[0])), round(float(uv[1]))
    area = picture[max(0, v - reach) : v + reach + 1, max(0, u - reach) : u + reach + 1].astype(int)
    return bool(np.any(np.abs(area - colour).max(axis=-1) <= 12))


def texts(monkeypatch: pytest.MonkeyPatch, camera: Camera, lane: Lane) -> list[str]:
    said: list[str] = []
    original = overlay.put_text

    def spy(picture: np.ndarray, text: str, at: tuple[float, float], **how: object) -> None:
        said.append(text)
        original(picture, text, at, **how)  # type: ignore[arg-type]

    monkeypatch.setattr(overlay, "put_text", spy)
    overlay.draw_overlay(camera, lane, blank(camera))
    return said


@pytest.mark.parametrize("size", SIZES)
def test_each_mark_is_drawn_at_its_pixel(camera_of: Callable[..., Camera], lane: Lane, size: tuple[int, int]) -> None:
    camera = camera_of(size)
    picture = overlay.draw_overlay(camera, lane, blank(camera))
    assert picture.shape == (size[1], size[0], 3)
    unit = np.sqrt(size[0] * size[1] / (1920 * 1080))
    factor = overlay.magnification(camera.mark_error_px, unit=float(unit))
    for model, mark, error in zip(camera.mark_uv_px, camera.marks, camera.mark_error_px, strict=True):
        assert near(picture, model, MODEL, reach=1)
        away = -error / np.hypot(*error)
        assert near(picture, mark.uv_px + away * 10 * unit, CLICKED)
        tip = model + factor * error * 0.85
        if np.hypot(*(tip - model)) > 14 * unit:
            assert near(picture, tip, ERROR, reach=3)


def test_the_strip_says_what_was_found(
    monkeypatch: pytest.MonkeyPatch, camera_of: Callable[..., Camera], lane: Lane
) -> None:
    camera = camera_of()
    said = texts(monkeypatch, camera, lane)
    rms = float(np.sqrt(np.mean(np.sum(camera.mark_error_px**2, axis=1))))
    rms_cm = 100 * float(np.sqrt(np.mean(camera.mark_error_m**2)))
    factor = overlay.magnification(camera.mark_error_px)
    for words in (
        "12 marks",
        f"rms {rms:.2f} px = {rms_cm:.2f} cm",
        "focal length 1390 px, field of view 69.3° wide",
        "camera 1.62 m high, 14.00 m from lane centre",
        "position sd along the lane 0.3 to 0.9 cm",
        f"error, drawn {factor} times longer",
        "as clicked",
    ):
        assert words in said
    for k, metres in enumerate(camera.mark_error_m, start=1):
        assert str(k) in said
        assert f"{100 * metres:.1f} cm" in said


def test_large_errors_are_drawn_at_true_size(
    monkeypatch: pytest.MonkeyPatch, camera_of: Callable[..., Camera], lane: Lane
) -> None:
    assert "error, true size" in texts(monkeypatch, camera_of(noise_px=60.0), lane)


def test_a_camera_without_marks(monkeypatch: pytest.MonkeyPatch, camera_of: Callable[..., Camera], lane: Lane) -> None:
    bare = replace(
        camera_of(),
        marks=(),
        used=np.zeros(0, dtype=bool),
        mark_uv_px=np.zeros((0, 2)),
        mark_error_px=np.zeros((0, 2)),
        mark_error_m=np.zeros(0),
        x_sd_m=np.zeros((0, 2)),
    )
    said = texts(monkeypatch, bare, lane)
    assert "no marks" in said
    assert "as clicked" not in said
    assert overlay.rms_px(bare) is None
    assert overlay.rms_m(bare) is None


def test_a_lane_out_of_the_picture_is_said(
    monkeypatch: pytest.MonkeyPatch, camera_of: Callable[..., Camera], lane: Lane
) -> None:
    p = camera_of().parameters.copy()
    p[7] = 1.0
    said = texts(monkeypatch, replace(camera_of(), parameters=p), lane)
    assert "the lane's ground is not in the picture" in said


def test_the_strip_gives_way_to_marks_at_the_top(camera_of: Callable[..., Camera], lane: Lane) -> None:
    camera = camera_of()
    plain = overlay.draw_overlay(camera, lane, blank(camera, 255))
    assert plain[20, 1900].max() < 120
    assert plain[1070, 1900].min() > 200
    lifted = replace(camera, mark_uv_px=camera.mark_uv_px - [0.0, 600.0])
    moved = overlay.draw_overlay(lifted, lane, blank(camera, 255))
    assert moved[1070, 1900].max() < 120


def test_the_frame_is_left_as_it_was(camera_of: Callable[..., Camera], lane: Lane) -> None:
    camera = camera_of()
    frame = blank(camera)
    frame.flags.writeable = False
    overlay.draw_overlay(camera, lane, frame)
    assert np.all(frame == 90)


@pytest.mark.parametrize(("shape", "kind"), [((720, 1280, 3), np.uint8), ((1080, 1920, 3), np.float64)])
def test_a_frame_of_another_size_or_type_is_refused(
    camera_of: Callable[..., Camera], lane: Lane, shape: tuple[int, int, int], kind: type
) -> None:
    with pytest.raises(ValueError, match=r"draw_overlay: frame .* expected \(1080, 1920, 3\) uint8"):
        overlay.draw_overlay(camera_of(), lane, np.zeros(shape, kind))


@given(
    errors=arrays(np.float64, (9, 2), elements=st.floats(-80, 80, allow_subnormal=False)),
    unit=st.sampled_from([0.67, 1.0, 2.0]),
)
@settings(max_examples=60, deadline=None)
def test_magnification_is_from_the_row_and_keeps_arrows_short(errors: np.ndarray, unit: float) -> None:
    factor = overlay.magnification(errors, unit=unit)
    assert factor in (1, 2, 5, 10, 20, 50, 100, 200, 500)
    longest = np.hypot(*errors.T).max()
    assert factor == 1 or factor * longest <= 130 * unit + 1e-9


def test_magnification_of_nothing() -> None:
    assert overlay.magnification(np.zeros((0, 2))) == 1
    assert overlay.magnification(np.zeros((4, 2))) == 1
