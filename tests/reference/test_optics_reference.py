"""Projection, resection and fields of view against OpenCV, a published calibration and phone lens tables."""

from __future__ import annotations

import cv2
import numpy as np
import pytest

from vidkin.core import optics
from vidkin.core.camera import resect
from vidkin.stages import Camera, Lane, Mark

SIZE = (1920, 1080)
CASES = {
    "from the right": (1507.0, -0.08, 0.02, 8.0, -12.4, 1.6, np.pi / 2 - 0.05, -0.04, 0.015),
    "from the left": (1250.0, 0.05, -0.01, 10.0, 15.0, 2.4, -np.pi / 2 + 0.03, -0.06, -0.02),
}


def opencv_camera(p, size=SIZE):
    """Our parameters in OpenCV's terms: rotation vector, translation, camera matrix, five distortion terms."""
    matrix = optics.rotation(*p[6:9])
    rvec = cv2.Rodrigues(matrix)[0]
    inner = np.array([[p[0], 0, (size[0] - 1) / 2], [0, p[0], (size[1] - 1) / 2], [0, 0, 1.0]])
    return rvec, -matrix @ p[3:6], inner, np.array([p[1], p[2], 0.0, 0.0, 0.0])


def layout(p):
    """Points on two lane lines and cone tips beside them that the camera sees (M, 3)."""
    xs = np.arange(-6.0, 30.0, 1.5)
    points = [(x, y, 0.0) for x in xs for y in (0.0, 1.22)] + [(x, y, 0.3) for x in xs[::2] for y in (-0.25, 1.5)]
    xyz = np.array(points)
    uv = optics.project(p, xyz, SIZE)
    with np.errstate(invalid="ignore"):
        return xyz[np.all((uv > 0) & (uv < np.array(SIZE) - 1), axis=1)]


def marks_of(xyz, uv, sd_px):
    return tuple(
        Mark(label=str(i), xyz_m=point, uv_px=seen, sd_px=sd_px, sd_m=0.0)
        for i, (point, seen) in enumerate(zip(xyz, uv, strict=True))
    )


@pytest.mark.parametrize("case", CASES)
def test_projection_equals_opencv(case):
    """cv2.projectPoints, the reference library (same Brown model), to 1e-7 px; and back through our own inverse."""
    p = np.array(CASES[case])
    xyz = np.vstack([layout(p), layout(p) + np.array([0.3, 2.0, 1.4])])
    rvec, tvec, inner, lens = opencv_camera(p)
    wanted, slopes = cv2.projectPoints(xyz, rvec, tvec, inner, lens)
    got, by_p, _ = optics.project_jacobian(p, xyz, SIZE)
    assert got == pytest.approx(wanted[:, 0], abs=1e-7)
    # OpenCV's derivatives by fx, fy (together our f), by k1 and by k2.
    assert by_p[:, :, 0].ravel() == pytest.approx(slopes[:, 6] + slopes[:, 7], abs=1e-9)
    assert by_p[:, :, 1:3].reshape(-1, 2) == pytest.approx(slopes[:, 10:12], rel=1e-9, abs=1e-7)
    tangents = optics.undistort(p, wanted[:, 0], SIZE)
    again = cv2.projectPoints(np.column_stack([tangents, np.ones(len(xyz))]), np.zeros(3), np.zeros(3), inner, lens)[0]
    assert again == pytest.approx(wanted, abs=1e-6)


@pytest.mark.parametrize("case", CASES)
def test_resection_finds_the_pose_that_opencv_finds(case):
    """Exact sightings: cv2.solvePnP, told the lens, and our resection, told nothing, both return to the truth."""
    p = np.array(CASES[case])
    xyz = layout(p)
    rvec, tvec, inner, lens = opencv_camera(p)
    uv = cv2.projectPoints(xyz, rvec, tvec, inner, lens)[0][:, 0]
    ok, r, t = cv2.solvePnP(xyz, uv, inner, lens, flags=cv2.SOLVEPNP_ITERATIVE)
    assert ok
    place = (-cv2.Rodrigues(r)[0].T @ t)[:, 0]
    found = resect(marks_of(xyz, uv, 0.01), SIZE)
    assert isinstance(found, Camera)
    assert place == pytest.approx(p[3:6], abs=1e-4)
    assert found.position_m == pytest.approx(place, abs=2e-3)
    assert found.parameters[:3] == pytest.approx(p[:3], rel=1e-3, abs=2e-4)


