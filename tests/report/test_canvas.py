"""Colour conversion against published values and a reference library; strokes and type."""

from __future__ import annotations

import warnings

import av
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vidkin.report import canvas
from vidkin.stages import Frame


@pytest.mark.parametrize(
    ("yuv", "rgb"),
    [
        ((16, 128, 128), (0, 0, 0)),
        ((235, 128, 128), (255, 255, 255)),
        ((63, 102, 240), (255, 0, 0)),
        ((173, 42, 26), (0, 255, 0)),
        ((32, 240, 118), (0, 0, 255)),
    ],
)
def test_full_colour_bars(yuv: tuple[int, int, int], rgb: tuple[int, int, int]) -> None:
    """ITU-R BT.709-6, 8-bit code values of black, white and the 100 % primaries (MEM, value from memory)."""
    y, u, v = (np.full((4, 4), c, np.uint8) for c in yuv)
    got = canvas.yuv_to_rgb(y, u[:2, :2].copy(), v[:2, :2].copy())
    assert np.abs(got.astype(int) - rgb).max() <= 2


def test_against_ffmpeg() -> None:
    """The same planes through FFmpeg's own scaler (PyAV), BT.709 limited range."""
    rng = np.random.default_rng(2)
    h, w = 64, 96
    y = rng.integers(40, 200, (h, w)).astype(np.uint8)
    u, v = (np.full((h // 2, w // 2), c, np.uint8) for c in (100, 150))
    frame = av.VideoFrame.from_ndarray(np.concatenate([p.reshape(-1, w) for p in (y, u, v)]), format="yuv420p")
    theirs = frame.reformat(
        format="rgb24", src_colorspace="ITU709", dst_colorspace="ITU709", src_color_range="MPEG", dst_color_range="JPEG"
    ).to_ndarray()
    ours = canvas.frame_rgb(Frame(index=0, t_s=0.0, luma=y, chroma_u=u, chroma_v=v))
    assert ours.shape == (h, w, 3)
    assert np.abs(ours.astype(int) - theirs).max() <= 3


def test_full_range_keeps_black_and_white() -> None:
    grey = np.full((2, 2), 128, np.uint8)
    for level in (0, 37, 255):
        got = canvas.yuv_to_rgb(np.full((2, 2), level, np.uint8), grey, grey, full_range=True)
        assert np.abs(got.astype(int) - level).max() <= 1


@pytest.mark.parametrize("shape", [(20, 30), (20, 15), (10, 15)])
def test_chroma_of_any_subsampling(shape: tuple[int, int]) -> None:
    luma = np.full((20, 30), 120, np.uint8)
    chroma = np.full(shape, 140, np.uint8)
    got = canvas.yuv_to_rgb(luma, chroma, chroma)
    assert got.shape == (20, 30, 3)
    assert np.ptp(got.reshape(-1, 3), axis=0).max() == 0


def test_stroke_has_its_colour_inside_and_casing_beside() -> None:
    picture = np.full((40, 60, 3), 255, np.uint8)
    canvas.stroke(picture, np.array([[5.0, 20.0], [55.0, 20.0]]), (10, 200, 30), width=4, casing=4)
    assert tuple(picture[20, 30]) == (10, 200, 30)
    assert tuple(picture[25, 30]) == canvas.INK
    assert tuple(picture[32, 30]) == (255, 255, 255)


def test_stroke_leaves_out_points_that_are_far_or_not_finite() -> None:
    picture = np.zeros((20, 20, 3), np.uint8)
    canvas.stroke(picture, np.array([[np.nan, 1.0], [1e9, 2.0], [3.0, 3.0]]), (255, 255, 255), width=2)
    assert not picture.any()


def test_arrow_points_where_it_should() -> None:
    picture = np.zeros((60, 100, 3), np.uint8)
    canvas.arrow(picture, (np.array([10.0, 30.0]), np.array([80.0, 30.0])), (255, 0, 0), width=3, casing=0)
    columns = np.flatnonzero((picture[..., 0] > 128).any(axis=0))
    assert columns.min() <= 11
    assert abs(columns.max() - 80) <= 1
    high = (picture[..., 0] > 128).sum(axis=0)
    assert high[70] > high[30]


def test_an_arrow_of_no_length_draws_nothing() -> None:
    picture = np.zeros((20, 20, 3), np.uint8)
    canvas.arrow(picture, (np.array([5.0, 5.0]), np.array([5.2, 5.0])), (255, 0, 0), width=3, casing=1)
    assert not picture.any()


@given(
    on=st.floats(1.0, 30.0),
    off=st.floats(0.5, 30.0),
    length=st.floats(1.0, 400.0),
)
@settings(max_examples=40, deadline=None)
def test_dashes_cover_their_share(on: float, off: float, length: float) -> None:
    line = np.array([[0.0, 0.0], [length / 3, 0.0], [length, 0.0]])
    pieces = canvas.dashes(line, on_px=on, off_px=off)
    drawn = sum(float(p[-1, 0] - p[0, 0]) for p in pieces)
    periods = np.ceil(length / (on + off))
    assert drawn <= min(length, periods * on) + 1e-6
    assert drawn >= min(length, (periods - 1) * on) - 1e-6


def test_type_is_set_where_it_is_asked_for_and_scales() -> None:
    small, large = (canvas.text_width("12.3 m/s", size) for size in (20.0, 40.0))
    assert large == pytest.approx(2 * small, rel=1e-6)
    picture = np.zeros((80, 300, 3), np.uint8)
    canvas.put_text(picture, "12.3 m/s", (30, 60), size_px=40.0, colour=(200, 100, 50))
    rows, columns = np.nonzero(picture[..., 0] > 60)
    assert abs(columns.min() - 30) <= 6
    assert abs(columns.max() - (30 + large)) <= 6
    assert abs(rows.max() - 60) <= 3
    assert tuple(picture[picture[..., 0].argmax() // 300, picture[..., 0].argmax() % 300]) == (200, 100, 50)


def test_type_may_hang_over_the_edge() -> None:
    picture = np.zeros((10, 30, 3), np.uint8)
    canvas.put_text(picture, "wide text", (-20, 8), size_px=18.0, casing=2)
    assert picture.any()
    canvas.put_text(picture, "far away", (500, 500), size_px=18.0)


def test_letters_the_font_lacks_raise_no_warning() -> None:
    picture = np.zeros((40, 200, 3), np.uint8)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        canvas.put_text(picture, "走る é ß", (5, 30), size_px=20.0)
    assert picture.any()


def test_panel_darkens_only_its_box() -> None:
    picture = np.full((50, 50, 3), 255, np.uint8)
    canvas.panel(picture, (10, 10, 30, 30))
    assert picture[20, 20].max() < 100
    assert picture[40, 40].min() == 255
    canvas.panel(picture, (60, 60, 80, 80))
