"""Pixels to metres and speed: exact where nothing is wrong, honest where something is, and every refusal."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vidkin.core import optics
from vidkin.core.models import MonoExponential
from vidkin.core.motion import measure, savitzky_golay
from vidkin.notices import Failure, failure
from vidkin.stages import Lane, Mark, Motion, Settings, Steps, Track

SIZE = (1920, 1080)
LAW = MonoExponential(v_max=9.5, tau=1.2)
NO_STEPS = failure("no_step_rhythm", seconds=1.0)


def flying(t_s):
    """Place [m] of a runner who is past the start: nearly even speed."""
    return -1.0 + LAW.position(t_s + 2.5) - LAW.position(2.5)


def standing(t_s):
    """Place [m] of a runner who moves off at 0.5 s."""
    return -0.3 + LAW.position(t_s - 0.5)


def film(p, t_s, x_m, *, y_m=0.61, z_m=0.95, noise_px=0.0, rng=None, sd_px=0.3, whole=None) -> Track:
    """The Track of a point that moves along the lane in front of the camera `p`."""
    uv = optics.project(p, np.column_stack([x_m, np.full_like(x_m, y_m), np.full_like(x_m, z_m)]), SIZE)
    if noise_px:
        uv = uv + noise_px * rng.standard_normal(uv.shape)
    n = t_s.size
    return Track(
        frame=np.arange(n),
        t_s=t_s,
        uv_px=uv,
        cov_px2=np.tile(sd_px**2 * np.eye(2), (n, 1, 1)),
        box_px=np.column_stack([uv - 30, uv + 30]),
        area_px=np.full(n, 4000.0),
        whole=np.ones(n, bool) if whole is None else whole,
        spread_px=np.full(n, 14.0),
        low_t_s=np.zeros(0),
        low_uv_px=np.zeros((0, 3)),
        direction=1 if uv[-1, 0] > uv[0, 0] else -1,
    )


def steps(*, rate_hz=4.4, lateral_m=0.61, lateral_sd_m=0.08) -> Steps:
    return Steps(
        on_s=np.zeros(0),
        off_s=np.zeros(0),
        x_m=np.zeros(0),
        step_rate_hz=rate_hz,
        step_rate_sd_hz=0.05,
        lateral_m=lateral_m,
        lateral_sd_m=lateral_sd_m,
        lateral_source="feet",
    )


def measured(*args, **kw) -> Motion:
    found = measure(*args, **kw)
    assert isinstance(found, Motion), found
    return found


def refused(*args, code, **kw) -> Failure:
    answer = measure(*args, **kw)
    assert isinstance(answer, Failure)
    assert not answer
    assert (answer.stage, answer.code) == ("motion", code)
    return answer


@pytest.fixture(scope="module")
def p(world: SimpleNamespace):
    return world.parameters(distance_m=12.0, x_m=7.0)


T = np.arange(0, 1.7, 1 / 120)


# --- exact --------------------------------------------------------------------------------------


@pytest.mark.parametrize("side", [1, -1])
@pytest.mark.parametrize("lateral_m", [0.61, 0.95])
def test_positions_are_exact_without_noise(world: SimpleNamespace, side, lateral_m) -> None:
    """From either side, at the runner's own y, and z too."""
    p = world.parameters(side=side, distance_m=12.0, x_m=7.0, turn_deg=5.0, k1=-0.08)
    x = flying(T)
    found = measured(
        film(p, T, x, y_m=lateral_m, z_m=1.02), world.known(p), world.LANE, steps=steps(lateral_m=lateral_m)
    )
    assert found.x_m == pytest.approx(x, abs=1e-7)
    assert found.z_m == pytest.approx(np.full(T.size, 1.02), abs=1e-7)
    assert found.t_s == pytest.approx(T)
    inside = found.inside
    assert found.smooth_x_m[inside] == pytest.approx(x[inside], abs=2e-3)
    assert found.v_mps[inside] == pytest.approx(LAW.speed(T + 2.5)[inside], abs=0.02)
    assert found.a_mps2[inside] == pytest.approx(LAW.acceleration(T + 2.5)[inside], abs=0.05)


