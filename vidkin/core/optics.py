"""Pixel <-> world: pinhole with radial Brown-Conrady distortion, and its Jacobians.

Source: Brown, Photogramm. Eng. 37 (1971) 855 (radial terms; from memory). With X_c = R (X - C),
x = X_c/Z_c, y = Y_c/Z_c, r2 = x^2 + y^2, g = 1 + k1 r2 + k2 r2^2:  u = u0 + f g x,  v = v0 + f g y.
Square pixels; (u0, v0) is the picture's centre, ((W-1)/2, (H-1)/2) since pixel centres are whole numbers.
Parameters are one vector in the order of `stages.CAMERA_PARAMETERS`.
"""

from __future__ import annotations

import numpy as np

from vidkin.stages import Array

_NEAR_M = 1e-6
_NEWTON_STEPS = 30


def centre_px(size_px: tuple[int, int]) -> Array:
    """Principal point (2,) [px] of a picture of `size_px` (width, height)."""
    return np.array([(size_px[0] - 1) / 2.0, (size_px[1] - 1) / 2.0])


def rotation(yaw_rad: float, pitch_rad: float, roll_rad: float) -> Array:
    """World-to-camera rotation (3, 3); rows are the picture's right, down and the view direction."""
    cy, sy, cp, sp = np.cos(yaw_rad), np.sin(yaw_rad), np.cos(pitch_rad), np.sin(pitch_rad)
    forward = np.array([cy * cp, sy * cp, sp])
    right = np.array([sy, -cy, 0.0])
    down = np.cross(forward, right)
    cr, sr = np.cos(roll_rad), np.sin(roll_rad)
    return np.stack([cr * right + sr * down, -sr * right + cr * down, forward])


def angles(matrix: Array) -> Array:
    """Yaw, pitch, roll (3,) [rad] of a world-to-camera rotation: the inverse of `rotation`."""
    forward = matrix[2]
    yaw, pitch = np.arctan2(forward[1], forward[0]), np.arcsin(np.clip(forward[2], -1, 1))
    level = rotation(yaw, pitch, 0.0)
    return np.array([yaw, pitch, np.arctan2(matrix[0] @ level[1], matrix[0] @ level[0])])


def _rotation_derivatives(p: Array) -> Array:
    """d rotation / d (yaw, pitch, roll), (3, 3, 3)."""
    yaw, pitch, roll = p[6:9]
    cy, sy, cp, sp = np.cos(yaw), np.sin(yaw), np.cos(pitch), np.sin(pitch)
    cr, sr = np.cos(roll), np.sin(roll)
    right, down = np.array([sy, -cy, 0.0]), np.array([cy * sp, sy * sp, -cp])
    right_y, down_y = np.array([cy, sy, 0.0]), np.array([-sy * sp, cy * sp, 0.0])
    forward_y = np.array([-sy * cp, cy * cp, 0.0])
    down_p, forward_p = np.array([cy * cp, sy * cp, sp]), np.array([-cy * sp, -sy * sp, cp])
    zero = np.zeros(3)
    return np.stack(
        [
            np.stack([cr * right_y + sr * down_y, -sr * right_y + cr * down_y, forward_y]),
            np.stack([sr * down_p, cr * down_p, forward_p]),
            np.stack([-sr * right + cr * down, -cr * right - sr * down, zero]),
        ]
    )


def largest_radius(k1: float, k2: float) -> float:
    """Undistorted radius up to which r g(r) rises, so that the lens model has an inverse [-].

    Zero of d(r g)/dr = 1 + 3 k1 r^2 + 5 k2 r^4; infinite where there is none.
    """
    # Terms this small turn nowhere near a picture, and would overflow.
    k1, k2 = (k if abs(k) > 1e-12 else 0.0 for k in (k1, k2))
    roots = np.roots([5 * k2, 3 * k1, 1.0]) if k2 else np.roots([3 * k1, 1.0]) if k1 else np.zeros(0)
    real = np.real(roots[np.abs(np.imag(roots)) < 1e-12])
    positive = real[real > 0]
    return float(np.sqrt(positive.min())) if positive.size else float("inf")


def project(p: Array, points_m: Array, size_px: tuple[int, int]) -> Array:
    """World points (N, 3) [m] to pixels (N, 2). NaN where a point is behind the camera or past the lens model."""
    return project_jacobian(p, points_m, size_px)[0]


