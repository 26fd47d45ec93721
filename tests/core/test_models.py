"""Sprint laws: against their differential equations, as properties, and their limits."""

from __future__ import annotations

import dataclasses
import time

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from vidkin.core.models import (
    ConstantAcceleration,
    ConstantPower,
    ConstantPowerDrag,
    ForceLinearQuadratic,
    ForceVelocity,
    ForceVelocityProfile,
    MonoExponential,
    force_velocity_profile,
    lumped_drag_coefficient,
    ratio_of_force,
)

FIXED = settings(derandomize=True, deadline=None)
T = np.linspace(0, 10, 251)

# Speeds of a run, from child to champion, and winds from storm to storm.
Z = st.floats(2, 40)
FORCE = st.floats(3, 12)
V0_LINE = st.floats(4, 14)
K = st.one_of(st.just(0.0), st.floats(1e-6, 0.02))
WIND = st.floats(-6, 6)
ROLLING = st.one_of(st.just(0.0), st.floats(0.1, 12))
TAU = st.floats(0.4, 3)


@st.composite
def laws(draw):
    kind = draw(st.integers(0, 4))
    v0 = draw(ROLLING)
    if kind == 0:
        return ConstantPower(Z=draw(Z), v0=v0)
    if kind == 1:
        return ConstantPowerDrag(Z=draw(Z), k_drag=draw(K), v0=v0)
    if kind == 2:
        return MonoExponential(v_max=draw(V0_LINE), tau=draw(TAU), v0=v0)
    if kind == 3:
        return ForceVelocity(F0=draw(FORCE), V0=draw(V0_LINE), k_drag=draw(K), wind=draw(WIND), v0=v0)
    return ConstantAcceleration(v0=v0, a=draw(st.floats(0.01, 5)))


def integrate(acceleration, v0):
    """Position and speed at `T` by an independent integrator."""
    with np.errstate(over="raise", divide="raise", invalid="raise"):
        path = solve_ivp(
            lambda _, y: [y[1], acceleration(y[1])], (0, 10), [0, v0], t_eval=T, rtol=1e-12, atol=1e-13, method="DOP853"
        )
    assert path.success
    return path.y


def assert_solves(law, acceleration, tol=1e-9):
    x, v = integrate(acceleration, law.v0)
    assert np.abs(law.position(T) - x).max() < tol
    assert np.abs(law.speed(T) - v).max() < tol
    moving = law.speed(T) > 0
    assert np.abs(law.acceleration(T) - acceleration(law.speed(T)))[moving].max() < 1e-9


@pytest.mark.parametrize("v0", [0.5, 6.0, 15.0])
@pytest.mark.parametrize("k", [0.0, 1e-9, 1e-4, 0.003, 0.3])
def test_constant_power_with_drag_solves_its_equation(k, v0):
    assert_solves(ConstantPowerDrag(Z=12.0, k_drag=k, v0=v0), lambda v: 12 / v - k * v * v)


@pytest.mark.parametrize("k", [1e-9, 0.003, 0.02])
def test_constant_power_with_drag_from_rest_solves_its_equation(k):
    """From rest v'(0) is infinite: integrate d(v^2/2)/dt = Z - k v^3 in w = v^2/2 instead."""
    path = solve_ivp(
        lambda _, y: [np.sqrt(2 * max(y[1], 0)), 12 - k * (2 * max(y[1], 0)) ** 1.5],
        (0, 10),
        [0, 0],
        t_eval=T,
        rtol=1e-12,
        atol=1e-13,
        method="DOP853",
    )
    law = ConstantPowerDrag(Z=12.0, k_drag=k)
    assert np.abs(law.speed(T) ** 2 / 2 - path.y[1]).max() < 1e-9
    assert np.abs(law.position(T) - path.y[0]).max() < 2e-7  # sqrt(w) at 0 costs the integrator digits there


@pytest.mark.parametrize("v0", [0.0, 4.0, 14.0])
def test_mono_exponential_solves_its_equation(v0):
    assert_solves(MonoExponential(v_max=9.0, tau=1.2, v0=v0), lambda v: (9 - v) / 1.2)