def test_without_steps_the_lane_centre_is_taken(world: SimpleNamespace, p) -> None:
    lane = Lane(centre_y_m=1.83)
    found = measured(film(p, T, flying(T), y_m=1.83), world.known(p), lane, steps=NO_STEPS)
    assert found.x_m == pytest.approx(flying(T), abs=1e-7)


def test_uneven_times_are_taken_as_they_are(world: SimpleNamespace, p) -> None:
    """A phone that stumbles: jitter and lost frames. Taken as even, speed would be off by 8 %."""
    rng = np.random.default_rng(1)
    t = T + rng.uniform(-0.3, 0.3, T.size) / 120
    t = t[rng.random(t.size) > 0.08]
    found = measured(film(p, t, flying(t)), world.known(p), world.LANE, steps=steps())
    inside = found.inside
    assert found.v_mps[inside] == pytest.approx(LAW.speed(t + 2.5)[inside], abs=0.02)
    assert found.a_mps2[inside] == pytest.approx(LAW.acceleration(t + 2.5)[inside], abs=0.06)


def test_rows_cut_by_the_edge_are_left_out(world: SimpleNamespace, p) -> None:
    whole = (T > 0.1) & (T < 1.6)
    found = measured(film(p, T, flying(T), whole=whole), world.known(p), world.LANE, steps=steps())
    assert found.t_s == pytest.approx(T[whole])


@settings(derandomize=True, deadline=None, max_examples=10)
@given(st.floats(-500, 500), st.floats(0, 3000))
def test_place_and_clock_may_start_anywhere(world, shift_m, shift_s) -> None:
    """Marks counted from elsewhere, or a pass late in a long clip: x and t shift, nothing else."""
    p = world.parameters(distance_m=12.0, x_m=7.0)
    t = T[::3]
    plain = measured(film(p, t, flying(t)), world.known(p), world.LANE, steps=steps())
    moved = film(p, t, flying(t))
    moved = replace(moved, t_s=t + shift_s)
    found = measured(moved, world.known(p + shift_m * np.eye(9)[3]), world.LANE, steps=steps())
    assert found.x_m == pytest.approx(plain.x_m + shift_m, abs=1e-6)
    assert found.v_mps == pytest.approx(plain.v_mps, abs=1e-4)
    assert found.v_sd_mps == pytest.approx(plain.v_sd_mps, rel=1e-3)


def test_a_mirrored_course_gives_mirrored_x(world: SimpleNamespace, p) -> None:
    """Picture and world mirrored: x and v change sign; sizes of errors stay."""
    flip = np.array([-1.0, 1.0, 1.0])
    mirrored = np.concatenate([p[:3], p[3:6] * flip, [np.pi - p[6], p[7], -p[8]]])
    track = film(p, T, flying(T))
    turned = replace(track, uv_px=np.column_stack([SIZE[0] - 1 - track.uv_px[:, 0], track.uv_px[:, 1]]), direction=-1)
    plain = measured(track, world.known(p), world.LANE, steps=steps())
    found = measured(turned, world.known(mirrored), world.LANE, steps=steps())
    assert found.x_m == pytest.approx(-plain.x_m, abs=1e-7)
    assert found.v_mps == pytest.approx(-plain.v_mps, abs=1e-6)
    assert found.x_sd_m == pytest.approx(plain.x_sd_m)


def test_a_layout_k_times_as_large_gives_k_times_the_way(world: SimpleNamespace, p) -> None:
    k = 3.0
    larger = p.copy()
    larger[3:6] *= k
    plain = measured(film(p, T, flying(T)), world.known(p), world.LANE, steps=steps())
    found = measured(
        film(p, T, flying(T)), world.known(larger), Lane(centre_y_m=k * 0.61), steps=steps(lateral_m=k * 0.61)
    )
    assert found.x_m == pytest.approx(k * plain.x_m, abs=1e-6)
    assert found.x_sd_m == pytest.approx(k * plain.x_sd_m)


# --- errors, kept apart -------------------------------------------------------------------------


