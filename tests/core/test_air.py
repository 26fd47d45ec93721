"""Air: properties and error messages (published values are in tests/reference)."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vidkin.core import air

FIXED = settings(derandomize=True, deadline=None)
TEMPERATURES = st.floats(-40, 60)
PRESSURES = st.floats(40000, 115000)
HUMIDITIES = st.floats(0, 100)


@FIXED
@given(TEMPERATURES, PRESSURES, HUMIDITIES)
def test_density_agrees_with_the_short_formula(t, p, h):
    """Two independent formulas; OIML R 111-1 E.3 is stated to 2e-4 only in a laboratory, hence the wide bound."""
    if t < 0:
        h = 0.0  # the exponential of the short formula is meant for water above freezing
    if t > 35:
        t = 35.0
    assert air.density_simple(t, p, h) == pytest.approx(air.air_density(t, p, h), rel=2e-3)


@FIXED
@given(st.floats(0, 39), st.floats(80000, 105000), st.floats(0, 99))
def test_density_falls_with_warmth_and_moisture_and_rises_with_pressure(t, p, h):
    rho = air.air_density(t, p, h)
    assert air.air_density(t + 1, p, h) < rho
    assert air.air_density(t, p + 100, h) > rho
    assert air.air_density(t, p, h + 1) < rho


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ((-41, 101325, 50), r"temperature_c = -41 C is outside -40 to 60 C"),
        ((float("nan"), 101325, 50), r"temperature_c = nan C is outside"),
        ((20, 1013.25, 50), r"pressure_pa = 1013.25 Pa is outside 40000 to 115000 Pa"),
        ((20, 101325, 101), r"humidity_pct = 101 % is outside 0 to 100 %"),
    ],
)
def test_density_refuses_impossible_weather(arguments, message):
    with pytest.raises(ValueError, match=message):
        air.air_density(*arguments)


@pytest.mark.parametrize("altitude", [-501, 11001, float("nan")])
def test_standard_atmosphere_refuses_altitudes_outside_its_layer(altitude):
    with pytest.raises(ValueError, match=rf"altitude_m = {altitude} m is outside -500 to 11000 m"):
        air.standard_atmosphere(altitude)


@FIXED
@given(st.floats(-500, 10900))
def test_standard_atmosphere_is_hydrostatic(altitude):
    """dp/dz = -rho g with the gravity of that height, g0 (r0/(r0 + z))^2: the definition behind the tables."""
    step = 1.0
    above, below = air.standard_atmosphere(altitude + step)[1], air.standard_atmosphere(max(altitude - step, -500))[1]
    height = step + min(step, altitude + 500)
    middle = altitude + step - 0.5 * height
    rho = air.standard_atmosphere(middle)[2]
    gravity = 9.80665 * (6356766 / (6356766 + middle)) ** 2
    assert (above - below) / height == pytest.approx(-rho * gravity, rel=1e-6)


@pytest.mark.parametrize(
    ("stature", "mass", "message"),
    [(180, 75, r"stature_m = 180 m is outside 0.5 to 2.6 m"), (1.8, 5, r"mass_kg = 5 kg is outside 10 to 250 kg")],
)
def test_body_size_out_of_range(stature, mass, message):
    for function in (air.body_surface_area, air.frontal_area_m2, air.drag_area_m2):
        with pytest.raises(ValueError, match=message):
            function(stature, mass)


@FIXED
@given(st.floats(0, 15), st.floats(-10, 10), st.floats(0.8, 1.4), st.floats(0.2, 0.8))
def test_drag_force_is_odd_in_the_relative_speed(v, wind, rho, area):
    force = air.drag_force_n(v, wind, rho, area)
    assert np.sign(force) == np.sign((v - wind) * abs(v - wind))
    assert force == pytest.approx(-air.drag_force_n(wind, v, rho, area))


def test_a_tailwind_faster_than_the_runner_pushes():
    assert air.drag_force_n(2.0, 5.0, 1.2, 0.45) == pytest.approx(-0.5 * 1.2 * 0.45 * 9)
    assert air.drag_force_n(np.array([2.0, 5.0, 8.0]), 5.0, 1.2, 0.45).tolist() == pytest.approx([-2.43, 0.0, 2.43])


def test_the_drag_area_band_is_a_quarter_at_two_sd():
    assert 2 * air.DRAG_AREA_REL_SD == 0.25
