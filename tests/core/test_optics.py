"""Pixel and world: round trips, symmetries, derivatives, and the edges of the lens model."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vidkin.core import optics
from vidkin.stages import CAMERA_PARAMETERS

FIXED = settings(derandomize=True, deadline=None, max_examples=40)
SIZE = (1920, 1080)
ANGLE = st.floats(-3.1, 3.1)

#: A grid of pixels that reaches every corner.
PIXELS = np.array([(u, v) for u in (0.0, 480.0, 959.5, 1500.0, 1919.0) for v in (0.0, 300.0, 539.5, 1079.0)])


@st.composite
def cameras(draw):
    """A phone anywhere around a lane: both sides, tilted, with mild barrel or pincushion distortion."""
    side = draw(st.sampled_from([-1, 1]))
    return np.array(
        [
            draw(st.floats(900, 2500)),
            draw(st.floats(-0.12, 0.1, allow_subnormal=False)),
            draw(st.floats(-0.02, 0.05, allow_subnormal=False)),
            draw(st.floats(-30, 60)),
            0.61 - side * draw(st.floats(5, 30)),
            draw(st.floats(0.5, 6)),
            side * np.pi / 2 + draw(st.floats(-0.4, 0.4)),
            draw(st.floats(-0.3, 0.1)),
            draw(st.floats(-0.1, 0.1)),
        ]
    )


def ahead(p, depth_m, count=30, seed=0):
    """World points (count, 3) in the camera's view at depths around `depth_m`."""
    rng = np.random.default_rng(seed)
    half = np.array([SIZE[0], SIZE[1]]) / (2 * p[0])
    tangents = rng.uniform(-0.9, 0.9, (count, 2)) * half
    depth = depth_m * rng.uniform(0.7, 1.5, count)
    seen = np.column_stack([tangents * depth[:, None], depth])
    return seen @ optics.rotation(*p[6:9]) + p[3:6]


# --- rotations ----------------------------------------------------------------------------------


@FIXED
@given(ANGLE, st.floats(-1.5, 1.5), ANGLE)
def test_angles_undo_rotation(yaw, pitch, roll):
    matrix = optics.rotation(yaw, pitch, roll)
    assert matrix @ matrix.T == pytest.approx(np.eye(3), abs=1e-12)
    assert np.linalg.det(matrix) == pytest.approx(1.0)
    assert optics.rotation(*optics.angles(matrix)) == pytest.approx(matrix, abs=1e-9)
    assert optics.angles(matrix) == pytest.approx([yaw, pitch, roll], abs=1e-7)


def test_rotation_has_the_stated_meaning():
    """Yaw 0 looks along +x and pi/2 along +y, pitch is up, roll is clockwise as the photographer sees it."""
    right, down, forward = optics.rotation(np.pi / 2, 0.0, 0.0)
    assert forward == pytest.approx([0, 1, 0])
    assert right == pytest.approx([1, 0, 0])
    assert down == pytest.approx([0, 0, -1])
    assert optics.rotation(0.0, 0.0, 0.0)[2] == pytest.approx([1, 0, 0])
    assert optics.rotation(0.3, 0.2, 0.0)[2][2] == pytest.approx(np.sin(0.2))
    # A phone turned clockwise has its right edge lower, and what is straight up moves to the left of the picture.
    assert optics.rotation(np.pi / 2, 0.0, 0.1)[0][2] < 0
    p = np.array([1400.0, 0, 0, 0, 0, 1.5, np.pi / 2, 0.0, 0.1])
    assert optics.project(p, np.array([[0.0, 10.0, 3.0]]), SIZE)[0, 0] < optics.centre_px(SIZE)[0]


# --- projection ---------------------------------------------------------------------------------


def test_the_axis_meets_the_middle_of_the_picture():
    """Centres of pixels are whole numbers, so the middle of 1920 columns is column 959.5."""
    p = np.array([1400.0, -0.1, 0.02, 3.0, -12.0, 1.5, np.pi / 2, 0.0, 0.0])
    assert optics.project(p, np.array([[3.0, 5.0, 1.5]]), SIZE)[0] == pytest.approx([959.5, 539.5])
    right, up = optics.project(p, np.array([[3.5, -2.0, 1.5], [3.0, -2.0, 2.0]]), SIZE)
    assert right[0] > 959.5
    assert right[1] == pytest.approx(539.5)
    assert up[1] < 539.5
    assert up[0] == pytest.approx(959.5)
    # 10 m away, half a metre off: r = 0.05, g = 1 - 0.1 r^2 + 0.02 r^4.
    assert right[0] - 959.5 == pytest.approx(1400 * 0.05 * (1 - 0.1 * 0.05**2 + 0.02 * 0.05**4))