def by_difference(p, uv, y_m):
    """d x / d (nine camera parameters, y) (N, 10) for fixed pixels, by central differences."""
    step = np.array([1e-2, 1e-6, 1e-6, 1e-5, 1e-5, 1e-5, 1e-7, 1e-7, 1e-7, 1e-5])

    def x(q):
        return optics.to_plane(q[:9], uv, SIZE, axis=1, value_m=q[9])[:, 0]

    at = np.append(p, y_m)
    return np.column_stack([(x(at + d) - x(at - d)) / (2 * np.max(d)) for d in np.diag(step)])


def test_shared_columns_are_those_of_camera_and_lateral_position(world: SimpleNamespace, p) -> None:
    """S S^T against finite differences of x by every camera parameter, times the camera's (full) covariance."""
    rng = np.random.default_rng(2)
    mix = np.linalg.qr(rng.standard_normal((9, 9)))[0]
    cov = np.diag(world.CAMERA_SD) @ mix @ np.diag(rng.uniform(0.2, 2.0, 9)) @ mix.T @ np.diag(world.CAMERA_SD)
    track = film(p, T, flying(T))
    found = measured(track, world.known(p, cov=cov), world.LANE, steps=steps(lateral_sd_m=0.07))
    slopes = by_difference(p, track.uv_px, 0.61)
    full = np.zeros((10, 10))
    full[:9, :9], full[9, 9] = cov, 0.07**2
    wanted = slopes @ full @ slopes.T
    assert found.shared_m @ found.shared_m.T == pytest.approx(wanted, rel=1e-4, abs=1e-9)
    assert len(found.shared_names) == found.shared_m.shape[1]
    lateral = found.shared_m[:, found.shared_names.index("lateral position")]
    assert np.abs(lateral) == pytest.approx(np.abs(slopes[:, 9]) * 0.07, rel=1e-5, abs=1e-8)


def test_independent_errors_are_those_of_the_pixels(world: SimpleNamespace, p) -> None:
    track = film(p, T, flying(T), sd_px=0.4)
    found = measured(track, world.known(p), world.LANE, steps=steps())
    moved = np.stack(
        [
            optics.to_plane(p, track.uv_px + d, SIZE, axis=1, value_m=0.61)[:, 0] - found.x_m
            for d in (np.array([0.4, 0]), np.array([0, 0.4]))
        ]
    )
    assert found.x_sd_m == pytest.approx(np.linalg.norm(moved, axis=0), rel=1e-3)


def test_the_crouch_has_a_column_of_its_own(world: SimpleNamespace, p) -> None:
    """From a standing start the outline's middle may wander about the mass centre: slowly, and not before the start."""
    t = np.arange(0, 2.4, 1 / 120)
    found = measured(film(p, t, standing(t)), world.known(p), world.LANE, steps=steps())
    column = found.shared_m[:, found.shared_names.index("posture")]
    assert np.all(column[t < 0.5] == 0)
    assert 0.02 < abs(column[-1]) < 0.1
    assert np.all(np.diff(np.abs(column)) >= 0)
    upright = measured(film(p, T, flying(T)), world.known(p), world.LANE, steps=steps())
    assert not np.any(upright.shared_m[:, upright.shared_names.index("posture")])


def test_ends_are_one_sided_and_say_so(world: SimpleNamespace, p) -> None:
    rng = np.random.default_rng(4)
    found = measured(film(p, T, flying(T), noise_px=0.3, rng=rng), world.known(p), world.LANE, steps=steps())
    half = 0.5 * found.window_s
    assert not found.inside[0]
    assert not found.inside[-1]
    assert np.all(found.inside[(T[0] + half + 0.01 < T) & (T[-1] - half - 0.01 > T)])
    assert not np.any(found.inside[(T[0] + half - 0.01 > T) | (T[-1] - half + 0.01 < T)])
    middle = np.median(found.v_sd_mps[found.inside])
    assert found.v_sd_mps[0] > 1.5 * middle
    assert found.v_sd_mps[-1] > 1.5 * middle
    # No padding: at the ends the curve is the parabola of the outermost full window.
    rows = T[0] + found.window_s + 1e-9 >= T
    parabola = np.polyfit(T[rows], found.x_m[rows], 2)
    assert found.v_mps[0] == pytest.approx(np.polyval(np.polyder(parabola), T[0]), abs=0.06)


