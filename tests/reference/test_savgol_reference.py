"""Savitzky-Golay against scipy, the published coefficient tables, and closed forms of noise gain, bias and ripple."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import savgol_filter

from vidkin.core.models import MonoExponential
from vidkin.core.motion import savitzky_golay


def smoother(points, *, order=2, rate_hz=100.0, count=None):
    """A smoother of `points` points on even times, and the times."""
    t = np.arange(count or 3 * points) / rate_hz
    return savitzky_golay(t, window_s=(points - 1) / rate_hz, order=order), t


# --- scipy --------------------------------------------------------------------------------------


@pytest.mark.parametrize("rate_hz", [60.0, 119.88, 240.0])
@pytest.mark.parametrize(("points", "order"), [(7, 2), (31, 2), (61, 2), (15, 3), (21, 4)])
def test_even_times_equal_scipy(points, order, rate_hz):
    """scipy.signal.savgol_filter, the reference library, to 1e-9 of the values' size; ends by mode="interp" too."""
    rng = np.random.default_rng(points)
    found, t = smoother(points, order=order, rate_hz=rate_hz, count=150)
    y = 9 * t + np.sin(5 * t) + 0.01 * rng.standard_normal(t.size)
    for derivative, matrix in enumerate((found.position, found.velocity, found.acceleration)):
        wanted = savgol_filter(y, points, order, deriv=derivative, delta=1 / rate_hz, mode="interp")
        assert matrix @ y == pytest.approx(wanted, rel=1e-9, abs=1e-9 * np.abs(wanted).max())
    half = points // 2
    assert found.inside.tolist() == [False] * half + [True] * (t.size - 2 * half) + [False] * half


# --- published tables ---------------------------------------------------------------------------

#: Savitzky & Golay, Anal. Chem. 36 (1964) 1627, corrections Steinier et al. 44 (1972) 1906: READ-2, CALC exact
#: (references section 9.1). Points, order, derivative, numerators, divisor.
TABLES = [
    (5, 2, 0, (-3, 12, 17, 12, -3), 35),
    (5, 3, 0, (-3, 12, 17, 12, -3), 35),
    (7, 2, 0, (-2, 3, 6, 7, 6, 3, -2), 21),
    (9, 2, 0, (-21, 14, 39, 54, 59, 54, 39, 14, -21), 231),
    (11, 2, 0, (-36, 9, 44, 69, 84, 89, 84, 69, 44, 9, -36), 429),
    (5, 2, 1, (-2, -1, 0, 1, 2), 10),
    (7, 2, 1, (-3, -2, -1, 0, 1, 2, 3), 28),
    (9, 2, 1, (-4, -3, -2, -1, 0, 1, 2, 3, 4), 60),
    (11, 2, 1, (-5, -4, -3, -2, -1, 0, 1, 2, 3, 4, 5), 110),
    (5, 3, 1, (1, -8, 0, 8, -1), 12),
    (7, 3, 1, (22, -67, -58, 0, 58, 67, -22), 252),
    (7, 4, 1, (22, -67, -58, 0, 58, 67, -22), 252),
    (9, 3, 1, (86, -142, -193, -126, 0, 126, 193, 142, -86), 1188),
    (5, 2, 2, (2, -1, -2, -1, 2), 7),
    (7, 2, 2, (5, 0, -3, -4, -3, 0, 5), 42),
]


@pytest.mark.parametrize(("points", "order", "derivative", "numerators", "divisor"), TABLES)
def test_published_coefficients(points, order, derivative, numerators, divisor):
    """The answer to a unit impulse at each place of the window is that place's coefficient."""
    found, t = smoother(points, order=order, rate_hz=1.0)
    matrix = (found.position, found.velocity, found.acceleration)[derivative]
    middle, half = t.size // 2, points // 2
    answers = []
    for place in range(-half - 1, half + 2):
        impulse = np.zeros(t.size)
        impulse[middle + place] = 1.0
        answers.append((matrix @ impulse)[middle])
    wanted = np.concatenate([[0], np.array(numerators) / divisor, [0]])
    assert np.array(answers) == pytest.approx(wanted, abs=1e-12)