@pytest.mark.parametrize("v0", [0.0, 3.0, 14.0])
@pytest.mark.parametrize("wind", [-3.0, 0.0, 2.0, 9.9, 10.0, 12.0])
@pytest.mark.parametrize("k", [0.0, 1e-9, 0.003, 0.1])
def test_force_velocity_solves_its_equation_in_any_wind(k, wind, v0):
    law = ForceVelocity(F0=8.0, V0=10.0, k_drag=k, wind=wind, v0=v0)
    # The integrator loses a digit at the kink of u|u| that a strong tailwind puts into its path.
    tol = 1e-8 if k == 0.1 and wind > 0 else 1e-9
    assert_solves(law, lambda v: 8 * (1 - v / 10) - k * (v - wind) * np.abs(v - wind), tol)
    assert abs(law.speed(60.0) - law.terminal_speed) < 1e-9


def test_force_velocity_with_an_oscillating_root_solves_its_equation():
    """b^2 < 4 k |f|: weak legs in a gale; the exponentials of the closed form turn into circular functions."""
    law = ForceVelocity(F0=1.0, V0=10.0, k_drag=0.5, wind=4.0)
    assert (1.0 / 10) ** 2 < 4 * 0.5 * 1.0 * (1 - 4 / 10)
    assert_solves(law, lambda v: 1 * (1 - v / 10) - 0.5 * (v - 4) * np.abs(v - 4))


def test_constant_acceleration_stops_at_rest():
    law = ConstantAcceleration(v0=4.0, a=-2.0)
    assert law.position(np.array([1.0, 2.0, 5.0])).tolist() == [3.0, 4.0, 4.0]
    assert law.speed(np.array([1.0, 2.0, 5.0])).tolist() == [2.0, 0.0, 0.0]
    assert law.acceleration(np.array([1.0, 5.0])).tolist() == [-2.0, 0.0]
    assert law.time_at(4.0) == pytest.approx(2.0)
    with pytest.raises(ValueError, match=r"ConstantAcceleration: position 4.1 m is never reached \(0 m to 4 m are\)"):
        law.time_at(4.1)


def test_a_runner_who_never_moves_reaches_only_the_start():
    law = ConstantAcceleration(v0=0.0, a=0.0)
    assert law.time_at(0.0) == 0.0
    with pytest.raises(ValueError, match=r"position 1 m is never reached"):
        law.time_at(1.0)


@FIXED
@given(laws(), st.floats(0.05, 9))
def test_speed_and_acceleration_are_derivatives(law, t):
    """Central differences of five points; the law is smooth at t > 0 except where a tailwind stops pushing."""
    h = 1e-3
    at = t + h * np.array([-2, -1, 0, 1, 2])
    if isinstance(law, ForceVelocity):
        relative = law.speed(at) - law.wind
        assume(np.all(relative > 0) or np.all(relative < 0))
    weights = np.array([1, -8, 0, 8, -1]) / (12 * h)
    scale = 1e-6 * (1 + abs(law.acceleration(t)))
    assert weights @ law.position(at) == pytest.approx(law.speed(t), abs=scale)
    assert weights @ law.speed(at) == pytest.approx(law.acceleration(t), abs=2e-5 * (1 + abs(law.acceleration(t))))


@FIXED
@given(laws(), st.floats(0.001, 20))
def test_time_at_undoes_position(law, t):
    x = law.position(t)
    assert law.time_at(x) == pytest.approx(t, rel=1e-9, abs=1e-9)
    grid = t * np.linspace(0, 1, 7)
    assert np.allclose(law.time_at(law.position(grid)), grid, rtol=1e-9, atol=2e-8)


@FIXED
@given(laws(), st.floats(0, 10), st.floats(1e-3, 5))
def test_position_rises(law, t, later):
    assert law.position(t + later) > law.position(t) >= 0


@FIXED
@given(laws(), st.floats(-5, -1e-9))
def test_at_rest_before_the_start(law, t):
    assert law.position(t) == law.speed(t) == law.acceleration(t) == 0.0
    assert law.position(0.0) == pytest.approx(0.0, abs=1e-12)
    assert law.speed(0.0) == pytest.approx(law.v0, abs=1e-12)