# --- coverage -----------------------------------------------------------------------------------


REPS = 60
#: Of 60 intervals at 95 %, 53 or more cover with a probability of 99 % (binomial: 57 +- 1.7).
AT_LEAST = 53


def speed_errors(world, path, since, at_s, *, duration_s, start_s=None, seed):
    """Errors of v_mps over their sd (60, K) at the times `at_s`, every error drawn from its stated size.

    Camera parameters, the runner's y, pixel noise, and the outline's wobble about the mass centre. 0 where a row is
    not `inside`: nothing is claimed there.
    """
    rng = np.random.default_rng(seed)
    t = np.arange(0, duration_s, 1 / 60)
    rows = np.searchsorted(t, np.array(at_s) - 1e-9)
    sd = world.CAMERA_SD * np.array([6, 1, 1, 1, 1, 1, 1, 1, 1])  # 12 px of 1500: most of a percent of scale
    truth = world.parameters(distance_m=12.0, x_m=7.0)
    z = []
    for _ in range(REPS):
        p = truth + sd * rng.standard_normal(9)
        y = 0.61 + 0.08 * rng.standard_normal()
        x = path(t) + world.wobble(t, rng, start_s=start_s, rate_hz=4.4)
        track = film(truth, t, x, y_m=y, noise_px=0.3, rng=rng)
        found = measured(track, world.known(p, cov=np.diag(sd**2)), world.LANE, steps=steps())
        z.append(np.where(found.inside, (found.v_mps - LAW.speed(t + since)) / found.v_sd_mps, 0.0)[rows])
    return np.array(z)


@pytest.mark.parametrize(
    ("path", "since", "at_s", "duration_s"),
    [(standing, -0.5, (1.0, 1.3, 1.6, 2.0), 2.3), (flying, 2.5, (0.3, 0.6, 1.0, 1.4), 1.7)],
    ids=["standing", "flying"],
)
def test_speed_intervals_cover(world: SimpleNamespace, path, since, at_s, duration_s) -> None:
    """v_mps +- 1.96 v_sd_mps against the truth, from the second step on."""
    z = speed_errors(world, path, since, at_s, duration_s=duration_s, seed=21)
    assert np.count_nonzero(np.abs(z) < 1.96, axis=0).min() >= AT_LEAST
    # And not by being useless: no more than three times too wide.
    assert np.sqrt(np.mean(z**2, axis=0)).min() > 0.33


def test_speed_intervals_cover_the_start(world: SimpleNamespace) -> None:
    """The same around first movement, where a window lies over the kink and the outline changes most.

    Rows that cannot say what the speed is must be wide, or not `inside`.
    """
    at_s = (0.4, 0.5, 0.55, 0.7, 0.8)
    z = speed_errors(world, standing, -0.5, at_s, duration_s=1.8, start_s=0.5, seed=22)
    assert np.count_nonzero(np.abs(z) < 1.96, axis=0).min() >= AT_LEAST


# --- the window ---------------------------------------------------------------------------------


def test_the_window_is_two_steps(world: SimpleNamespace, p) -> None:
    track = film(p, T, flying(T))
    for rate in (3.0, 4.5):
        found = measured(track, world.known(p), world.LANE, steps=steps(rate_hz=rate))
        assert found.window_s == pytest.approx(2 / rate)
        assert found.step_rate_hz == rate
    asked = measured(track, world.known(p), world.LANE, steps=steps(), settings=Settings(window_s=0.3))
    assert asked.window_s == 0.3


def test_two_steps_take_out_the_step_ripple(world: SimpleNamespace, p) -> None:
    """A 4.4 Hz ripple of 2 cm, 0.55 m/s in speed: less than a tenth of it is left."""
    x = flying(T) + 0.02 * np.sin(2 * np.pi * 4.4 * T)
    found = measured(film(p, T, x), world.known(p), world.LANE, steps=steps(rate_hz=4.4))
    left = (found.v_mps - LAW.speed(T + 2.5))[found.inside]
    assert np.abs(left).max() < 0.1 * 0.55 + 0.02


