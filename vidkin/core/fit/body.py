"""Air and body of a rep -> the drag constant that the laws need, or why it cannot be had."""

from __future__ import annotations

from typing import Final

from vidkin.core import air as air_laws
from vidkin.core.fit.laws import Drag
from vidkin.notices import Failure, Notice, failure, notice
from vidkin.stages import Air, Athlete

#: One reading of a wind gauge says this much of the wind the runner meets [m/s] (Linthorne; READ).
_WIND_SD_MPS: Final = 0.9
_UNKNOWN_WIND_SD_MPS: Final = 1.5
_PLAIN_HUMIDITY: Final = 50.0


def drag_of(athlete: Athlete, air: Air) -> tuple[Drag | Failure, tuple[Notice, ...]]:
    """Drag constant rho CdA/(2 m) from body size (Arsac & Locatelli 2002) and air density (CIPM-2007).

    Humidity may be missing (it moves the density by less than 1 %) and so may wind; a notice says so. Mass,
    stature, temperature and pressure or altitude may not.
    """
    mass, stature, temperature = athlete.mass_kg, athlete.stature_m, air.temperature_c
    pressure_known = air.pressure_hpa is not None or air.altitude_m is not None
    if mass is None or stature is None or temperature is None or not pressure_known:
        wanted = {
            "[athlete] mass_kg": mass is not None,
            "[athlete] stature_m": stature is not None,
            "[air] temperature_c": temperature is not None,
            "[air] pressure_hpa or altitude_m": pressure_known,
        }
        return failure("no_body_or_air", missing=", ".join(k for k, there in wanted.items() if not there)), ()
    remarks: list[Notice] = []
    if air.pressure_hpa is not None:
        pressure_pa = 100 * air.pressure_hpa
    else:
        assert air.altitude_m is not None
        pressure_pa = air_laws.standard_atmosphere(air.altitude_m)[1]
    humidity = air.humidity_pct
    if humidity is None:
        humidity = _PLAIN_HUMIDITY
        remarks.append(notice("humidity_assumed", percent=humidity))
    if air.wind_mps is None:
        remarks.append(notice("wind_unknown", sd=_UNKNOWN_WIND_SD_MPS))
    density = air_laws.air_density(temperature, pressure_pa, humidity)
    area = air_laws.drag_area_m2(stature, mass)
    return (
        Drag(
            k_drag=density * area / (2 * mass),
            rel_sd=air_laws.DRAG_AREA_REL_SD,
            wind_mps=air.wind_mps or 0.0,
            wind_sd_mps=_UNKNOWN_WIND_SD_MPS if air.wind_mps is None else _WIND_SD_MPS,
            density_kg_m3=density,
            drag_area_m2=area,
            mass_kg=mass,
        ),
        tuple(remarks),
    )