@FIXED
@given(cameras(), st.floats(5, 40))
def test_unproject_undoes_project(p, depth_m):
    points = ahead(p, depth_m)
    uv = optics.project(p, points, SIZE)
    for axis in (0, 1, 2):
        met = optics.to_plane(p, uv, SIZE, axis=axis, value_m=points[:, axis])
        level = np.abs(points[:, axis] - p[3 + axis]) > 0.05  # a plane through the camera is met at the camera
        assert met[level] == pytest.approx(points[level], abs=1e-5)


@FIXED
@given(cameras())
def test_project_undoes_unproject(p):
    directions = optics.rays(p, PIXELS, SIZE)
    for depth in (3.0, 50.0):
        assert optics.project(p, p[3:6] + depth * directions, SIZE) == pytest.approx(PIXELS, abs=1e-6)
    # A ray is not normalised: its depth along the axis is 1.
    assert directions @ optics.rotation(*p[6:9])[2] == pytest.approx(np.ones(len(PIXELS)))


@FIXED
@given(cameras(), st.floats(-50, 50), st.floats(-20, 20), st.floats(-3, 3))
def test_shift_of_the_world_and_the_camera_leaves_the_picture(p, dx, dy, dz):
    points, shift = ahead(p, 12.0), np.array([dx, dy, dz])
    moved = p.copy()
    moved[3:6] += shift
    assert optics.project(moved, points + shift, SIZE) == pytest.approx(optics.project(p, points, SIZE), abs=1e-6)


@FIXED
@given(cameras(), st.floats(0.1, 10))
def test_scale_of_the_world_leaves_the_picture(p, k):
    points, scaled = ahead(p, 12.0), p.copy()
    scaled[3:6] *= k
    assert optics.project(scaled, k * points, SIZE) == pytest.approx(optics.project(p, points, SIZE), abs=1e-6)


@FIXED
@given(cameras())
def test_a_mirrored_course_mirrors_the_picture_and_x(p):
    """x -> -x with the camera mirrored too: u is mirrored about the middle, v stays, and x comes back mirrored."""
    points, flip = ahead(p, 12.0), np.array([-1.0, 1.0, 1.0])
    mirrored = np.concatenate([p[:3], p[3:6] * flip, [np.pi - p[6], p[7], -p[8]]])
    uv = optics.project(p, points, SIZE)
    other = optics.project(mirrored, points * flip, SIZE)
    assert other[:, 0] == pytest.approx(SIZE[0] - 1 - uv[:, 0], abs=1e-6)
    assert other[:, 1] == pytest.approx(uv[:, 1], abs=1e-6)
    lane = optics.to_plane(p, uv, SIZE, axis=1, value_m=points[:, 1])
    back = optics.to_plane(mirrored, other, SIZE, axis=1, value_m=points[:, 1])
    assert back == pytest.approx(lane * flip, abs=1e-5)


# --- derivatives --------------------------------------------------------------------------------


def central(f, at, step):
    """Central difference of f about the vector `at`, one column for each of its entries."""
    columns = []
    for i in range(at.size):
        d = np.zeros(at.size)
        d[i] = step[i]
        columns.append((f(at + d) - f(at - d)) / (2 * step[i]))
    return np.stack(columns, axis=-1)


@FIXED
@given(cameras())
def test_projection_derivatives(p):
    points = ahead(p, 12.0, count=8)
    uv, by_p, by_point = optics.project_jacobian(p, points, SIZE)
    assert uv == pytest.approx(optics.project(p, points, SIZE))
    step = np.array([1e-2, 1e-6, 1e-6, 1e-5, 1e-5, 1e-5, 1e-7, 1e-7, 1e-7])
    assert by_p.shape == (8, 2, len(CAMERA_PARAMETERS))
    assert by_p == pytest.approx(central(lambda q: optics.project(q, points, SIZE), p, step), rel=1e-5, abs=1e-3)
    for i in range(8):
        wanted = central(lambda x: optics.project(p, x[None], SIZE)[0], points[i], np.full(3, 1e-5))
        assert by_point[i] == pytest.approx(wanted, rel=1e-5, abs=1e-3)


