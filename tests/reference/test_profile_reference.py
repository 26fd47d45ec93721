"""Force-velocity profile against worked examples and published accuracy (source and mark beside each)."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

from vidkin.core import air, uncertainty
from vidkin.core.models import ForceVelocity, MonoExponential, force_velocity_profile
from vidkin.core.uncertainty import Solution

# 760 torr and 20 C by the drag papers' formula, g = 9.81 (references section 2.4).
DENSITY = 1.20474
G = 9.81


def drag_kg_m(stature, mass):
    return 0.5 * DENSITY * air.drag_area_m2(stature, mass)


@pytest.mark.parametrize(
    ("run", "k_kg_m", "window", "f0_n", "f0_n_kg", "v0", "p_w", "p_w_kg", "rf_max", "d_rf"),
    [
        ((9.0, 1.20, 75, 1.80), 0.2801, (0, 4), 557.08, 7.428, 9.343, 1301.2, 17.35, 0.5126, -0.0710),
        ((9.0, 1.20, 75, 1.80), 0.2801, (0, 6), 556.20, 7.416, 9.361, 1301.7, 17.36, 0.5126, -0.0720),
        ((10.0, 1.25, 80, 1.85), 0.2937, (0, 6), 631.93, 7.899, 10.458, 1652.2, 20.65, 0.5410, -0.0674),
        ((8.5, 1.15, 60, 1.70), 0.2445, (0, 4), 439.18, 7.320, 8.822, 968.6, 16.14, 0.5030, -0.0747),
    ],
)
def test_worked_examples(run, k_kg_m, window, f0_n, f0_n_kg, v0, p_w, p_w_kg, rf_max, d_rf):
    """Samozino et al., Scand. J. Med. Sci. Sports 26 (2016) 648-658: method MEM, numbers CALC, every 0.01 s from 0.

    The whole way, from body size through drag area to the profile; half a printed unit.
    """
    v_max, tau, mass, stature = run
    k = drag_kg_m(stature, mass)
    assert k == pytest.approx(k_kg_m, abs=6e-5)
    profile = force_velocity_profile(v_max, tau, k_drag=k / mass, window_s=window, step_s=0.01, g_mps2=G)
    assert profile.F0 * mass == pytest.approx(f0_n, abs=0.011)
    assert pytest.approx(f0_n_kg, abs=6e-4) == profile.F0
    assert pytest.approx(v0, abs=6e-4) == profile.V0
    assert profile.P_max * mass == pytest.approx(p_w, abs=0.06)
    assert profile.P_max == pytest.approx(p_w_kg, abs=6e-3)
    assert profile.RF_max / 100 == pytest.approx(rf_max, abs=6e-5)
    assert pytest.approx(d_rf, abs=6e-5) == profile.D_RF / 100


def test_closed_form_companions():
    """Section 2.4, 9.0/1.20/75/1.80 (CALC): no drag; true zero of F(v); true peak of F v, 0.7 % below F0 V0/4."""
    mass, k = 75, drag_kg_m(1.80, 75)
    plain = force_velocity_profile(9.0, 1.2, k_drag=0.0, window_s=(0, 4), g_mps2=G)
    assert (plain.F0 * mass, plain.V0, plain.P_max * mass) == pytest.approx((562.5, 9.0, 1265.6), abs=0.03)

    def force(v):
        return mass * (9.0 - v) / 1.2 + k * v * v

    assert brentq(force, 9, 10) == pytest.approx(9.3957, abs=6e-5)
    peak = -minimize_scalar(lambda v: -force(v) * v, bounds=(1, 9), method="bounded").fun
    assert peak == pytest.approx(1292.4, abs=0.05)
    profile = force_velocity_profile(9.0, 1.2, k_drag=k / mass, window_s=(0, 4), g_mps2=G)
    assert peak / (profile.P_max * mass) == pytest.approx(1 - 0.007, abs=5e-4)


def test_regression_even_in_speed():
    """Least squares of F on v spread evenly over 0..v_max: F0 = m v_max/tau - k v_max^2/6, slope = -m/tau + k v_max.

    558.72 N, 9.315 m/s, 1301.15 W (CALC): another sampling of the same curve lies within the window's 0.2-2 %.
    """
    mass, k = 75, drag_kg_m(1.80, 75)
    f0, slope = mass * 9.0 / 1.2 - k * 9.0**2 / 6, -mass / 1.2 + k * 9.0
    assert f0 == pytest.approx(558.72, abs=0.01)
    assert -f0 / slope == pytest.approx(9.315, abs=6e-4)
    assert -f0 * f0 / slope / 4 == pytest.approx(1301.15, abs=0.02)
    profile = force_velocity_profile(9.0, 1.2, k_drag=k / mass, window_s=(0, 4), g_mps2=G)
    assert profile.F0 * mass == pytest.approx(f0, rel=0.02)
    assert pytest.approx(-f0 / slope, rel=0.02) == profile.V0


def test_peak_power_identity_on_published_means():
    """F0 638 N, V0 10.5 m/s, P_max 1680 W: group means of 9 sprinters (READ, abstract). F0 V0/4 within 0.5 % (CALC)."""
    law = ForceVelocity(F0=638 / 75, V0=10.5, k_drag=0.0)
    assert law.P_max * 75 == pytest.approx(1680, rel=0.005)


@pytest.mark.parametrize("f0", [6.0, 7.5, 9.0])
@pytest.mark.parametrize("v0", [8.5, 10.0, 11.5])
def test_profile_of_a_measured_run_recovers_the_force_line(f0, v0):
    """The method's published accuracy: bias < 5 % on F0, V0, P_max (READ); 10 % on the slope is ours.

    A runner with a straight force-velocity line against real drag is timed at 0.1 s steps with 0.1 m/s of noise; a
    mono-exponential law is fitted to the speeds and turned into a profile.
    """
    k = 0.0037
    truth = ForceVelocity(F0=f0, V0=v0, k_drag=k)
    t = np.arange(0.1, 6, 0.1)
    v = truth.speed(t) + 0.1 * np.random.default_rng(17).standard_normal(t.size)
    found = uncertainty.solve(
        lambda p: v - MonoExponential(v_max=np.exp(p[0]), tau=np.exp(p[1])).speed(t),
        np.log([9.0, 1.2]),
        scale_by_residual=True,
    )
    assert isinstance(found, Solution)
    profile = force_velocity_profile(*np.exp(found.parameters), k_drag=k, window_s=(0, 6))
    assert pytest.approx(f0, rel=0.05) == profile.F0
    assert pytest.approx(v0, rel=0.05) == profile.V0
    assert profile.P_max == pytest.approx(truth.P_max, rel=0.05)
    assert profile.slope == pytest.approx(-f0 / v0, rel=0.10)