@FIXED
@given(laws())
def test_shapes_scalars_and_time_that_is_not_a_number(law):
    grid = np.linspace(-1, 3, 12).reshape(3, 4)
    for curve in (law.position, law.speed, law.acceleration):
        assert curve(grid).shape == (3, 4)
        assert f"{curve(1.0):.3f}" == f"{curve(np.array([1.0]))[0]:.3f}"
        with np.errstate(invalid="ignore"):
            assert np.isnan(curve(np.nan)), "a missing time must not look like rest"
    assert law.time_at(np.array([[1.0, 2.0]])).shape == (1, 2)


@FIXED
@given(laws(), st.sampled_from([-1e-9, -3.0, np.inf, np.nan]))
def test_positions_never_reached(law, x):
    with pytest.raises(ValueError, match=rf"{type(law).__name__}: position .* m is never reached"):
        law.time_at([1.0, x])


@FIXED
@given(Z, ROLLING)
def test_drag_that_vanishes_leaves_constant_power(z, v0):
    plain, almost = ConstantPower(Z=z, v0=v0), ConstantPowerDrag(Z=z, k_drag=1e-12, v0=v0)
    none = ConstantPowerDrag(Z=z, k_drag=0.0, v0=v0)
    for name in ("position", "speed"):
        assert np.allclose(getattr(almost, name)(T), getattr(plain, name)(T), rtol=1e-8, atol=1e-9)
        assert np.array_equal(getattr(none, name)(T), getattr(plain, name)(T))
    assert np.array_equal(none.acceleration(T), plain.acceleration(T))
    x = np.array([0.0, 1.0, 50.0])
    assert np.allclose(almost.time_at(x), plain.time_at(x), rtol=1e-9, atol=1e-9)
    assert np.array_equal(none.time_at(x), plain.time_at(x))
    assert np.allclose(almost.speed_at(x), none.speed_at(x), rtol=1e-9)


@FIXED
@given(Z, ROLLING)
def test_power_that_vanishes_against_speed_leaves_steady_running(z, v0):
    """Small Z with a rolling start must not lose its digits."""
    assume(v0 > 0)
    law = ConstantPower(Z=1e-12 * z, v0=v0)
    assert np.allclose(law.position(T), v0 * T + 0.5e-12 * z / v0 * T * T, rtol=1e-14, atol=1e-14)


@FIXED
@given(FORCE, V0_LINE, WIND, ROLLING)
def test_force_velocity_without_drag_is_mono_exponential(f0, v_line, wind, v0):
    plain = MonoExponential(v_max=v_line, tau=v_line / f0, v0=v0)
    for k, tol in ((0.0, 1e-11), (1e-10, 1e-6)):
        law = ForceVelocity(F0=f0, V0=v_line, k_drag=k, wind=wind, v0=v0)
        assert np.allclose(law.position(T), plain.position(T), rtol=0, atol=tol)
        assert np.allclose(law.speed(T), plain.speed(T), rtol=0, atol=tol)


@FIXED
@given(FORCE, V0_LINE, st.floats(1e-4, 0.02), WIND, ROLLING)
def test_force_velocity_is_continuous_in_the_wind(f0, v_line, k, wind, v0):
    """Also through w = 0, w = v0 and w = V0, where the closed form changes branch."""
    for at in (wind, 0.0, v0, v_line):
        curves = [ForceVelocity(F0=f0, V0=v_line, k_drag=k, wind=at + d, v0=v0).position(T) for d in (-1e-7, 0.0, 1e-7)]
        assert np.abs(curves[2] - curves[0]).max() < 1e-5
        assert np.abs(curves[2] + curves[0] - 2 * curves[1]).max() < 1e-10


@FIXED
@given(FORCE, V0_LINE, st.floats(1e-4, 0.02), st.floats(0.1, 6))
def test_wind_helps_and_hinders(f0, v_line, k, wind):
    behind, calm, ahead = (ForceVelocity(F0=f0, V0=v_line, k_drag=k, wind=w) for w in (wind, 0.0, -wind))
    assert behind.time_at(60.0) < calm.time_at(60.0) < ahead.time_at(60.0)
    assert behind.terminal_speed > calm.terminal_speed > ahead.terminal_speed