@FIXED
@given(cameras())
def test_lane_derivatives(p):
    """How the lane point behind a FIXED pixel moves, by pixel, by camera and by the lane's y."""
    y = 0.61
    xs = p[3] + np.array([-3.0, 0.5, 4.0])
    points = np.column_stack([xs, np.full(3, y), [0.9, 1.1, 0.2]])
    uv = optics.project(p, points, SIZE)
    if not np.all(np.isfinite(uv)):
        return

    def met(q, pixels, plane):
        return optics.to_plane(q, pixels, SIZE, axis=1, value_m=plane)[:, [0, 2]]

    by_uv, by_p, by_y = optics.lane_jacobian(p, points, SIZE)
    step = np.array([1e-2, 1e-6, 1e-6, 1e-5, 1e-5, 1e-5, 1e-7, 1e-7, 1e-7])
    assert by_p == pytest.approx(central(lambda q: met(q, uv, y), p, step), rel=1e-4, abs=1e-5)
    assert by_y == pytest.approx((met(p, uv, y + 1e-5) - met(p, uv, y - 1e-5)) / 2e-5, rel=1e-5, abs=1e-6)
    by_pixel = central(lambda d: met(p, uv + d, y), np.zeros(2), np.full(2, 1e-3))
    assert by_uv == pytest.approx(by_pixel, rel=1e-4, abs=1e-7)


# --- edges --------------------------------------------------------------------------------------


def test_nothing_is_seen_behind_the_camera():
    p = np.array([1400.0, 0.0, 0.0, 0.0, -10.0, 1.5, np.pi / 2, 0.0, 0.0])
    uv = optics.project(p, np.array([[0.0, -11.0, 1.5], [0.0, -10.0, 1.5], [0.0, 0.0, 1.5]]), SIZE)
    assert np.isnan(uv[:2]).all()
    assert np.isfinite(uv[2]).all()


def test_rays_away_from_a_plane_do_not_meet_it():
    p = np.array([1400.0, 0.0, 0.0, 0.0, -10.0, 1.5, np.pi / 2, 0.0, 0.0])
    middle = np.array([optics.centre_px(SIZE)])
    assert np.isnan(optics.to_plane(p, middle, SIZE, axis=1, value_m=-20.0)).all()  # behind
    assert np.isnan(optics.to_plane(p, middle, SIZE, axis=2, value_m=0.0)).all()  # along the ground
    below = optics.to_plane(p, middle + np.array([0.0, 10.0]), SIZE, axis=2, value_m=0.0)
    assert below[0, 2] == pytest.approx(0.0, abs=1e-9)
    above = optics.to_plane(p, middle - np.array([0.0, 10.0]), SIZE, axis=2, value_m=0.0)
    assert np.isnan(above).all()


@pytest.mark.parametrize(
    ("k1", "k2", "radius"),
    [
        (0.0, 0.0, np.inf),
        (0.1, 0.0, np.inf),
        (-0.12, 0.0, 1 / np.sqrt(0.36)),
        # 1 - 0.9 r2 + 0.5 r4 has no zero; 1 - 1.5 r2 + 0.5 r4 = 0.5 (r2 - 1)(r2 - 2).
        (-0.3, 0.1, np.inf),
        (-0.5, 0.1, 1.0),
        (-0.12, 1e-310, 1 / np.sqrt(0.36)),
    ],
)
def test_the_lens_model_ends_where_it_turns_back(k1, k2, radius):
    assert optics.largest_radius(k1, k2) == pytest.approx(radius)


def test_past_the_lens_model_nothing_is_invented():
    p = np.array([700.0, -0.3, 0.0, 0.0, -10.0, 1.5, np.pi / 2, 0.0, 0.0])
    limit = optics.largest_radius(-0.3, 0.0)
    edge = limit * (1 - 0.3 * limit**2)  # distorted radius where the model ends
    u0, v0 = optics.centre_px(SIZE)
    inside, outside = u0 + 700 * 0.97 * edge, u0 + 700 * 1.01 * edge
    assert outside < SIZE[0]
    got = optics.undistort(p, np.array([[inside, v0], [outside, v0]]), SIZE)
    assert np.isfinite(got[0]).all()
    assert np.isnan(got[1]).any()
    assert np.isnan(optics.to_plane(p, np.array([[outside, v0]]), SIZE, axis=1, value_m=0.6)).all()
    far = np.array([[10 * 1.02 * limit, 0.0, 1.5], [10 * 0.97 * limit, 0.0, 1.5]])
    uv = optics.project(p, far, SIZE)
    assert np.isnan(uv[0]).all()
    assert np.isfinite(uv[1]).all()