@pytest.mark.parametrize("case", CASES)
def test_resection_of_clicks_agrees_with_opencv(case):
    """cv2.calibrateCamera on the same clicked points, same model (square pixels, fixed centre, two radial terms).

    Our weak priors and OpenCV's none may part by a fraction of the sd that the clicks leave.
    """
    p = np.array(CASES[case])
    rng = np.random.default_rng(3)
    xyz = layout(p)
    uv = optics.project(p, xyz, SIZE) + rng.normal(0, 0.5, (len(xyz), 2))
    uv = np.clip(uv, 0, np.array(SIZE) - 1)
    found = resect(marks_of(xyz, uv, 0.5), SIZE, lane=Lane())
    assert isinstance(found, Camera)
    flags = (
        cv2.CALIB_USE_INTRINSIC_GUESS
        | cv2.CALIB_FIX_ASPECT_RATIO
        | cv2.CALIB_FIX_PRINCIPAL_POINT
        | cv2.CALIB_ZERO_TANGENT_DIST
        | cv2.CALIB_FIX_K3
    )
    start = opencv_camera(np.concatenate([[1400.0, 0.0, 0.0], p[3:]]))[2]
    enough = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 500, 1e-14)
    rms, inner, lens, rvecs, tvecs = cv2.calibrateCamera(
        [xyz.astype(np.float32)], [uv.astype(np.float32)], SIZE, start, np.zeros(5), flags=flags, criteria=enough
    )
    matrix = cv2.Rodrigues(rvecs[0])[0]
    theirs = np.concatenate([[inner[0, 0]], lens.ravel()[:2], (-matrix.T @ tvecs[0])[:, 0], optics.angles(matrix)])
    sd = np.sqrt(np.diag(found.cov))
    assert np.abs((found.parameters - theirs) / sd).max() < 0.5
    ours = float(np.sqrt(np.mean(np.sum(found.mark_error_px**2, axis=1))))
    assert ours == pytest.approx(rms, rel=0.01)
    # What it is for: places along the lane, within a tenth of the sd.
    xs = found.x_sd_m[:, 0]
    seen = optics.project(theirs, np.column_stack([xs, np.full(xs.size, 0.61), np.full(xs.size, 0.95)]), SIZE)
    met = optics.to_plane(found.parameters, seen, SIZE, axis=1, value_m=0.61)[:, 0]
    assert np.all(np.abs(met - xs) < 0.5 * found.x_sd_m[:, 1])


#: Zhang, IEEE TPAMI 22 (2000) 1330: f, k1, k2 READ; the shifts CALC (references section 12).
ZHANG = (832.5, -0.228601, 0.190353)


@pytest.mark.parametrize(("radius", "shift_px"), [(0.1, -0.19), (0.2, -1.47), (0.3, -4.75), (0.4, -10.56)])
def test_published_distortion_shift(radius, shift_px):
    p = np.array([*ZHANG, 0.0, 0.0, 0.0, np.pi / 2, 0.0, 0.0])
    straight = np.concatenate([p[:1], [0.0, 0.0], p[3:]])
    size = (640, 480)
    for direction in (0.0, 1.0, 2.5):
        point = np.array([[radius * np.cos(direction), 1.0, radius * np.sin(direction)]])
        bent, plain = (optics.project(q, point, size)[0] - optics.centre_px(size) for q in (p, straight))
        assert np.hypot(*bent) - np.hypot(*plain) == pytest.approx(shift_px, abs=0.005)


def with_focal(f_px, size):
    return Camera(
        width_px=size[0],
        height_px=size[1],
        parameters=np.array([f_px, 0, 0, 0, 0, 0, 0, 0, 0.0]),
        cov=np.eye(9),
    )


def test_published_field_of_view():
    """hFOV 42.05 deg of the same published calibration (CALC, references section 12)."""
    assert with_focal(ZHANG[0], (640, 480)).hfov_deg == pytest.approx(42.05, abs=0.005)


@pytest.mark.parametrize(("equivalent_mm", "hfov_deg"), [(24, 73.7), (25, 71.5), (26, 69.4), (27, 67.4), (28, 65.5)])
def test_field_of_view_of_phone_lenses(equivalent_mm, hfov_deg):
    """35 mm-equivalent focal lengths on 36 mm of width (CALC; 26 mm = 69.35 deg READ on one phone; section 12)."""
    assert with_focal(1920 * equivalent_mm / 36, SIZE).hfov_deg == pytest.approx(hfov_deg, abs=0.06)
