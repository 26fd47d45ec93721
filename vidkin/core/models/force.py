"""Laws of falling force: mono-exponential, force-velocity with air drag and wind, and constant acceleration."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike

from vidkin.core.models.law import invert, reachable, require, since_start, started
from vidkin.stages import Array


@dataclass(frozen=True, slots=True, kw_only=True)
class MonoExponential:
    """Speed climbs to its limit exponentially: dv/dt = (v_max - v)/tau.

    Furusawa, Hill & Parkinson, Proc. R. Soc. B 102 (1927) 29 (READ-2): v = v_max (1 - e^(-t/tau)),
    x = v_max [t - tau (1 - e^(-t/tau))]; with a rolling start v = v_max - (v_max - v0) e^(-t/tau).

    Parameters
    ----------
    v_max : float
        Limit speed [m/s], > 0.
    tau : float
        Time constant [s], > 0.
    v0 : float
        Speed at t = 0 [m/s], >= 0; it may exceed v_max.
    """

    name: ClassVar[str] = "mono_exponential"
    words: ClassVar[str] = (
        "Net forward force falls in a straight line with speed and reaches zero at v_max; air is not told apart from "
        "the runner, and there is no fade."
    )
    v_max: float
    tau: float
    v0: float = 0.0

    def __post_init__(self) -> None:
        require(
            type(self).__name__,
            positive={"v_max": self.v_max, "tau": self.tau},
            not_negative={"v0": self.v0},
            finite={},
        )

    @property
    def terminal_speed(self) -> float:
        """The limit speed v_max [m/s]."""
        return self.v_max

    def speed(self, t_s: ArrayLike) -> Array:
        """Speed [m/s]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        return started(on, self.v0 - (self.v_max - self.v0) * np.expm1(-t / self.tau))

    def position(self, t_s: ArrayLike) -> Array:
        """Position [m]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        x = self.v_max * t + (self.v_max - self.v0) * self.tau * np.expm1(-t / self.tau)
        return started(on, np.maximum(x, 0.0))  # rounding right after a start from rest

    def acceleration(self, t_s: ArrayLike) -> Array:
        """Acceleration [m/s^2]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        return started(on, (self.v_max - self.v0) / self.tau * np.exp(-t / self.tau))

    def time_at(self, x_m: ArrayLike) -> Array:
        """Time [s] at positions [m] >= 0; ValueError below 0."""
        x = reachable(type(self).__name__, x_m)
        late = x / self.v_max + max(1 - self.v0 / self.v_max, 0.0) * self.tau
        return invert(self.position, self.speed, x, late)[()]


def _relaxed(t: Array, y0: float, f: float, b: float, k: float) -> tuple[Array, Array]:
    """Integral of y and y itself for y' = f - b y - k y^2, y(0) = y0 >= 0, while y >= 0.

    Riccati's equation. With D = sqrt(b^2 + 4 k f), the root g = 2 f/(b + D), E = e^(-D t) and
    h = (y0 - g)(1 - E)/D:  y = g + (y0 - g) E/(1 + k h),  integral = g t + ln(1 + k h)/k.
    Nothing divides by k alone, so k -> 0 is the mono-exponential law. Where D is imaginary (f < 0, strong drag)
    the same solution in circular functions.
    """
    square = b * b + 4 * k * f
    if square < 0:
        half = 0.5 * np.sqrt(-square)
        c, s = np.cos(half * t), np.sin(half * t) / half
        phi = c + (k * y0 + 0.5 * b) * s
        return (np.log(phi) - 0.5 * b * t) / k, (y0 * c + (f - 0.5 * b * y0) * s) / phi
    d = float(np.sqrt(square))
    g = 2 * f / (b + d)
    e = np.exp(-d * t)
    h = (y0 - g) * (-np.expm1(-d * t) / d if d > 0 else t)
    integral = g * t + (np.log1p(k * h) / k if k > 0 else h)
    return integral, g + (y0 - g) * e / (1 + k * h)


def _zero_time(y0: float, f: float, b: float, k: float) -> float:
    """When y of `_relaxed` falls to 0 (f < 0): tanh(D t/2)/(D/2) = y0/(b y0/2 - f)."""
    square = b * b + 4 * k * f
    slope = y0 / (0.5 * b * y0 - f)
    half = 0.5 * float(np.sqrt(abs(square)))
    if half * slope < 1e-9:
        return slope
    return float((np.arctanh if square > 0 else np.arctan)(half * slope) / half)