def test_derivatives_are_divided_by_the_step():
    for rate_hz in (50.0, 240.0):
        found, t = smoother(5, rate_hz=rate_hz)
        row = t.size // 2
        assert found.velocity[row, row + 2] == pytest.approx(0.2 * rate_hz)
        assert found.acceleration[row, row + 2] == pytest.approx(2 / 7 * rate_hz**2)


# --- noise, bias, ripple ------------------------------------------------------------------------


@pytest.mark.parametrize("points", [5, 7, 15, 25])
def test_noise_gain(points):
    """Variance out over variance in for white noise: closed forms of references section 9.2 (CALC-verified)."""
    n = points
    found, t = smoother(n, rate_hz=1.0)
    row = t.size // 2
    gains = [float(np.sum(m[row] ** 2)) for m in (found.position, found.velocity, found.acceleration)]
    assert gains[0] == pytest.approx(3 * (3 * n**2 - 7) / (4 * n * (n**2 - 4)))
    assert gains[1] == pytest.approx(12 / (n * (n**2 - 1)))
    assert gains[2] == pytest.approx(720 / (n * (n**2 - 1) * (n**2 - 4)))
    if n > 5:
        cubic = smoother(n, order=3, rate_hz=1.0)[0].velocity[row]
        wanted = 25 * (3 * n**4 - 18 * n**2 + 31) / (n * (n**2 - 1) * (n**2 - 4) * (n**2 - 9))
        assert float(np.sum(cubic**2)) == pytest.approx(wanted)


@pytest.mark.parametrize(
    ("rate_hz", "points", "sd_mps"),
    [(60, 15, 0.0359), (60, 31, 0.0120), (120, 31, 0.0241), (120, 61, 0.0087), (240, 61, 0.0175), (240, 121, 0.0062)],
)
def test_velocity_noise_of_one_centimetre(rate_hz, points, sd_mps):
    """Sd of velocity for 1 cm of white position noise (references section 9.2, CALC)."""
    found, t = smoother(points, rate_hz=rate_hz)
    row = found.velocity[t.size // 2]
    assert 0.01 * float(np.sqrt(np.sum(row**2))) == pytest.approx(sd_mps, abs=5.1e-5)


@pytest.mark.parametrize(("at_s", "bias_mps"), [(0.25, -0.0339), (1.0, -0.0186), (2.0, -0.0084), (4.0, -0.0017)])
def test_bias_of_the_quadratic_velocity(at_s, bias_mps):
    """x''' dt^2 (3 M^2 + 3 M - 1)/30: v_max 10, tau 1.25, 120 Hz, 61 points (references section 9.2, CALC, < 0.2 %)."""
    law, half = MonoExponential(v_max=10.0, tau=1.25), 30
    found, t = smoother(2 * half + 1, rate_hz=120.0, count=600)
    row = int(np.argmin(np.abs(t - at_s)))
    assert found.inside[row]
    got = float((found.velocity @ law.position(t))[row] - law.speed(t[row]))
    assert got == pytest.approx(bias_mps, abs=6e-5)
    jerk = -10.0 / 1.25**2 * np.exp(-t[row] / 1.25)
    assert got == pytest.approx(jerk / 120**2 * (3 * half**2 + 3 * half - 1) / 30, rel=2e-3)
    cubic = savitzky_golay(t, window_s=2 * half / 120, order=3)
    assert abs(float((cubic.velocity @ law.position(t))[row] - law.speed(t[row]))) < 3e-5


@pytest.mark.parametrize(("points", "share"), [(27, 0.29), (53, 0.078), (61, 0.030), (81, 0.032)])
def test_step_ripple_that_gets_through(points, share):
    """Share of a 4.5 Hz ripple at 120 Hz that a quadratic window lets through (references section 9.2, CALC)."""
    found, t = smoother(points, rate_hz=120.0, count=241)
    omega = 2 * np.pi * 4.5
    row = found.velocity[t.size // 2]
    answer = np.hypot(row @ np.cos(omega * t), row @ np.sin(omega * t)) / omega
    assert answer == pytest.approx(share, abs=0.006)
