"""What every sprint law offers, and the helpers they share."""

from __future__ import annotations

from collections.abc import Callable
from typing import ClassVar, Protocol

import numpy as np
from numpy.typing import ArrayLike

from vidkin.stages import Array, Bools

_INVERSION_STEPS = 100
_EPS = float(np.finfo(np.float64).eps)


class Law(Protocol):
    """A sprint law: `name` is its key, `words` says in one line what it assumes."""

    name: ClassVar[str]
    words: ClassVar[str]

    def position(self, t_s: ArrayLike) -> Array:
        """Position [m] at times [s] from the first movement; same shape."""
        ...

    def speed(self, t_s: ArrayLike) -> Array:
        """Speed [m/s] at times [s] from the first movement; same shape."""
        ...

    def acceleration(self, t_s: ArrayLike) -> Array:
        """Acceleration [m/s^2] at times [s] from the first movement; same shape."""
        ...

    def time_at(self, x_m: ArrayLike) -> Array:
        """Time [s] from the first movement at which positions [m] are reached; ValueError if one never is."""
        ...


def require(law: str, *, positive: dict[str, float], not_negative: dict[str, float], finite: dict[str, float]) -> None:
    """Raise ValueError for the first parameter that is not finite or out of its range."""
    for name, value in (positive | not_negative | finite).items():
        if not np.isfinite(value):
            raise ValueError(f"{law}: {name} = {value} must be finite")
    for name, value in positive.items():
        if value <= 0:
            raise ValueError(f"{law}: {name} = {value} must be above 0")
    for name, value in not_negative.items():
        if value < 0:
            raise ValueError(f"{law}: {name} = {value} must not be below 0")


def since_start(t_s: ArrayLike) -> tuple[Array, Bools]:
    """Times clipped at 0, and a mask that is True where the runner has started."""
    t = np.asarray(t_s, dtype=np.float64)
    return np.maximum(t, 0.0), ~(t < 0.0)


def started(on: Bools, values: Array | float) -> Array:
    """`values` where `on`, 0 before the start; a scalar stays a scalar."""
    return np.where(on, values, 0.0)[()]


def reachable(law: str, x_m: ArrayLike, furthest_m: float = np.inf) -> Array:
    """Positions as an array; ValueError names the first one that the law never reaches."""
    x = np.asarray(x_m, dtype=np.float64)
    bad = ~((x >= 0.0) & (x <= furthest_m) & np.isfinite(x))
    if np.any(bad):
        value = float(x[bad].flat[0])
        raise ValueError(f"{law}: position {value:g} m is never reached (0 m to {furthest_m:g} m are)")
    return x


def invert(position: Callable[[Array], Array], speed: Callable[[Array], Array], x: Array, late: Array) -> Array:
    """Times at which a rising `position` takes the values `x`: Newton steps kept inside a shrinking bracket.

    `late` is a time by which each x has been reached. Where Newton leaves the bracket it is halved.
    """
    low, high = np.zeros_like(x), np.array(late, dtype=np.float64)
    t = high.copy()
    for _ in range(_INVERSION_STEPS):
        miss = position(t) - x
        high = np.where(miss >= 0, t, high)
        low = np.where(miss <= 0, t, low)
        slope = speed(t)
        newton = t - miss / np.where(slope > 0, slope, 1.0)
        inside = (newton >= low) & (newton <= high) & (slope > 0)
        new = np.where(inside, newton, 0.5 * (low + high))
        done = np.abs(new - t) <= 4 * _EPS * np.abs(t)
        t = new
        if np.all(done):
            break
    return np.where(x > 0, t, 0.0)  # a start from rest is a double root, where Newton keeps half the digits
