"""Resection: the truth from exact marks, honest intervals from clicked ones, and every way to be told no."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.stats import chi2

from vidkin.core import optics
from vidkin.core.camera import lane_precision, resect
from vidkin.notices import Failure
from vidkin.stages import Camera, CameraPrior, Lane, Mark

SIZE = (1920, 1080)
LANE = Lane()


def found(marks, *, size=SIZE, prior=None, lane=LANE) -> Camera:
    camera = resect(marks, size, prior=prior, lane=lane)
    assert isinstance(camera, Camera), camera
    return camera


def refused(marks, code, *, lane=LANE) -> Failure:
    answer = resect(marks, SIZE, lane=lane)
    assert isinstance(answer, Failure)
    assert not answer
    assert (answer.stage, answer.code) == ("camera", code)
    return answer


def codes(camera) -> set[str]:
    return {n.code for n in camera.notices}


def metres(p, pixels_of, xs, *, z_m=0.95):
    """Where the camera `p` measures lane points that truly lie at `xs` and that the camera `pixels_of` filmed."""
    points = np.column_stack([xs, np.full(len(xs), LANE.centre_y_m), np.full(len(xs), z_m)])
    uv = optics.project(pixels_of, points, SIZE)
    return optics.to_plane(p, uv, SIZE, axis=1, value_m=LANE.centre_y_m)[:, 0]


# --- the truth ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "view",
    [
        {"side": 1, "distance_m": 9.0, "hfov_deg": 72.0, "k1": -0.09},
        {"side": -1, "distance_m": 14.0, "turn_deg": -12.0, "roll_deg": -2.0, "x_m": 30.0},
        {"side": -1, "distance_m": 24.0, "hfov_deg": 56.0, "height_m": 2.4, "k1": 0.04, "k2": -0.02},
    ],
)
def test_exact_marks_give_the_truth(world: SimpleNamespace, view) -> None:
    p = world.parameters(**view)
    xyz = world.layout(p)
    camera = found(world.sighted(p, xyz, sd_px=0.02))
    assert camera.position_m == pytest.approx(p[3:6], abs=0.003)
    assert camera.parameters[0] == pytest.approx(p[0], rel=3e-4)
    assert camera.parameters[1:3] == pytest.approx(p[1:3], abs=1e-3)
    assert camera.parameters[6:9] == pytest.approx(p[6:9], abs=1e-4)
    xs = np.linspace(xyz[:, 0].min(), xyz[:, 0].max(), 9)[1:-1]
    assert metres(camera.parameters, p, xs) == pytest.approx(xs, abs=0.001)
    assert camera.notices == ()
    assert camera.scale_sd < 1e-4
    assert np.abs(camera.mark_error_px).max() < 0.02


def test_marks_come_back_with_their_errors(world: SimpleNamespace) -> None:
    """Model, error in pixels and error in metres across the line of sight, mark by mark."""
    p = world.parameters()
    marks = world.sighted(p, world.layout(p), error_px=0.7, rng=np.random.default_rng(2))
    camera = found(marks)
    seen = np.array([m.uv_px for m in marks])
    xyz = np.array([m.xyz_m for m in marks])
    assert camera.marks == marks
    assert camera.mark_uv_px == pytest.approx(optics.project(camera.parameters, xyz, SIZE))
    assert camera.mark_error_px == pytest.approx(seen - camera.mark_uv_px)
    # One pixel is depth/f metres across.
    depth = (xyz - camera.position_m) @ optics.rotation(*camera.parameters[6:9])[2]
    assert camera.mark_error_m == pytest.approx(np.hypot(*camera.mark_error_px.T) * depth / camera.parameters[0])
    assert camera.cov == pytest.approx(camera.cov.T)
    assert np.linalg.eigvalsh(camera.cov / np.sqrt(np.outer(np.diag(camera.cov), np.diag(camera.cov)))).min() > 0


def test_precision_along_the_lane_is_that_of_the_covariance(world: SimpleNamespace) -> None:
    """`x_sd_m` and `scale_sd` against 400 cameras drawn from the covariance."""
    p = world.parameters()
    camera = found(world.sighted(p, world.layout(p), error_px=0.7, rng=np.random.default_rng(1)))
    q = camera.parameters
    xs = camera.x_sd_m[:, 0]
    assert xs[0] == min(m.xyz_m[0] for m in camera.marks)
    assert xs[-1] == max(m.xyz_m[0] for m in camera.marks)
    drawn = np.random.default_rng(0).multivariate_normal(q, camera.cov, 400, method="eigh")
    places = np.array([metres(d, q, xs) for d in drawn])
    assert camera.x_sd_m[:, 1] == pytest.approx(places.std(axis=0), rel=0.15)
    scale = (places[:, -1] - places[:, 0]) / (xs[-1] - xs[0])
    assert camera.scale_sd == pytest.approx(scale.std(), rel=0.15)


def test_precision_where_little_of_the_lane_is_in_the_picture(world: SimpleNamespace) -> None:
    """Places behind the camera have no precision; with fewer than two left there is no scale to speak of."""
    p = world.parameters()
    behind = world.parameters(side=-1)
    xs, sds, scale = lane_precision(behind, np.eye(9), SIZE, lane=Lane(centre_y_m=40.0), stretch=(0.0, 10.0))
    assert xs.size == sds.size == 0
    assert scale == 0.0
    xs, sds, scale = lane_precision(p, np.diag(world.CAMERA_SD**2), SIZE, lane=LANE, stretch=(0.0, 15.0))
    assert xs.size == sds.size == 25
    assert scale > 0


# --- symmetries ---------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def course(world: SimpleNamespace):
    """Exact marks of one camera, and what is found from them."""
    p = world.parameters(turn_deg=4.0)
    marks = world.sighted(p, world.layout(p), sd_px=0.05)
    return marks, found(marks)


@pytest.mark.parametrize("shift_m", [-37.5, 250.0])
def test_shift_of_all_marks_along_x_shifts_the_camera(course, shift_m) -> None:
    marks, plain = course
    moved = tuple(replace(m, xyz_m=m.xyz_m + np.array([shift_m, 0, 0])) for m in marks)
    camera = found(moved)
    assert camera.parameters == pytest.approx(plain.parameters + shift_m * np.eye(9)[3], abs=1e-3)
    assert camera.scale_sd == pytest.approx(plain.scale_sd, rel=1e-2)


def test_a_mirrored_course_gives_a_mirrored_camera(course) -> None:
    marks, plain = course
    flip = np.array([-1.0, 1.0, 1.0])
    mirrored = tuple(
        replace(m, xyz_m=m.xyz_m * flip, uv_px=np.array([SIZE[0] - 1 - m.uv_px[0], m.uv_px[1]])) for m in marks
    )
    p, q = plain.parameters, found(mirrored).parameters
    assert q[:3] == pytest.approx(p[:3], rel=1e-4, abs=1e-4)
    assert q[3:6] == pytest.approx(p[3:6] * flip, abs=1e-3)
    assert np.exp(1j * q[6]) == pytest.approx(np.exp(1j * (np.pi - p[6])), abs=1e-4)
    assert q[7:] == pytest.approx([p[7], -p[8]], abs=1e-4)


@pytest.mark.parametrize("k", [0.5, 3.0])
def test_a_layout_k_times_as_large_puts_the_camera_k_times_as_far(course, k) -> None:
    marks, plain = course
    larger = tuple(replace(m, xyz_m=k * m.xyz_m) for m in marks)
    camera = found(larger, lane=Lane(centre_y_m=k * LANE.centre_y_m, width_m=k * LANE.width_m))
    assert camera.position_m == pytest.approx(k * plain.position_m, rel=2e-3, abs=2e-3 * k)
    assert camera.parameters[0] == pytest.approx(plain.parameters[0], rel=1e-3)


# --- coverage -----------------------------------------------------------------------------------

CAMERAS = 50
#: Of 50 intervals at 95 %, 44 (88 %) or more cover with a probability of 98.8 % (binomial: 47.5 +- 1.5).
AT_LEAST = 44


def random_view(world, seed):
    """A camera on either side, 8-25 m from the lane, 55-75 deg wide, and the marks that it sees, clicked."""
    rng = np.random.default_rng(1000 + seed)
    distance = rng.uniform(8, 25)
    p = world.parameters(
        side=int(rng.choice([-1, 1])),
        hfov_deg=rng.uniform(55, 75),
        distance_m=distance,
        height_m=rng.uniform(1, 2.5),
        x_m=rng.uniform(0, 30),
        turn_deg=rng.normal(0, 3),
        pitch_deg=rng.uniform(-4, 0),
        roll_deg=rng.normal(0, 1),
        k1=rng.uniform(-0.1, 0.05),
        k2=rng.uniform(-0.02, 0.02),
    )
    xyz = world.layout(p, every_m=2.5 if distance < 13 else 5.0)
    return p, xyz, world.sighted(p, xyz, error_px=0.7, rng=rng)


def test_intervals_cover_the_truth_at_their_rate(world: SimpleNamespace) -> None:
    """0.7 px clicks, 50 random cameras: places between the marks, their joint region, and the scale."""
    places, joint, scales = [], [], []
    for seed in range(CAMERAS):
        p, xyz, marks = random_view(world, seed)
        camera = found(marks)
        low, high = xyz[:, 0].min(), xyz[:, 0].max()
        xs = low + (high - low) * np.array([0.1, 0.3, 0.5, 0.7, 0.9])
        miss = metres(camera.parameters, p, xs) - xs
        at = np.column_stack([xs + miss, np.full(5, LANE.centre_y_m), np.full(5, 0.95)])
        rows = optics.lane_jacobian(camera.parameters, at, SIZE)[1][:, 0]
        cov = rows @ camera.cov @ rows.T
        assert np.interp(xs, *camera.x_sd_m.T) == pytest.approx(np.sqrt(np.diag(cov)), rel=0.1)
        places.append(miss / np.sqrt(np.diag(cov)))
        three = np.ix_([0, 2, 4], [0, 2, 4])
        joint.append(miss[::2] @ np.linalg.solve(cov[three], miss[::2]))
        ends = metres(camera.parameters, p, np.array([low, high]))
        scales.append((np.ptp(ends) / (high - low) - 1) / camera.scale_sd)
    places, scales = np.array(places), np.array(scales)
    assert np.all(np.count_nonzero(np.abs(places) < 1.96, axis=0) >= AT_LEAST)
    assert np.count_nonzero(np.array(joint) < chi2.ppf(0.95, 3)) >= AT_LEAST
    assert np.count_nonzero(np.abs(scales) < 1.96) >= AT_LEAST
    # Nor are they wide: errors over their sd have a root mean square near 1 (50 draws: +- 0.1).
    for z in (*places.T, scales):
        assert 0.75 < np.sqrt(np.mean(z**2)) < 1.25


# --- what the user states -----------------------------------------------------------------------


def test_stated_camera_facts_narrow_what_marks_leave_open(world: SimpleNamespace) -> None:
    p = world.parameters(hfov_deg=60.0, distance_m=12.0, height_m=1.4)
    xyz = [(x, y, 0.0) for x in (4.0, 8.0, 12.0) for y in (0.0, 1.22)]
    marks = world.sighted(p, xyz, error_px=0.7, rng=np.random.default_rng(4))
    plain = found(marks)
    told = found(marks, prior=CameraPrior(hfov_deg=60.0, height_m=1.4, distance_m=12.0))
    for i in (0, 4, 5):
        assert told.cov[i, i] < plain.cov[i, i]
    z = (told.parameters - p)[[0, 4, 5]] / np.sqrt(told.cov.diagonal()[[0, 4, 5]])
    assert np.abs(z).max() < 3
    assert np.sqrt(told.cov[4, 4]) < 0.5
    assert np.sqrt(told.cov[5, 5]) < 0.15


def test_uncertain_placement_widens_the_camera(world: SimpleNamespace) -> None:
    p = world.parameters()
    xyz = world.layout(p)
    sharp, vague = (found(world.sighted(p, xyz, sd_px=0.5, sd_m=sd_m)) for sd_m in (0.0, 0.05))
    assert np.all(vague.x_sd_m[:, 1] > 2 * sharp.x_sd_m[:, 1])


# --- notices ------------------------------------------------------------------------------------


def test_marks_disagree_names_the_worst_and_widens(world: SimpleNamespace) -> None:
    """Clicks three times as rough as stated, none of them alone to blame."""
    p = world.parameters()
    xyz = world.layout(p)
    good = found(world.sighted(p, xyz, error_px=0.5, rng=np.random.default_rng(8), sd_px=0.5))
    assert "marks_disagree" not in codes(good)
    camera = found(world.sighted(p, xyz, error_px=1.7, rng=np.random.default_rng(8), sd_px=0.5))
    (remark,) = (n for n in camera.notices if n.code == "marks_disagree")
    worst = next(i for i, m in enumerate(camera.marks) if f"'{m.label}'" in remark.text)
    assert camera.mark_error_m[worst] >= 0.95 * camera.mark_error_m[camera.used].max()
    assert f"{100 * camera.mark_error_m[worst]:.1f} cm off" in remark.text
    assert remark.hint
    assert np.median(camera.x_sd_m[:, 1]) > 1.8 * np.median(good.x_sd_m[:, 1])


def test_one_wrong_mark_is_named_and_does_no_harm(world: SimpleNamespace) -> None:
    """A click beside the cone, 13 px off: left out by name, the others give the same camera as without it."""
    p = world.parameters()
    marks = list(world.sighted(p, world.layout(p), error_px=0.5, rng=np.random.default_rng(8), sd_px=0.5))
    wrong = 5
    without = found((*marks[:wrong], *marks[wrong + 1 :]))
    marks[wrong] = replace(marks[wrong], label="the wrong cone", uv_px=marks[wrong].uv_px + np.array([12.0, -5.0]))
    camera = found(tuple(marks))
    (remark,) = (n for n in camera.notices if n.code == "mark_left_out")
    assert "'the wrong cone'" in remark.text
    assert f"other {len(marks) - 1}" in remark.text
    assert np.flatnonzero(~camera.used).tolist() == [wrong]
    assert f"by {100 * camera.mark_error_m[wrong]:.0f} cm" in remark.text
    assert camera.mark_error_m[wrong] > 0.05
    assert camera.parameters == pytest.approx(without.parameters, rel=1e-4, abs=1e-5)


def test_two_swapped_marks_are_named(world: SimpleNamespace) -> None:
    p = world.parameters()
    marks = list(world.sighted(p, world.layout(p), error_px=0.5, rng=np.random.default_rng(3), sd_px=0.5))
    first, second = 2, 9
    clicks = marks[first].uv_px, marks[second].uv_px
    marks[first], marks[second] = (replace(marks[i], uv_px=c) for i, c in zip((second, first), clicks, strict=True))
    camera = found(tuple(marks))
    (remark,) = (n for n in camera.notices if n.code == "marks_swapped")
    assert f"'{marks[first].label}'" in remark.text
    assert f"'{marks[second].label}'" in remark.text
    assert np.abs(metres(camera.parameters, p, np.array([4.0, 8.0, 12.0])) - [4, 8, 12]).max() < 0.02


def test_scale_uncertain_is_said(world: SimpleNamespace) -> None:
    p = world.parameters(distance_m=22.0)
    xyz = [(x, y, 0.0) for x in (6.0, 8.0, 9.1) for y in (0.0, 1.22)]
    camera = found(world.sighted(p, xyz, error_px=3.0, sd_px=3.0, rng=np.random.default_rng(1)))
    assert camera.scale_sd > 0.01
    (remark,) = (n for n in camera.notices if n.code == "scale_uncertain")
    assert f"{100 * camera.scale_sd:.1f} %" in remark.text
    assert "both lane lines" in remark.hint


# --- failures -----------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def eight(world: SimpleNamespace) -> tuple[Mark, ...]:
    """Eight marks on the two lines of the lane, x from 1 to 15 m."""
    p = world.parameters()
    return world.sighted(p, [(x, y, 0.0) for x in (1.0, 5.0, 10.0, 15.0) for y in (0.0, 1.22)])


def test_too_few_marks_says_how_many_and_where(eight) -> None:
    answer = refused(eight[:5], "too_few_marks")
    assert "5 marks" in answer.reason
    assert "6" in answer.reason
    assert "Add 1 more" in answer.hint
    for place in ("x = 1 m", "x = 20 m", "y = 0 m", "y = 1.22 m"):
        assert place in answer.hint
    none = refused((), "too_few_marks", lane=Lane(start_x_m=10.0))
    assert "Add 6 more" in none.hint
    assert "x = 10 m" in none.hint


def test_short_stretch_names_the_place_to_add(world: SimpleNamespace) -> None:
    p = world.parameters()
    marks = world.sighted(p, [(x, y, 0.0) for x in (7.0, 8.0, 9.0) for y in (0.0, 1.22)])
    answer = refused(marks, "short_stretch")
    assert "2.00 m" in answer.reason
    assert "x = 18 m" in answer.hint


@pytest.mark.parametrize(("line_y", "other_y"), [(0.0, "1.22"), (1.22, "0")])
def test_one_line_names_the_other_line(world: SimpleNamespace, line_y, other_y) -> None:
    """Marks on one line, with at most one elsewhere: the camera's tilt about that line stays free."""
    p = world.parameters()
    line = [(x, line_y, 0.0) for x in (1.0, 3.0, 5.0, 8.0, 11.0, 14.0)]
    for extra in ([], [(4.0, 1.22 - line_y, 0.0)]):
        answer = refused(world.sighted(p, line + extra), "one_line")
        assert f"y = {line_y:.2f} m" in answer.reason
        assert f"y = {float(other_y):.2f} m" in answer.hint
        assert "x = 1 m" in answer.hint
        assert "x = 14 m" in answer.hint


