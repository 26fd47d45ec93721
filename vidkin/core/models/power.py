"""Constant-power laws, without and with quadratic air drag, and the drag coefficient they tempt people to quote."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Final

import numpy as np
from numpy.typing import ArrayLike

from vidkin.core.models.law import reachable, require, since_start, started
from vidkin.stages import Array

_SQRT3 = float(np.sqrt(3.0))
_NEWTON_STEPS = 50
#: Newton's method doubles its digits: a step this small leaves an error far below rounding.
_LAST_STEP = 1e-9
#: Below this u the series of `_scaled_time` is used: its closed form loses digits there.
_SERIES_BELOW = 0.5
_SERIES_TERMS = 17


@dataclass(frozen=True, slots=True, kw_only=True)
class ConstantPower:
    """All power goes into speed: v dv/dt = Z.

    Stephenson, Am. J. Phys. 50 (1982) 1150 (READ-2): v = sqrt(2 Z t + v0^2),
    x = [(2 Z t + v0^2)^(3/2) - v0^3] / (3 Z), v^3 = v0^3 + 3 Z x. NAMING TRAP: that paper's Z is sqrt(P/m);
    ours is P/m, its square.

    The acceleration Z/v is infinite at rest (`acceleration(0)` with `v0` = 0 is inf): the law says nothing about
    the first step.

    Parameters
    ----------
    Z : float
        Power per mass [W/kg], > 0.
    v0 : float
        Speed at t = 0 [m/s], >= 0.
    """

    name: ClassVar[str] = "constant_power"
    words: ClassVar[str] = (
        "The runner puts the same power into speed at every instant and meets no resistance, so speed never levels off."
    )
    Z: float
    v0: float = 0.0

    def __post_init__(self) -> None:
        require(type(self).__name__, positive={"Z": self.Z}, not_negative={"v0": self.v0}, finite={})

    def speed(self, t_s: ArrayLike) -> Array:
        """Speed [m/s]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        return started(on, np.sqrt(2 * self.Z * t + self.v0**2))

    def position(self, t_s: ArrayLike) -> Array:
        """Position [m]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        v = np.sqrt(2 * self.Z * t + self.v0**2)
        # (v^3 - v0^3)/(3 Z) with v - v0 = 2 Z t/(v + v0): no cancellation when Z is small.
        total = np.where(v > 0, v + self.v0, 1.0)
        return started(on, 2 * t * (v * v + v * self.v0 + self.v0**2) / (3 * total))

    def acceleration(self, t_s: ArrayLike) -> Array:
        """Acceleration Z/v [m/s^2]; inf at rest."""
        t, on = since_start(t_s)
        v = np.sqrt(2 * self.Z * t + self.v0**2)
        return started(on, np.where(v == 0, np.inf, self.Z / np.where(v == 0, 1.0, v)))

    def time_at(self, x_m: ArrayLike) -> Array:
        """Time [s] at positions [m] >= 0; ValueError below 0."""
        x = reachable(type(self).__name__, x_m)
        v = np.cbrt(self.v0**3 + 3 * self.Z * x)
        total = np.where(v > 0, v * v + v * self.v0 + self.v0**2, 1.0)
        t: Array = 3 * x * (v + self.v0) / (2 * total)
        return t[()]


def _scaled_time(q: Array, u: Array) -> Array:
    """Integral of u du/(1 - u^3) from 0, where q = -ln|1 - u^3|.

    Partial fractions, with -ln|1 - u| = q + ln(1 + u + u^2) so that nothing is lost as u -> 1:
    (1/3) [q + (3/2) ln(1 + u + u^2) - sqrt(3) (atan((2u + 1)/sqrt(3)) - pi/6)].
    For small u the same integral as a series, sum u^(3n+2)/(3n+2).
    """
    ring = 1 + u + u * u
    closed = (q + 1.5 * np.log(ring) - _SQRT3 * (np.arctan((2 * u + 1) / _SQRT3) - np.pi / 6)) / 3
    cube = np.minimum(u, _SERIES_BELOW) ** 3
    series = np.zeros_like(u)
    for n in range(_SERIES_TERMS - 1, -1, -1):
        series = series * cube + 1 / (3 * n + 2)
    return np.where(u < _SERIES_BELOW, series * u * u, closed)


@dataclass(frozen=True, slots=True, kw_only=True)
class ConstantPowerDrag:
    """Constant power against quadratic drag in still air: v dv/dt = Z - k v^3, i.e. m v^2 dv/dx = P - (m k) v^3.

    Textbook separation of variables (checked against the ODE in the tests): with vt = (Z/k)^(1/3),
    v^3 = vt^3 - (vt^3 - v0^3) e^(-3 k x). Time follows from dt = dx/v, in closed form as a function of
    q = -ln|1 - (v/vt)^3| (see `_scaled_time`), and is inverted by Newton's method; the integral is concave in q below
    the terminal speed and convex above it, so the steps approach the root from one side and cannot leave it.

    Like `ConstantPower`, of which it is the limit for k -> 0, it has an infinite acceleration at rest.

    Parameters
    ----------
    Z : float
        Power per mass [W/kg], > 0.
    k_drag : float
        Drag constant rho CdA/(2 m) [1/m], >= 0.
    v0 : float
        Speed at t = 0 [m/s], >= 0; it may exceed the terminal speed.
    """

    name: ClassVar[str] = "constant_power_drag"
    words: ClassVar[str] = (
        "The runner gives the same power at every instant; part of it goes into speed, the rest into a resistance that "
        "grows as speed squared. There is no wind."
    )
    Z: float
    k_drag: float
    v0: float = 0.0

    def __post_init__(self) -> None:
        require(
            type(self).__name__,
            positive={"Z": self.Z},
            not_negative={"k_drag": self.k_drag, "v0": self.v0},
            finite={},
        )

    @property
    def terminal_speed(self) -> float:
        """Speed at which drag takes all the power, (Z/k)^(1/3) [m/s]; inf without drag."""
        return float(np.cbrt(self.Z / self.k_drag)) if self.k_drag > 0 else float("inf")

    @property
    def _free(self) -> ConstantPower:
        return ConstantPower(Z=self.Z, v0=self.v0)

    def _side(self) -> float:
        """+1 from below the terminal speed, -1 from above."""
        return 1.0 if self.v0 <= self.terminal_speed else -1.0

    def _q0(self) -> float:
        cube = (self.v0 / self.terminal_speed) ** 3
        if cube < 0.5:
            return float(-np.log1p(-cube))  # keeps its digits for weak drag
        return float(-np.log(max(abs(1 - cube), np.finfo(np.float64).tiny)))

    def _u(self, q: Array) -> Array:
        """Speed over terminal speed at q."""
        return np.cbrt(-np.expm1(-q) if self._side() > 0 else 1 + np.exp(-q))

    def _time_scale(self) -> float:
        return self.terminal_speed**2 / self.Z

    def _q(self, t: Array) -> Array:
        """q(t): the root of scaled_time(q) = scaled_time(q0) + t/T."""
        q0 = np.asarray(self._q0())
        target = _scaled_time(q0, self._u(q0)) + t / self._time_scale()
        if self._side() > 0:
            # u <= 1 and u <= q^(1/3) give two upper bounds; both are sharp at their own end.
            q = np.minimum(3 * target, (2 * target) ** 1.5)
        else:
            q = q0 + 3 * self._u(q0) * t / self._time_scale()
        for _ in range(_NEWTON_STEPS):
            u = self._u(q)
            step = 3 * u * (_scaled_time(q, u) - target)  # ds/dq = 1/(3u)
            new = np.maximum(q - step, q0)
            done = np.all(np.abs(new - q) <= _LAST_STEP * np.abs(new))
            q = new
            if done:
                break
        return q

    def speed(self, t_s: ArrayLike) -> Array:
        """Speed [m/s]; `t_s` [s] of any shape."""
        if self.k_drag == 0:
            return self._free.speed(t_s)
        t, on = since_start(t_s)
        return started(on, self.terminal_speed * self._u(self._q(t)))

    def position(self, t_s: ArrayLike) -> Array:
        """Position [m]; `t_s` [s] of any shape."""
        if self.k_drag == 0:
            return self._free.position(t_s)
        t, on = since_start(t_s)
        return started(on, (self._q(t) - self._q0()) / (3 * self.k_drag))

    def acceleration(self, t_s: ArrayLike) -> Array:
        """Acceleration Z/v - k v^2 [m/s^2]; inf at rest."""
        if self.k_drag == 0:
            return self._free.acceleration(t_s)
        t, on = since_start(t_s)
        q = self._q(t)
        v = self.terminal_speed * self._u(q)
        # Z/v - k v^2 = (Z/v)(1 - u^3), and 1 - u^3 = +-e^-q without cancellation.
        return started(on, np.where(v == 0, np.inf, self._side() * self.Z * np.exp(-q) / np.where(v == 0, 1.0, v)))

    def time_at(self, x_m: ArrayLike) -> Array:
        """Time [s] at positions [m] >= 0; ValueError below 0."""
        x = reachable(type(self).__name__, x_m)
        if self.k_drag == 0:
            return self._free.time_at(x)
        q0 = np.asarray(self._q0())
        q = q0 + 3 * self.k_drag * x
        return (self._time_scale() * (_scaled_time(q, self._u(q)) - _scaled_time(q0, self._u(q0))))[()]

    def speed_at(self, x_m: ArrayLike) -> Array:
        """Speed [m/s] at positions [m] >= 0, v^3 = vt^3 - (vt^3 - v0^3) e^(-3 k x); ValueError below 0."""
        x = reachable(type(self).__name__, x_m)
        if self.k_drag == 0:
            return np.cbrt(self.v0**3 + 3 * self.Z * x)[()]
        return (self.terminal_speed * self._u(self._q0() + 3 * self.k_drag * x))[()]


#: What `LumpedDrag` is, for people.
LUMPED_WORDS: Final = (
    "All the power is put on the air here, so this number lumps the body's own losses (muscle, tendon, limb swing, "
    "braking at each contact) into the air. It is not an aerodynamic drag coefficient."
)


@dataclass(frozen=True, slots=True, kw_only=True)
class LumpedDrag:
    """A lumped resistance: `force_n` [N] = P/v, `coefficient` [-] what a drag coefficient would have to be for it."""

    force_n: float
    coefficient: float
    words: str = LUMPED_WORDS


def lumped_drag_coefficient(power_w: float, speed_mps: float, *, density_kg_m3: float, area_m2: float) -> LumpedDrag:
    """Drag coefficient if ALL the power at constant speed went into the air: P/v = 1/2 rho v^2 C A.

    It lumps the body's own losses into the air and is not an aerodynamic coefficient: body shapes of a runner's kind
    have about 0.9 (Arsac & Locatelli, J. Appl. Physiol. 92 (2002) 1781), this comes out some four times larger.

    Parameters
    ----------
    power_w, speed_mps : float
        Power [W] and the constant speed [m/s].
    density_kg_m3, area_m2 : float
        Air density and frontal area.

    Raises
    ------
    ValueError
        For a value that is not above 0.
    """
    values = {"power_w": power_w, "speed_mps": speed_mps, "density_kg_m3": density_kg_m3, "area_m2": area_m2}
    require("lumped_drag_coefficient", positive=values, not_negative={}, finite={})
    force = power_w / speed_mps
    return LumpedDrag(force_n=force, coefficient=2 * force / (density_kg_m3 * speed_mps**2 * area_m2))
