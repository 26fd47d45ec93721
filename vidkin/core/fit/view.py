"""What of the run is in view, how it began, and rough values to start the fits from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np

from vidkin.stages import Array, Motion

_STILL_MPS: Final = 0.6
_STILL_LEAST_S: Final = 0.05
_STIR_M: Final = 0.08
_STIR_S: Final = 0.1
_UNFOLDING: Final = 4.0
_UNFOLDING_S: Final = 0.4


@dataclass(frozen=True, slots=True, kw_only=True)
class View:
    """Clip times and lane positions of the ends of what was measured, and how it began."""

    start: Literal["standing", "flying"]
    first_s: float
    last_s: float
    first_m: float
    last_m: float
    start_x_m: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Rough:
    """Rough values: place and time of first movement, speeds at both ends, time constant of the rise."""

    x0_m: float
    t0_s: float
    v_start_mps: float
    v_end_mps: float
    tau_s: float


def view_of(motion: Motion, start_x_m: float) -> View:
    """A standing start is only taken for one where the stillness itself was seen."""
    t, x = motion.t_s, motion.x_m
    early = t <= t[0] + max(_STILL_LEAST_S, 4 * float(np.median(np.diff(t))))
    speed = float(np.polyfit(t[early] - t[0], x[early], 1)[0])
    return View(
        start="standing" if abs(speed) < _STILL_MPS else "flying",
        first_s=float(t[0]),
        last_s=float(t[-1]),
        first_m=float(motion.smooth_x_m[0]),
        last_m=float(motion.smooth_x_m[-1]),
        start_x_m=start_x_m,
    )


def restlessness(t_s: Array, x_m: Array) -> Array:
    """How strongly the silhouette may wobble about the centre of mass, against its size in upright running (N,).

    Next to nothing while the runner stands still; five times as much in the first step, when arms leave the ground,
    legs unfold and the outline changes most, easing off within half a second.
    """
    still = x_m[: max(3, int(np.argmax(x_m - x_m[0] > _STIR_M)) // 2)]
    way = (x_m - float(np.median(still))) / _STIR_M
    begun = np.maximum.accumulate(np.clip(way, 0.0, 1.0))
    # The limbs stir a little before the trunk has moved.
    lead = np.interp(t_s + _STIR_S, t_s, begun)
    first = float(t_s[int(np.argmax(lead > 0.5))])
    unfolding = 1.0 + _UNFOLDING * np.exp(-np.maximum(t_s - first, 0.0) / _UNFOLDING_S)
    return np.asarray(np.maximum(lead * unfolding, 0.05))


def rough_of(motion: Motion, view: View) -> Rough:
    """From the smoothed curve: good enough to start a fit, never reported."""
    t, x, v = motion.t_s, motion.x_m, motion.v_mps
    moved = int(np.argmax(x - x[: max(3, t.size // 50)].mean() > 0.3))
    v_end = max(float(np.max(v[-max(3, t.size // 5) :])), 1.0)
    half = int(np.argmax(v > 0.63 * v_end))
    begin = float(t[moved]) - 0.3 if view.start == "standing" else float(t[0])
    return Rough(
        x0_m=float(x[0]),
        t0_s=begin,
        v_start_mps=max(float(v[0]), 0.5),
        v_end_mps=v_end,
        tau_s=float(np.clip(t[half] - begin, 0.5, 2.5)),
    )
