"""Air: density from the weather, the standard atmosphere, and the drag area of a runner (published formulas)."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from vidkin.constants import G_MPS2, STANDARD_ATMOSPHERE_PA, ZERO_CELSIUS_K
from vidkin.stages import Array

#: Relative sd of a drag area from body size [-]. Published drag areas of runners span about +-25 % around the formula
#: (references: 0.36-0.56 m^2 and more); read here as a 95 % band, hence half of it as one sd.
DRAG_AREA_REL_SD: Final = 0.125

#: Drag coefficient of a runner [-]: van Ingen Schenau et al., Eur. J. Appl. Physiol. 63 (1991) 255, used by
#: Arsac & Locatelli, J. Appl. Physiol. 92 (2002) 1781 (value from memory).
DRAG_COEFFICIENT: Final = 0.9

#: Frontal area over body surface area [-]: Pugh, J. Physiol. 213 (1971) 255 (value from memory; a secondary text
#: credits the factor to Pugh 1970).
FRONTAL_SHARE: Final = 0.266

#: Mole fraction of carbon dioxide in air [-] (CIPM-2007's reference value).
CARBON_DIOXIDE: Final = 0.0004

# US Standard Atmosphere 1976 = ISO 2533 below 11 km.
_T0_K = 288.15
_LAPSE_K_M = -0.0065
_R_STAR = 8314.32  # J/(kmol K): the 1976 value, not today's
_M_KG_KMOL = 28.9644
_EARTH_RADIUS_M = 6356766.0
_TROPOPAUSE_M = 11000.0


def _in_range(what: str, value: float, low: float, high: float, unit: str) -> None:
    if not low <= value <= high:  # also catches nan
        raise ValueError(f"{what} = {value} {unit} is outside {low:g} to {high:g} {unit}")


def air_density(temperature_c: float, pressure_pa: float, humidity_pct: float) -> float:
    """Density of moist air [kg/m^3], CIPM-2007.

    Picard, Davis, Glaeser, Fujii, Metrologia 45 (2008) 149, eq. (1) with the gas constant and molar mass folded in
    (constants READ-2): rho = 1e-3 [3.483740 + 1.4446 (x_CO2 - 0.0004)] p/(Z T) (1 - 0.3780 x_v).
    Stated for 600-1100 hPa and 15-27 C with relative sd 22e-6; outside it the terms stay smooth and the error small
    against anything a runner's drag is known to.

    Parameters
    ----------
    temperature_c : float
        Temperature [C], -40 to 60.
    pressure_pa : float
        Station pressure [Pa], 40000 to 115000; NOT the pressure of a weather report, which is reduced to sea level.
    humidity_pct : float
        Relative humidity [%], 0 to 100.

    Raises
    ------
    ValueError
        For a value out of range.
    """
    _in_range("temperature_c", temperature_c, -40, 60, "C")
    _in_range("pressure_pa", pressure_pa, 40000, 115000, "Pa")
    _in_range("humidity_pct", humidity_pct, 0, 100, "%")
    t, p, kelvin = temperature_c, pressure_pa, temperature_c + ZERO_CELSIUS_K
    # Saturation pressure, eq. (A1.1); enhancement factor, (A1.2); mole fraction of vapour, (A1.3).
    saturation = np.exp(1.2378847e-5 * kelvin**2 - 1.9121316e-2 * kelvin + 33.93711047 - 6.3431645e3 / kelvin)
    enhancement = 1.00062 + 3.14e-8 * p + 5.6e-7 * t**2
    x_v = humidity_pct / 100 * enhancement * saturation / p
    # Compressibility, eq. (A1.4).
    first = 1.58123e-6 - 2.9331e-8 * t + 1.1043e-10 * t**2
    mixed = (5.707e-6 - 2.051e-8 * t) * x_v + (1.9898e-4 - 2.376e-6 * t) * x_v**2
    z = 1 - p / kelvin * (first + mixed) + (p / kelvin) ** 2 * (1.83e-11 - 0.765e-8 * x_v**2)
    molar = 3.483740 + 1.4446 * (CARBON_DIOXIDE - 0.0004)
    return float(1e-3 * molar * p / (z * kelvin) * (1 - 0.3780 * x_v))


def density_simple(temperature_c: float, pressure_pa: float, humidity_pct: float) -> float:
    """Density of moist air [kg/m^3] by the short formula of OIML R 111-1 (2004), E.3 (READ-2).

    rho = (0.34848 p - 0.009 h e^(0.061 t))/(273.15 + t), p in hPa, h in %, t in C; for cross-checks of `air_density`.
    """
    vapour = 0.009 * humidity_pct * np.exp(0.061 * temperature_c)
    return float((0.34848 * pressure_pa / 100 - vapour) / (ZERO_CELSIUS_K + temperature_c))


def standard_atmosphere(altitude_m: float) -> tuple[float, float, float]:
    """Temperature [K], pressure [Pa] and density [kg/m^3] at a geometric altitude [m], -500 to 11000.

    US Standard Atmosphere 1976 = ISO 2533 below 11 km (READ-2): H = r0 z/(r0 + z), T = T0 + L H,
    p = p0 (T/T0)^(-g0 M/(R* L)), rho = p M/(R* T).

    Raises
    ------
    ValueError
        For an altitude out of range.
    """
    _in_range("altitude_m", altitude_m, -500, _TROPOPAUSE_M, "m")
    height = _EARTH_RADIUS_M * altitude_m / (_EARTH_RADIUS_M + altitude_m)
    kelvin = _T0_K + _LAPSE_K_M * height
    exponent = -G_MPS2 * _M_KG_KMOL / (_R_STAR * _LAPSE_K_M)
    pressure = STANDARD_ATMOSPHERE_PA * (kelvin / _T0_K) ** exponent
    return kelvin, pressure, pressure * _M_KG_KMOL / (_R_STAR * kelvin)


def body_surface_area(stature_m: float, mass_kg: float) -> float:
    """Body surface area [m^2], 0.2025 H^0.725 m^0.425 (Du Bois & Du Bois 1916, in metres; Arsac & Locatelli 2002).

    Raises
    ------
    ValueError
        For a stature outside 0.5-2.6 m or a mass outside 10-250 kg.
    """
    _in_range("stature_m", stature_m, 0.5, 2.6, "m")
    _in_range("mass_kg", mass_kg, 10, 250, "kg")
    return float(0.2025 * stature_m**0.725 * mass_kg**0.425)


def frontal_area_m2(stature_m: float, mass_kg: float) -> float:
    """Frontal area of a runner [m^2], 0.266 x body surface (Arsac & Locatelli, J. Appl. Physiol. 92 (2002) 1781)."""
    return FRONTAL_SHARE * body_surface_area(stature_m, mass_kg)


def drag_area_m2(stature_m: float, mass_kg: float) -> float:
    """Drag area Cd A [m^2] of a runner, 0.9 x frontal area (same source); its relative sd is `DRAG_AREA_REL_SD`."""
    return DRAG_COEFFICIENT * frontal_area_m2(stature_m, mass_kg)


def drag_force_n(v_mps: ArrayLike, wind_mps: ArrayLike, density_kg_m3: float, drag_area: float) -> Array:
    """Air drag [N], 1/2 rho CdA (v - w)|v - w|: above 0 it holds the runner back, below 0 a tailwind pushes.

    Newton's quadratic law with the wind `wind_mps` [m/s] along the lane, + a tailwind; `drag_area` [m^2].
    """
    relative = np.asarray(v_mps, dtype=np.float64) - np.asarray(wind_mps, dtype=np.float64)
    return (0.5 * density_kg_m3 * drag_area * relative * np.abs(relative))[()]