def project_jacobian(p: Array, points_m: Array, size_px: tuple[int, int]) -> tuple[Array, Array, Array]:
    """Pixels (N, 2), d uv / d parameters (N, 2, 9) and d uv / d point (N, 2, 3)."""
    points_m = np.atleast_2d(points_m)
    f, k1, k2 = p[:3]
    matrix = rotation(*p[6:9])
    offset = points_m - p[3:6]
    seen = offset @ matrix.T
    depth = seen[:, 2]
    bad = depth <= _NEAR_M
    z = np.where(bad, 1.0, depth)
    x, y = seen[:, 0] / z, seen[:, 1] / z
    r2 = x * x + y * y
    bad |= np.sqrt(r2) > largest_radius(k1, k2)
    g, dg = 1 + k1 * r2 + k2 * r2**2, k1 + 2 * k2 * r2
    uv = centre_px(size_px) + f * np.stack([g * x, g * y], axis=1)
    # d(g x, g y) / d(x, y)
    cross = 2 * dg * x * y
    image = f * np.stack([np.stack([g + 2 * dg * x * x, cross], 1), np.stack([cross, g + 2 * dg * y * y], 1)], 1)
    perspective = np.zeros((len(z), 2, 3))
    perspective[:, 0, 0] = perspective[:, 1, 1] = 1 / z
    perspective[:, 0, 2], perspective[:, 1, 2] = -x / z, -y / z
    by_seen = image @ perspective
    by_point = by_seen @ matrix
    by_p = np.empty((len(z), 2, 9))
    xy = np.stack([x, y], axis=1)
    by_p[:, :, 0] = g[:, None] * xy
    by_p[:, :, 1] = f * r2[:, None] * xy
    by_p[:, :, 2] = f * (r2**2)[:, None] * xy
    by_p[:, :, 3:6] = -by_point
    turned = np.einsum("kij,nj->nik", _rotation_derivatives(p), offset)
    by_p[:, :, 6:9] = by_seen @ turned
    uv[bad] = np.nan
    return uv, by_p, by_point


def undistort(p: Array, uv_px: Array, size_px: tuple[int, int]) -> Array:
    """Pixels (N, 2) to undistorted tangents x, y (N, 2); NaN outside the range of the lens model."""
    f, k1, k2 = p[:3]
    distorted = (np.atleast_2d(uv_px) - centre_px(size_px)) / f
    target = np.hypot(distorted[:, 0], distorted[:, 1])
    limit = largest_radius(k1, k2)
    r = np.minimum(target, 0.99 * limit)
    for _ in range(_NEWTON_STEPS):
        r2 = r * r
        slope = 1 + 3 * k1 * r2 + 5 * k2 * r2**2
        step = (r * (1 + k1 * r2 + k2 * r2**2) - target) / np.where(np.abs(slope) < 1e-9, 1e-9, slope)
        r = np.clip(r - step, 0.0, limit)
    miss = np.abs(r * (1 + k1 * r**2 + k2 * r**4) - target) > 1e-9 * np.maximum(1, target)
    scale = np.where(target > 0, r / np.where(target > 0, target, 1), 1.0)
    scale[miss] = np.nan
    return np.asarray(distorted * scale[:, None])


def rays(p: Array, uv_px: Array, size_px: tuple[int, int]) -> Array:
    """Directions (N, 3) in the world of the rays through pixels (N, 2); not normalised (depth 1)."""
    xy = undistort(p, uv_px, size_px)
    return np.column_stack([xy, np.ones(len(xy))]) @ rotation(*p[6:9])


def to_plane(p: Array, uv_px: Array, size_px: tuple[int, int], *, axis: int, value_m: float | Array) -> Array:
    """World points (N, 3) where the rays through pixels (N, 2) meet the plane X[axis] = value.

    NaN where the ray runs along or away from the plane.
    """
    direction = rays(p, uv_px, size_px)
    gap = np.asarray(value_m, dtype=np.float64) - p[3 + axis]
    with np.errstate(divide="ignore", invalid="ignore"):
        depth = gap / direction[:, axis]
    depth = np.where(depth > 0, depth, np.nan)
    return np.asarray(p[3:6] + depth[:, None] * direction)


def lane_jacobian(p: Array, points_m: Array, size_px: tuple[int, int]) -> tuple[Array, Array, Array]:
    """How a pixel's point on the plane y = const moves: by pixel, by parameters, by the plane's y.

    For a fixed pixel, implicit differentiation of uv(p, X) gives d(x, z)/dq = -(duv/d(x, z))^-1 duv/dq.

    Returns
    -------
    by_uv (N, 2, 2), by_p (N, 2, 9), by_y (N, 2): derivatives of (x, z) [m].
    """
    _, by_p, by_point = project_jacobian(p, points_m, size_px)
    inverse = np.linalg.inv(by_point[:, :, [0, 2]])
    by_y = -np.einsum("nij,nj->ni", inverse, by_point[:, :, 1])
    return np.asarray(inverse), np.asarray(-inverse @ by_p), np.asarray(by_y)