@dataclass(frozen=True, slots=True, kw_only=True)
class ForceVelocity:
    """A straight force-velocity line against air drag: dv/dt = F0 (1 - v/V0) - k (v - w)|v - w|.

    The line and the drag term: Samozino et al., Scand. J. Med. Sci. Sports 26 (2016) 648 and Arsac & Locatelli,
    J. Appl. Physiol. 92 (2002) 1781. Solved in closed form in the speed relative to the air, u = v - w:
    du/dt = F0 (1 - w/V0) - (F0/V0) u - k u|u|, one Riccati equation on each side of u = 0 (see `_relaxed`), joined
    where a tailwind stops pushing.

    Parameters
    ----------
    F0 : float
        Force per mass at rest [N/kg], > 0.
    V0 : float
        Speed at which the runner's force vanishes [m/s], > 0.
    k_drag : float
        Drag constant rho CdA/(2 m) [1/m], >= 0.
    wind : float
        Wind along the lane [m/s], + is a tailwind.
    v0 : float
        Speed at t = 0 [m/s], >= 0; it may exceed the terminal speed.

    Raises
    ------
    ValueError
        For a parameter out of range, or a headwind that holds the runner still.
    """

    name: ClassVar[str] = "force_velocity"
    words: ClassVar[str] = (
        "Forward force falls in a straight line from F0 at rest to zero at V0, and air drag grows as the square of the "
        "speed relative to the wind; there is no fade."
    )
    F0: float
    V0: float
    k_drag: float
    wind: float = 0.0
    v0: float = 0.0

    def __post_init__(self) -> None:
        require(
            type(self).__name__,
            positive={"F0": self.F0, "V0": self.V0},
            not_negative={"k_drag": self.k_drag, "v0": self.v0},
            finite={"wind": self.wind},
        )
        if self.F0 + self.k_drag * self.wind * abs(self.wind) <= 0:
            raise ValueError(
                f"{type(self).__name__}: F0 = {self.F0} N/kg does not move the runner against wind = {self.wind} m/s"
            )

    @property
    def P_max(self) -> float:  # noqa: N802 - the field's name
        """Peak power of the force-velocity line, F0 V0/4 [W/kg]."""
        return self.F0 * self.V0 / 4

    @property
    def terminal_speed(self) -> float:
        """Speed at which the runner's force equals air drag [m/s]; V0 without drag."""
        f, b = self.F0 * (1 - self.wind / self.V0), self.F0 / self.V0
        root = 2 * abs(f) / (b + np.sqrt(b * b + 4 * self.k_drag * abs(f)))
        return float(self.wind + (root if f > 0 else -root))

    def _solution(self, t: Array) -> tuple[Array, Array]:
        """Position and speed for t >= 0."""
        f, b, k = self.F0 * (1 - self.wind / self.V0), self.F0 / self.V0, self.k_drag
        u0 = self.v0 - self.wind
        side = 1.0 if u0 > 0 or (u0 == 0 and f >= 0) else -1.0
        if side * f >= 0:
            way, u = _relaxed(t, abs(u0), side * f, b, k)
            return self.wind * t + side * way, self.wind + side * u
        turn = _zero_time(abs(u0), side * f, b, k)
        first, second = np.minimum(t, turn), np.maximum(t - turn, 0.0)
        way1, u1 = _relaxed(first, abs(u0), side * f, b, k)
        way2, u2 = _relaxed(second, 0.0, -side * f, b, k)
        relative = np.where(t < turn, side * u1, -side * u2)
        return self.wind * t + side * (way1 - way2), self.wind + relative

    def position(self, t_s: ArrayLike) -> Array:
        """Position [m]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        return started(on, np.maximum(self._solution(t)[0], 0.0))  # rounding right after a start from rest

    def speed(self, t_s: ArrayLike) -> Array:
        """Speed [m/s]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        return started(on, self._solution(t)[1])

    def acceleration(self, t_s: ArrayLike) -> Array:
        """Acceleration [m/s^2]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        v = self._solution(t)[1]
        u = v - self.wind
        return started(on, self.F0 * (1 - v / self.V0) - self.k_drag * u * np.abs(u))

    def time_at(self, x_m: ArrayLike) -> Array:
        """Time [s] at positions [m] >= 0; ValueError below 0."""
        x = reachable(type(self).__name__, x_m)
        # v >= vt (1 - e^(-bt)) is not sure with drag; but a bracket only has to be late enough.
        late = x / min(self.terminal_speed, self.v0 or np.inf) + self.V0 / self.F0
        while np.any(self.position(late) < x):
            late = 2 * late
        return invert(self.position, self.speed, x, late)[()]


@dataclass(frozen=True, slots=True, kw_only=True)
class ForceLinearQuadratic:
    """Constant force with linear and quadratic resistance: dv/dt = F0 - gamma v - sigma v^2. `ForceVelocity` renamed.

    Hernandez Gomez, Marquina & Gomez, Eur. J. Phys. 34 (2013) 1227: dv/dt = sigma (U - v)(V + v), U the terminal speed.
    Links: F0 = sigma U V, gamma = sigma (V - U), rate = sigma (U + V); to `ForceVelocity`: V0 = F0/gamma,
    k_drag = sigma. The paper's F0, gamma, sigma are for the whole body (N, kg/s, kg/m); ours are per kilogram.

    Parameters
    ----------
    F0, gamma, sigma : float
        Force [N/kg] > 0, linear [1/s] > 0 and quadratic [1/m] >= 0 resistance, all per mass.
    """

    F0: float
    gamma: float
    sigma: float

    def __post_init__(self) -> None:
        require(
            type(self).__name__,
            positive={"F0": self.F0, "gamma": self.gamma},
            not_negative={"sigma": self.sigma},
            finite={},
        )

    @classmethod
    def from_speeds(cls, U: float, V: float, *, rate: float) -> ForceLinearQuadratic:
        """From the roots `U` < `V` [m/s] and `rate` = sigma (U + V) [1/s]."""
        sigma = rate / (U + V)
        return cls(F0=sigma * U * V, gamma=sigma * (V - U), sigma=sigma)

    @property
    def U(self) -> float:  # noqa: N802 - the paper's name
        """Terminal speed [m/s]."""
        return self.force_velocity().terminal_speed

    @property
    def V(self) -> float:  # noqa: N802 - the paper's name
        """Size of the other root, U + gamma/sigma [m/s]; inf without quadratic resistance."""
        return self.U + self.gamma / self.sigma if self.sigma > 0 else float("inf")

    @property
    def rate(self) -> float:
        """sigma (U + V) = sqrt(gamma^2 + 4 sigma F0) [1/s]."""
        return float(np.sqrt(self.gamma**2 + 4 * self.sigma * self.F0))

    def force_velocity(self, *, wind: float = 0.0, v0: float = 0.0) -> ForceVelocity:
        """The same law as a `ForceVelocity`; `wind` [m/s] acts on the quadratic term only."""
        return ForceVelocity(F0=self.F0, V0=self.F0 / self.gamma, k_drag=self.sigma, wind=wind, v0=v0)


@dataclass(frozen=True, slots=True, kw_only=True)
class ConstantAcceleration:
    """Speed changes evenly: v = v0 + a t, x = v0 t + a t^2/2 (textbook). For short flying windows.

    A runner who slows down stops at v = 0 and stays there.

    Parameters
    ----------
    v0 : float
        Speed at t = 0 [m/s], >= 0.
    a : float
        Acceleration [m/s^2], either sign.
    """

    name: ClassVar[str] = "constant_acceleration"
    words: ClassVar[str] = "Speed changes evenly over the stretch in view; it says nothing outside it."
    v0: float
    a: float

    def __post_init__(self) -> None:
        require(type(self).__name__, positive={}, not_negative={"v0": self.v0}, finite={"a": self.a})

    @property
    def _stop_s(self) -> float:
        return -self.v0 / self.a if self.a < 0 else float("inf")

    def speed(self, t_s: ArrayLike) -> Array:
        """Speed [m/s]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        return started(on, np.maximum(self.v0 + self.a * t, 0.0))

    def position(self, t_s: ArrayLike) -> Array:
        """Position [m]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        t = np.minimum(t, self._stop_s)
        return started(on, self.v0 * t + 0.5 * self.a * t * t)

    def acceleration(self, t_s: ArrayLike) -> Array:
        """Acceleration [m/s^2]; `t_s` [s] of any shape."""
        t, on = since_start(t_s)
        return started(on, np.where(t >= self._stop_s, 0.0, np.where(np.isnan(t), t, self.a)))

    def time_at(self, x_m: ArrayLike) -> Array:
        """Time [s] at positions [m]; ValueError below 0 and beyond where the runner stops."""
        furthest = self.v0**2 / (-2 * self.a) if self.a < 0 else np.inf if self.v0 > 0 or self.a > 0 else 0.0
        x = reachable(type(self).__name__, x_m, furthest)
        # t = 2 x/(v0 + sqrt(v0^2 + 2 a x)): the root that keeps its digits for small a.
        total = self.v0 + np.sqrt(np.maximum(self.v0**2 + 2 * self.a * x, 0.0))
        return np.where(x > 0, 2 * x / np.where(total > 0, total, 1.0), 0.0)[()]
