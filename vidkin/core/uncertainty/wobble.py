"""Correlated errors of a silhouette point about the centre of mass: step rhythm, stride rhythm, slow drift."""

from __future__ import annotations

from typing import Final

import numpy as np

from vidkin.stages import Array

#: The rhythm keeps its phase over about this many steps [-].
COHERENT_STEPS: Final = 3.0
#: Time scales of the drift and of the flicker [s].
SLOW_S: Final = 0.35
FAST_S: Final = 0.04


def wobble_kernels(t_s: Array, *, rate_hz: float) -> tuple[Array, Array, Array, Array]:
    """Unit covariances (N, N): wobble at step rate, at stride rate (half of it), slow drift, flicker.

    Rhythms: cos(2 pi f dt) exp(-(dt f_step/3)^2/2). Drift, as the posture changes: exp(-(dt/0.35 s)^2/2). Flicker, as
    limbs join and part in the outline: exp(-|dt|/0.04 s), rough and short, so that the smooth parts need not stand in
    for it. Our own model of what simulated and real silhouettes do; the sizes are estimated from each rep.
    """
    dt = t_s[:, None] - t_s[None, :]
    memory = np.exp(-0.5 * (dt * rate_hz / COHERENT_STEPS) ** 2)
    return (
        np.asarray(np.cos(2 * np.pi * rate_hz * dt) * memory),
        np.asarray(np.cos(np.pi * rate_hz * dt) * memory),
        np.asarray(np.exp(-0.5 * (dt / SLOW_S) ** 2)),
        np.asarray(np.exp(-np.abs(dt) / FAST_S)),
    )
