"""Force-velocity profile by regression, from a mono-exponential run (Samozino et al. 2016)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from vidkin.constants import G_MPS2
from vidkin.core.models.force import MonoExponential
from vidkin.core.models.law import require
from vidkin.stages import Array

#: The ratio of force is read from here on [s] (same source).
RATIO_FROM_S = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class ForceVelocityProfile:
    """Result of `force_velocity_profile`, per kilogram.

    `F0` [N/kg], `V0` [m/s], `P_max` [W/kg], `slope` of the force-velocity line [N/kg/(m/s)], `RF_max` [%],
    `D_RF` [%/(m/s)]; `window_s` and `step_s` are the regression's window and step [s].
    """

    F0: float
    V0: float
    P_max: float
    slope: float
    RF_max: float
    D_RF: float
    window_s: tuple[float, float]
    step_s: float


def ratio_of_force(force_n_kg: ArrayLike, *, g_mps2: float = G_MPS2) -> Array:
    """Horizontal over resultant ground force, F/sqrt(F^2 + g^2) [-], with F per mass [N/kg].

    Samozino et al., Scand. J. Med. Sci. Sports 26 (2016) 648: the vertical force averaged over a step is body weight.
    """
    f = np.asarray(force_n_kg, dtype=np.float64)
    return (f / np.hypot(f, g_mps2))[()]


def force_velocity_profile(
    v_max: float,
    tau: float,
    *,
    k_drag: float,
    window_s: tuple[float, float],
    wind: float = 0.0,
    step_s: float = 0.01,
    g_mps2: float = G_MPS2,
) -> ForceVelocityProfile:
    """F0, V0, P_max, RF_max and D_RF from the two parameters of a mono-exponential run.

    Samozino et al., Scand. J. Med. Sci. Sports 26 (2016) 648 (equations from memory): horizontal force per mass
    F = dv/dt + k (v - w)|v - w|; F0 and V0 are the intercepts of the straight line fitted to F on v;
    P_max = F0 V0/4; RF = F/sqrt(F^2 + g^2); RF_max at 0.3 s; D_RF the slope of RF on v from 0.3 s on.

    With drag, F on v is a parabola: the line depends on the window, hence the window is asked for. It is sampled
    evenly in time.

    Parameters
    ----------
    v_max, tau : float
        Limit speed [m/s] and time constant [s].
    k_drag : float
        Drag constant rho CdA/(2 m) [1/m].
    window_s : (float, float)
        First and last time of the regression from first movement [s]; it must reach beyond 0.3 s.
    wind : float
        Wind along the lane [m/s], + is a tailwind.
    step_s : float
        Sampling step [s].
    g_mps2 : float
        Acceleration of free fall [m/s^2].

    Raises
    ------
    ValueError
        For a parameter out of range, or a window without three samples from 0.3 s on.
    """
    law = MonoExponential(v_max=v_max, tau=tau)
    require(
        "force_velocity_profile",
        positive={"step_s": step_s, "g_mps2": g_mps2},
        not_negative={"k_drag": k_drag, "window_s[0]": window_s[0]},
        finite={"wind": wind, "window_s[1]": window_s[1]},
    )
    t = window_s[0] + step_s * np.arange(int(np.floor((window_s[1] - window_s[0]) / step_s + 1e-9)) + 1)
    late = t >= RATIO_FROM_S - 1e-9
    if np.count_nonzero(late) < 3:
        raise ValueError(
            f"force_velocity_profile: window_s = {window_s} with step_s = {step_s} "
            f"has fewer than 3 samples from {RATIO_FROM_S} s on"
        )
    v = law.speed(t)
    relative = v - wind
    force = law.acceleration(t) + k_drag * relative * np.abs(relative)
    slope, F0 = np.polyfit(v, force, 1)
    V0 = -F0 / slope
    at = law.speed(RATIO_FROM_S)
    first = law.acceleration(RATIO_FROM_S) + k_drag * (at - wind) * abs(at - wind)
    D_RF = np.polyfit(v[late], ratio_of_force(force[late], g_mps2=g_mps2), 1)[0]
    return ForceVelocityProfile(
        F0=float(F0),
        V0=float(V0),
        P_max=float(F0 * V0 / 4),
        slope=float(slope),
        RF_max=float(100 * ratio_of_force(first, g_mps2=g_mps2)),
        D_RF=float(100 * D_RF),
        window_s=window_s,
        step_s=step_s,
    )