def test_mark_outside_names_the_mark(eight) -> None:
    for uv in ([1919.6, 300.0], [-0.6, 300.0], [500.0, 1079.6], [500.0, -0.6]):
        stray = replace(eight[3], label="20 m cone", uv_px=np.array(uv))
        answer = refused((*eight[:3], stray, *eight[4:]), "mark_outside")
        assert "'20 m cone'" in answer.reason
        assert f"({uv[0]:.1f}, {uv[1]:.1f})" in answer.reason
        assert "1920 x 1080" in answer.reason


@pytest.mark.parametrize(("how", "distance_m"), [("picture", 13.0), ("y", 13.0), ("flat picture", 20.0)])
def test_mirrored_marks_are_told_from_wrong_ones(world: SimpleNamespace, how, distance_m) -> None:
    """A clip saved mirrored, or y counted to the right: the hint says so. Flat marks too, without cone tips.

    No camera far away, or under the ground, may stand in for it.
    """
    p = world.parameters(distance_m=distance_m)
    marks = world.sighted(p, world.layout(p, cones=how != "flat picture"), error_px=0.5, rng=np.random.default_rng(0))
    if how == "y":
        wrong = tuple(replace(m, xyz_m=m.xyz_m * np.array([1.0, -1.0, 1.0])) for m in marks)
    else:
        wrong = tuple(replace(m, uv_px=np.array([SIZE[0] - 1 - m.uv_px[0], m.uv_px[1]])) for m in marks)
    answer = refused(wrong, "mirrored_marks")
    assert "mirror" in answer.reason
    assert "sign of y" in answer.hint


def test_no_camera_fits_marks_in_disorder(world: SimpleNamespace) -> None:
    """Clicks in random order: no camera, and none that leaves the most of them out."""
    p = world.parameters()
    marks = world.sighted(p, world.layout(p, cones=False))
    order = np.random.default_rng(1).permutation(len(marks))
    answer = refused(tuple(replace(m, uv_px=marks[i].uv_px) for m, i in zip(marks, order, strict=True)), "no_camera")
    assert "cm" in answer.reason
    assert "swapped" in answer.hint
