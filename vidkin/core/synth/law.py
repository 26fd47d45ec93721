"""The run's law, integrated: x(t), v(t), a(t) of the step-averaged centre of mass, and the air it runs through.

Deliberately independent of the closed forms elsewhere in the core, so that each checks the other.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import cast

import numpy as np
from scipy.integrate import solve_ivp

from vidkin.constants import ZERO_CELSIUS_K
from vidkin.core.synth.scene import Runner
from vidkin.stages import Air, Array

_LEAD_S = 1.0


def moist_air_density(air: Air) -> float:
    """Density of moist air [kg/m^3] (CIPM-2007: Picard et al., Metrologia 45 (2008) 149, eq. 1 and A1; READ-2)."""
    t, p, h = float(air.temperature_c or 0), 100.0 * float(air.pressure_hpa or 0), float(air.humidity_pct or 0) / 100
    kelvin = t + ZERO_CELSIUS_K
    saturation = np.exp(1.2378847e-5 * kelvin**2 - 1.9121316e-2 * kelvin + 33.93711047 - 6.3431645e3 / kelvin)
    x = h * (1.00062 + 3.14e-8 * p + 5.6e-7 * t * t) * saturation / p
    z = (
        1
        - (p / kelvin)
        * (
            1.58123e-6
            - 2.9331e-8 * t
            + 1.1043e-10 * t * t
            + (5.707e-6 - 2.051e-8 * t) * x
            + (1.9898e-4 - 2.376e-6 * t) * x * x
        )
        + (p / kelvin) ** 2 * (1.83e-11 - 0.765e-8 * x * x)
    )
    return float(1e-3 * 3.483740 * p / (z * kelvin) * (1 - 0.3780 * x))


def drag_constant(runner: Runner, air: Air) -> float:
    """k = rho CdA / (2 m) [1/m]."""
    return moist_air_density(air) * runner.drag_area_m2 / (2 * runner.mass_kg)


@dataclass(frozen=True, slots=True, kw_only=True)
class Sprint:
    """The integrated law; call the methods with clip times (N,) [s]."""

    start_s: float
    still: bool
    x0_m: float
    state: Callable[[Array], Array]
    acceleration: Callable[[Array], Array]

    def x(self, t_s: Array) -> Array:
        """Position along the lane (N,) [m]."""
        return np.asarray(self.state(self._clock(t_s))[0])

    def v(self, t_s: Array) -> Array:
        """Step-averaged speed (N,) [m/s]."""
        return np.asarray(self.state(self._clock(t_s))[1])

    def a(self, t_s: Array) -> Array:
        """Step-averaged acceleration (N,) [m/s^2]; zero before the first movement."""
        a = self.acceleration(self.v(t_s))
        return np.where(np.asarray(t_s) < self.start_s, 0.0, a) if self.still else a

    def _clock(self, t_s: Array) -> Array:
        since = np.asarray(t_s, dtype=np.float64) - self.start_s
        return np.maximum(since, 0.0) if self.still else since


def integrate(runner: Runner, air: Air, *, start_x_m: float, until_s: float) -> Sprint:
    """Integrate the law to 1e-11 with an 8th-order Runge-Kutta pair (scipy's DOP853) and dense output.

    A flying run is integrated from its state at t = 0 both forwards and one second backwards.
    """
    k, w = drag_constant(runner, air), float(air.wind_mps or 0.0)

    def acceleration(v: Array) -> Array:
        return np.asarray(runner.F0_n_kg * (1 - v / runner.V0_mps) - k * (v - w) * np.abs(v - w))

    def rates(_t: float, s: Array) -> Array:
        return np.array([s[1], acceleration(s[1])])

    still = runner.start == "standing"
    start_s = runner.first_movement_s if still else 0.0
    x0 = start_x_m - runner.set_back_m if still else runner.entry_x_m
    v0 = 0.0 if still else runner.entry_mps

    def solve(end_s: float) -> Callable[[Array], Array]:
        answer = solve_ivp(rates, (0.0, end_s), [x0, v0], method="DOP853", rtol=1e-11, atol=1e-11, dense_output=True)
        return cast("Callable[[Array], Array]", answer.sol)

    ahead = solve(max(until_s - start_s, 0.0) + _LEAD_S)
    if still:
        return Sprint(start_s=start_s, still=True, x0_m=x0, state=ahead, acceleration=acceleration)
    before = solve(-_LEAD_S)

    def both(t: Array) -> Array:
        t = np.atleast_1d(t)
        return np.asarray(np.where(t >= 0, ahead(np.maximum(t, 0)), before(np.minimum(t, 0))))

    return Sprint(start_s=0.0, still=False, x0_m=x0, state=both, acceleration=acceleration)