def test_plain_window_is_told(world: SimpleNamespace, p) -> None:
    found = measured(film(p, T, flying(T)), world.known(p), world.LANE, steps=NO_STEPS)
    (remark,) = (n for n in found.notices if n.code == "plain_window")
    assert found.window_s == 0.5
    assert "0.50 s" in remark.text


def test_beyond_marks_is_told(world: SimpleNamespace, p) -> None:
    """Marks end at 5 m; the runner goes on to 14 m."""
    points = [(x, y, 0.0) for x in (-1.0, 2.0, 5.0) for y in (0.0, 1.22)]
    marks = tuple(Mark(label=str(x), xyz_m=x, uv_px=np.array([100.0, 100.0])) for x in np.array(points))
    x = flying(T)
    found = measured(film(p, T, x), world.known(p, marks=marks), world.LANE, steps=steps())
    (remark,) = (n for n in found.notices if n.code == "beyond_marks")
    assert f"up to {x.max() - 5:.1f} m" in remark.text
    near = measured(film(p, T[:80], x[:80]), world.known(p, marks=marks), world.LANE, steps=steps())
    assert "beyond_marks" not in {n.code for n in near.notices}


# --- refusals -----------------------------------------------------------------------------------


def test_rays_miss(world: SimpleNamespace, p) -> None:
    """Pixels where the lens model has turned back are not measured from."""
    lens = p.copy()
    lens[1:3] = -0.9, 0.0
    track = film(p, T, flying(T))
    answer = refused(track, world.known(lens), world.LANE, steps=steps(), code="rays_miss")
    lost = int(answer.reason.split("In ")[1].split()[0])
    assert 0 < lost < T.size
    assert "left and right edge" in answer.hint


def test_too_short(world: SimpleNamespace, p) -> None:
    for count in (0, 6):
        whole = np.arange(T.size) < count
        answer = refused(
            film(p, T, flying(T), whole=whole), world.known(p), world.LANE, steps=NO_STEPS, code="too_short"
        )
        assert f"in {count} frames only" in answer.reason
        assert "at least 7" in answer.reason


def test_shorter_than_window(world: SimpleNamespace, p) -> None:
    t = T[T < 0.3]
    answer = refused(film(p, t, flying(t)), world.known(p), world.LANE, steps=steps(), code="shorter_than_window")
    assert f"{np.ptp(t):.2f} s" in answer.reason
    assert "0.45 s" in answer.reason


# --- Savitzky-Golay on its own ------------------------------------------------------------------


@settings(derandomize=True, deadline=None, max_examples=25)
@given(st.integers(0, 10**6), st.floats(0.08, 1.0))
def test_a_parabola_is_left_as_it_is(seed, window_s) -> None:
    """Any parabola on any rising times is reproduced with its derivatives, at the ends as well."""
    rng = np.random.default_rng(seed)
    t = np.cumsum(rng.uniform(0.5, 1.5, 60)) / 60
    c = rng.uniform(-5, 5, 3)
    found = savitzky_golay(t, window_s=window_s)
    assert found.position @ np.polyval(c, t) == pytest.approx(np.polyval(c, t), abs=1e-8)
    assert found.velocity @ np.polyval(c, t) == pytest.approx(np.polyval(np.polyder(c), t), abs=1e-6)
    assert found.acceleration @ np.polyval(c, t) == pytest.approx(np.full(60, 2 * c[0]), abs=1e-4)


def test_a_gap_is_bridged(world: SimpleNamespace, p) -> None:
    """A quarter of a second without the runner: rows on both sides keep a finite, flagged answer."""
    keep = (T < 0.7) | (T > 0.95)
    found = measured(film(p, T[keep], flying(T[keep])), world.known(p), world.LANE, steps=steps())
    inside = found.inside
    assert found.v_mps[inside] == pytest.approx(LAW.speed(T[keep] + 2.5)[inside], abs=0.03)


def test_too_few_points_for_the_polynomial() -> None:
    with pytest.raises(ValueError, match="3 points, at least 4 are needed"):
        savitzky_golay(np.array([0.0, 0.1, 0.2]), window_s=0.2)