@pytest.mark.parametrize("side", [-1, 1])
def test_constant_power_with_drag_is_continuous_at_terminal_speed(side):
    law = ConstantPowerDrag(Z=12.0, k_drag=0.01)
    steady = dataclasses.replace(law, v0=law.terminal_speed)
    assert np.allclose(steady.position(T), law.terminal_speed * T, rtol=1e-12)
    near = dataclasses.replace(law, v0=law.terminal_speed + side * 1e-9)
    assert np.allclose(near.position(T), steady.position(T), rtol=0, atol=1e-8)
    assert np.all(side * near.acceleration(T) <= 0)


def test_terminal_speeds():
    assert ConstantPowerDrag(Z=12.5, k_drag=0.003125).terminal_speed == pytest.approx((12.5 / 0.003125) ** (1 / 3))
    assert ConstantPowerDrag(Z=12.5, k_drag=0.0).terminal_speed == float("inf")
    assert MonoExponential(v_max=9.0, tau=1.0).terminal_speed == 9.0
    assert ForceVelocity(F0=8.0, V0=10.0, k_drag=0.0).terminal_speed == pytest.approx(10.0)


def test_acceleration_at_rest_under_constant_power_is_infinite():
    for law in (ConstantPower(Z=12.0), ConstantPowerDrag(Z=12.0, k_drag=0.003), ConstantPowerDrag(Z=12.0, k_drag=0.0)):
        assert law.acceleration(0.0) == np.inf
        assert np.isfinite(law.acceleration(1e-6))


def test_speed_at_a_place_agrees_with_speed_in_time():
    law = ConstantPowerDrag(Z=15.0, k_drag=0.004, v0=2.0)
    x = np.linspace(0, 80, 30)
    assert np.allclose(law.speed_at(x), law.speed(law.time_at(x)), rtol=1e-12)


def test_laws_are_fast_enough_to_be_fitted():
    """600 points in a millisecond on the machine this was written on; ten times that is still a useful bound."""
    t = np.linspace(0, 8, 600)
    for law in (ConstantPowerDrag(Z=12.0, k_drag=0.003), ForceVelocity(F0=8.0, V0=10.0, k_drag=0.003, wind=2.0)):
        law.position(t)
        took = []
        for _ in range(5):
            begun = time.perf_counter()
            law.position(t)
            took.append(time.perf_counter() - begun)
        assert min(took) < 0.01


LAWS = (ConstantPower, ConstantPowerDrag, MonoExponential, ForceVelocity, ConstantAcceleration)


def test_every_law_has_its_name_and_one_line_of_words():
    assert len({law.name for law in LAWS}) == len(LAWS)
    for law in LAWS:
        assert "\n" not in law.words
        assert law.words.endswith(".")
        assert law.__dataclass_params__.frozen
        assert not hasattr(law, "__dict__") or "__slots__" in vars(law)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ConstantPower(Z=0.0), r"ConstantPower: Z = 0.0 must be above 0"),
        (lambda: ConstantPower(Z=float("nan")), r"ConstantPower: Z = nan must be finite"),
        (lambda: ConstantPower(Z=10.0, v0=-1.0), r"ConstantPower: v0 = -1.0 must not be below 0"),
        (lambda: ConstantPowerDrag(Z=10.0, k_drag=-0.1), r"ConstantPowerDrag: k_drag = -0.1 must not be below 0"),
        (lambda: MonoExponential(v_max=9.0, tau=0.0), r"MonoExponential: tau = 0.0 must be above 0"),
        (lambda: ForceVelocity(F0=8.0, V0=-1.0, k_drag=0.0), r"ForceVelocity: V0 = -1.0 must be above 0"),
        (lambda: ForceVelocity(F0=8.0, V0=9.0, k_drag=0.0, wind=np.inf), r"ForceVelocity: wind = inf must be finite"),
        (
            lambda: ForceVelocity(F0=3.0, V0=9.0, k_drag=0.01, wind=-20.0),
            r"ForceVelocity: F0 = 3.0 N/kg does not move the runner against wind = -20.0 m/s",
        ),
        (lambda: ForceLinearQuadratic(F0=8.0, gamma=0.0, sigma=0.1), r"gamma = 0.0 must be above 0"),
        (lambda: ConstantAcceleration(v0=1.0, a=np.nan), r"ConstantAcceleration: a = nan must be finite"),
        (
            lambda: lumped_drag_coefficient(2000.0, 0.0, density_kg_m3=1.2, area_m2=0.5),
            r"lumped_drag_coefficient: speed_mps = 0.0 must be above 0",
        ),
        (
            lambda: force_velocity_profile(9.0, 1.2, k_drag=0.0, window_s=(0.0, 4.0), step_s=0.0),
            r"force_velocity_profile: step_s = 0.0 must be above 0",
        ),
        (
            lambda: force_velocity_profile(9.0, 1.2, k_drag=0.0, window_s=(0.0, 0.31)),
            r"window_s = \(0.0, 0.31\) with step_s = 0.01 has fewer than 3 samples from 0.3 s on",
        ),
    ],
)
def test_parameters_out_of_range(make, message):
    with pytest.raises(ValueError, match=message):
        make()


