"""Track + Camera -> Motion: metres on the runner's vertical plane, and Savitzky-Golay velocity.

Savitzky & Golay, Anal. Chem. 36 (1964) 1627: a polynomial fitted to a moving window by least squares, read at the
window's own point. Here on true, uneven times; where times are even it equals the tabulated convolution.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from vidkin.core import optics
from vidkin.core.uncertainty import wobble_kernels
from vidkin.notices import Failure, Notice, failure, notice
from vidkin.stages import CAMERA_PARAMETERS, Array, Bools, Camera, Lane, Motion, Settings, Steps, Track

_ORDER: Final = 2
_PLAIN_WINDOW_S: Final = 0.5
_STEPS_IN_WINDOW: Final = 2.0
_LEAST_POINTS: Final = 7
#: The silhouette's point moves about the centre of mass as the body rises from the crouch [m], and over this time [s].
_POSTURE_M: Final = 0.05
_POSTURE_S: Final = 0.8
_LANE_SD_M: Final = 0.15
_EXTRAPOLATED_M: Final = 3.0
_LEAST_WOBBLE_M: Final = 0.008
_AT_REST_MPS: Final = 0.6
_ROUNDED: Final = 0.07


@dataclass(frozen=True, slots=True)
class Smoother:
    """Savitzky-Golay as three matrices (N, N): smooth x, velocity, acceleration; `inside` (N,) full windows."""

    position: Array
    velocity: Array
    acceleration: Array
    inside: Bools


def savitzky_golay(t_s: Array, *, window_s: float, order: int = _ORDER) -> Smoother:
    """Local polynomials on uneven times.

    Parameters
    ----------
    t_s : Array
        (N,) rising times [s].
    window_s : float
        Window [s]; rounded to an odd number of median frame steps.
    order : int
        Degree of the polynomial.

    Raises
    ------
    ValueError
        Fewer points than the polynomial needs.
    """
    n = t_s.size
    if n < order + 2:
        raise ValueError(f"savitzky_golay: {n} points, at least {order + 2} are needed")
    step = float(np.median(np.diff(t_s)))
    half = max(round(0.5 * window_s / step), (order + 2) // 2)
    reach = (half + 0.5) * step
    out = np.zeros((3, n, n))
    inside = np.zeros(n, dtype=bool)
    for i in range(n):
        a, b = (int(k) for k in np.searchsorted(t_s, (t_s[i] - reach, t_s[i] + reach)))
        inside[i] = t_s[i] - t_s[0] > reach - step and t_s[-1] - t_s[i] > reach - step
        if not inside[i] or b - a <= order + 1:
            # At an end the window stays whole and the polynomial is read off its middle: no padding, no mirror.
            centre = float(np.clip(t_s[i], t_s[0] + reach - 0.5 * step, t_s[-1] - reach + 0.5 * step))
            a, b = (int(k) for k in np.searchsorted(t_s, (centre - reach, centre + reach)))
        if b - a < order + 2:
            a = max(0, min(i - order, n - order - 2))
            b = min(n, a + order + 2)
            inside[i] = False
        scaled = (t_s[a:b] - t_s[i]) / reach
        solve = np.linalg.pinv(np.vander(scaled, order + 1, increasing=True))
        for derivative in range(min(3, order + 1)):
            out[derivative, i, a:b] = solve[derivative] * (1.0, 1.0, 2.0)[derivative] / reach**derivative
    return Smoother(out[0], out[1], out[2], inside)


def measure(
    track: Track, camera: Camera, lane: Lane, *, steps: Steps | Failure, settings: Settings | None = None
) -> Motion | Failure:
    """Turn the track into metres and smooth it.

    Parameters
    ----------
    track, camera, lane
        Earlier stages, and the lane run in.
    steps : Steps or Failure
        For the runner's y and the smoothing window; a Failure leaves the lane's centre and half a second.
    settings : Settings, optional

    Returns
    -------
    Motion or Failure
    """
    settings = settings or Settings()
    size = (camera.width_px, camera.height_px)
    rows = track.whole
    t_s, uv = track.t_s[rows], track.uv_px[rows]
    lateral, lateral_sd = (steps.lateral_m, steps.lateral_sd_m) if steps else (lane.centre_y_m, _LANE_SD_M)
    points = optics.to_plane(camera.parameters, uv, size, axis=1, value_m=lateral)
    if not np.all(np.isfinite(points)):
        return failure("rays_miss", count=int(np.count_nonzero(~np.isfinite(points).all(axis=1))))
    if t_s.size < _LEAST_POINTS:
        return failure("too_short", count=t_s.size, least=_LEAST_POINTS)
    by_uv, by_p, by_y = optics.lane_jacobian(camera.parameters, points, size)
    cov = np.einsum("nij,njk,nlk->nil", by_uv, track.cov_px2[rows], by_uv)
    x_sd = np.sqrt(cov[:, 0, 0])
    x_m = points[:, 0]
    rate = steps.step_rate_hz if steps else _STEPS_IN_WINDOW / _PLAIN_WINDOW_S
    window = settings.window_s or (min(_STEPS_IN_WINDOW / rate, 1.2) if steps else _PLAIN_WINDOW_S)
    if np.ptp(t_s) < window:
        return failure("shorter_than_window", seconds=float(np.ptp(t_s)), window=window)
    shared = np.column_stack([by_p[:, 0, :] @ _root(camera.cov), by_y[:, 0] * lateral_sd, _posture(t_s, x_m)])
    names = (*(f"camera {i + 1}" for i in range(len(CAMERA_PARAMETERS))), "lateral position", "posture")
    smoother = savitzky_golay(t_s, window_s=window)
    smooth = smoother.position @ x_m
    noise = np.diag(x_sd**2) + shared @ shared.T
    sizes = _wobble_sizes(t_s, x_m, rate, x_sd)
    for wobble_m, kernel in zip(sizes, wobble_kernels(t_s, rate_hz=rate), strict=True):
        noise += wobble_m**2 * kernel
    bias = np.hypot(_curvature_bias(t_s, x_m, window), _onset_bias(t_s, x_m, smoother.acceleration @ x_m, window))
    v_sd = np.sqrt(np.einsum("ij,jk,ik->i", smoother.velocity, noise, smoother.velocity) + bias**2)
    a_sd = np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", smoother.acceleration, noise, smoother.acceleration), 0.0))
    return Motion(
        t_s=t_s,
        x_m=x_m,
        z_m=points[:, 2],
        x_sd_m=x_sd,
        shared_m=shared,
        shared_names=names,
        smooth_x_m=smooth,
        v_mps=smoother.velocity @ x_m,
        a_mps2=smoother.acceleration @ x_m,
        v_sd_mps=v_sd,
        a_sd_mps2=a_sd,
        inside=smoother.inside,
        window_s=window,
        step_rate_hz=rate,
        notices=_remarks(x_m, camera, steps),
    )


def _root(cov: Array) -> Array:
    """A matrix R with R R^T = cov, also where cov is singular."""
    values, vectors = np.linalg.eigh(cov)
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)))


def _posture(t_s: Array, x_m: Array) -> Array:
    """Shared column of the slow shift between silhouette and centre of mass from crouch to upright [m].

    None where the runner is upright all along (moving at speed from the first row on).
    """
    early = np.polyfit(t_s[:5] - t_s[0], x_m[:5], 1)[0]
    if early > 2.0:
        return np.zeros_like(t_s)
    start = float(t_s[int(np.argmax(x_m - x_m[0] > 0.15))])
    return np.asarray(_POSTURE_M * (1 - np.exp(-np.maximum(t_s - start, 0.0) / _POSTURE_S)))


def _wobble_sizes(t_s: Array, x_m: Array, rate_hz: float, x_sd: Array) -> tuple[float, float, float, float]:
    """Sd [m] of the wobble, in the order of `wobble_kernels`, from what the window leaves over.

    The step rhythm is fitted (sine and cosine over three steps at a time); the others cannot be told from motion by
    themselves and are taken as half of it.
    """
    smooth = savitzky_golay(t_s, window_s=_STEPS_IN_WINDOW / rate_hz)
    left = x_m - smooth.position @ x_m
    phase = 2 * np.pi * rate_hz * (t_s - t_s[0])
    powers = []
    span = 3.0 / rate_hz
    for start in np.arange(t_s[0], t_s[-1] - 0.5 * span, span):
        part = (t_s >= start) & (t_s < start + span)
        if np.count_nonzero(part) < 6:
            continue
        basis = np.column_stack([np.cos(phase[part]), np.sin(phase[part]), np.ones(np.count_nonzero(part))])
        c = np.linalg.lstsq(basis, left[part], rcond=None)[0]
        powers.append(0.5 * float(c[0] ** 2 + c[1] ** 2))
    step = float(np.sqrt(np.mean(powers))) if powers else float(np.std(left))
    step = max(step, float(np.median(x_sd)), _LEAST_WOBBLE_M)
    return step, 0.5 * step, 0.5 * step, 0.5 * step


def _curvature_bias(t_s: Array, x_m: Array, window_s: float) -> Array:
    """What a quadratic window misses of the velocity [m/s]: x''' tau^2 / 10 with tau the half window.

    The continuous limit of Savitzky-Golay's first-derivative bias x''' dt^2 (3 M^2 + 3 M - 1)/30; x''' from a cubic
    over twice the window, where the step rhythm averages out.
    """
    if np.ptp(t_s) < 2 * window_s or t_s.size < 12:
        return np.zeros_like(t_s)
    out = np.empty_like(t_s)
    for i, t in enumerate(t_s):
        centre = float(np.clip(t, t_s[0] + window_s, t_s[-1] - window_s))
        near = np.abs(t_s - centre) <= window_s
        out[i] = 6 * np.polyfit(t_s[near] - centre, x_m[near], 3)[0] if np.count_nonzero(near) > 6 else 0.0
    return np.asarray(np.abs(out) * (0.5 * window_s) ** 2 / 10)


def _onset_bias(t_s: Array, x_m: Array, a_mps2: Array, window_s: float) -> Array:
    """What the window rounds off where the runner starts from rest [m/s].

    At a step of the acceleration a quadratic window is off by up to about 0.07 a W (numerically, for a step to a);
    it fades within the window's half width on both sides.
    """
    if np.polyfit(t_s[:5] - t_s[0], x_m[:5], 1)[0] > _AT_REST_MPS:
        return np.zeros_like(t_s)
    most = max(float(np.max(a_mps2)), 0.1)
    moved = float(t_s[int(np.argmax(x_m - x_m[0] > 0.1))])
    start = moved - float(np.sqrt(0.2 / most))
    near = np.clip(1.25 - np.abs(t_s - start) / (0.6 * window_s), 0.0, 1.0)
    return np.asarray(_ROUNDED * most * window_s * near)


def _remarks(x_m: Array, camera: Camera, steps: Steps | Failure) -> tuple[Notice, ...]:
    remarks: list[Notice] = []
    marks = [float(m.xyz_m[0]) for m in camera.marks]
    if marks:
        beyond = max(min(marks) - float(x_m.min()), float(x_m.max()) - max(marks))
        if beyond > _EXTRAPOLATED_M:
            remarks.append(notice("beyond_marks", metres=beyond))
    if not steps:
        remarks.append(notice("plain_window", window=_PLAIN_WINDOW_S))
    return tuple(remarks)