@FIXED
@given(FORCE, st.floats(0.3, 2), st.floats(1e-4, 0.02))
def test_force_linear_quadratic_round_trip(f0, gamma, sigma):
    law = ForceLinearQuadratic(F0=f0, gamma=gamma, sigma=sigma)
    back = ForceLinearQuadratic.from_speeds(law.U, law.V, rate=law.rate)
    assert (back.F0, back.gamma, back.sigma) == pytest.approx((f0, gamma, sigma), rel=1e-9)
    assert sigma * law.U * law.V == pytest.approx(f0)
    same = law.force_velocity()
    # The paper's own closed form, written out independently of ours.
    e = np.exp(-law.rate * T)
    x = law.U * T + (law.U + law.V) / law.rate * np.log((law.V + law.U * e) / (law.U + law.V))
    assert np.allclose(same.speed(T), law.U * law.V * (1 - e) / (law.V + law.U * e), rtol=1e-9, atol=1e-9)
    assert np.allclose(same.position(T), x, rtol=1e-9, atol=1e-9)


def test_force_linear_quadratic_without_quadratic_part_has_one_root():
    law = ForceLinearQuadratic(F0=8.0, gamma=0.8, sigma=0.0)
    assert (law.U, law.V, law.rate) == pytest.approx((10.0, float("inf"), 0.8))


# --- force-velocity profile ---------------------------------------------------------------------


@FIXED
@given(V0_LINE, TAU, st.floats(0.5, 3), st.floats(3.1, 6))
def test_profile_without_drag_is_the_line_itself(v_max, tau, first, last):
    """No drag: F = (v_max - v)/tau is straight, so any window gives the same F0, V0, P_max."""
    profile = force_velocity_profile(v_max, tau, k_drag=0.0, window_s=(first, last))
    assert isinstance(profile, ForceVelocityProfile)
    found = (profile.F0, profile.V0, profile.P_max)
    assert found == pytest.approx((v_max / tau, v_max, v_max**2 / (4 * tau)), rel=1e-6)
    assert profile.slope == pytest.approx(-1 / tau, rel=1e-6)
    assert profile.window_s == (first, last)


def test_profile_depends_on_window_and_wind_as_it_must():
    short = force_velocity_profile(9.0, 1.2, k_drag=0.0037, window_s=(0.0, 4.0))
    long = force_velocity_profile(9.0, 1.2, k_drag=0.0037, window_s=(0.0, 6.0))
    assert short.V0 < long.V0
    calm, behind = (force_velocity_profile(9.0, 1.2, k_drag=0.0037, window_s=(0, 6), wind=w) for w in (0.0, 2.0))
    assert behind.V0 < calm.V0, "the same speeds with a tailwind need less force at speed"


def test_ratio_of_force():
    assert ratio_of_force(9.80665) == pytest.approx(np.sqrt(0.5))
    assert ratio_of_force([0.0, 3.0], g_mps2=4.0).tolist() == pytest.approx([0.0, 0.6])


def test_lumped_drag_says_what_it_is():
    lumped = lumped_drag_coefficient(2000.0, 10.0, density_kg_m3=1.2, area_m2=0.5)
    assert lumped.force_n == pytest.approx(200.0)
    assert 0.5 * 1.2 * 10.0**2 * lumped.coefficient * 0.5 == pytest.approx(lumped.force_n)
    assert "lumps the body's own losses" in lumped.words
    assert "not an aerodynamic drag coefficient" in lumped.words
