"""What the fitting core is given: positions or speeds in time, with the covariance of their errors."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final, Literal, TypeAlias

import numpy as np
from scipy.linalg import cho_factor, cho_solve
from scipy.optimize import minimize

from vidkin.stages import Array, Motion

#: Rows are averaged down to this rate [Hz]: far above any step rhythm, and linear algebra stays small.
_RATE_HZ: Final = 50.0
_JITTER_M2: Final = 1e-8
_PRIOR_LN_SD: Final = 0.8
_COLUMN_DEGREE: Final = 5


Kernels: TypeAlias = tuple[Array, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """Values to fit: `t_s` (N,), `y` (N,) positions [m] or speeds [m/s], `cov` (N, N) of their errors.

    `fixed_origin` True: the position at first movement is 0 by definition (splits from the start line).
    """

    kind: Literal["position", "speed"]
    t_s: Array
    y: Array
    cov: Array
    fixed_origin: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Wobble:
    """Sizes [m] of the silhouette's own motion about the centre of mass, see `wobble_kernels`."""

    step_m: float
    stride_m: float
    slow_m: float
    fast_m: float

    @property
    def sizes(self) -> tuple[float, float, float, float]:
        """In the order of `wobble_kernels`."""
        return self.step_m, self.stride_m, self.slow_m, self.fast_m


#: Before anything is known of this runner's silhouette.
PLAIN_WOBBLE: Final = Wobble(step_m=0.015, stride_m=0.008, slow_m=0.01, fast_m=0.008)


@dataclass(frozen=True, slots=True)
class Binned:
    """A motion's rows, averaged over short spans; `smooth_m` the Savitzky-Golay position."""

    t_s: Array
    x_m: Array
    x_sd_m: Array
    shared_m: Array
    smooth_m: Array


def binned(motion: Motion) -> Binned:
    """Average neighbouring rows down to about `_RATE_HZ`; independent errors shrink, shared ones do not."""
    n = motion.t_s.size
    step = float(np.median(np.diff(motion.t_s)))
    size = max(1, int(1 / (_RATE_HZ * step)))
    # A bin never spans a gap: it ends where the next row is late.
    breaks = np.flatnonzero(np.diff(motion.t_s) > 1.6 * step) + 1
    edges = np.concatenate([np.arange(a, b, size) for a, b in zip([0, *breaks], [*breaks, n], strict=True)])
    count = np.diff(np.append(edges, n)).astype(np.float64)

    def mean(values: Array) -> Array:
        return np.asarray((np.add.reduceat(values, edges, axis=0).T / count).T)

    return Binned(
        t_s=mean(motion.t_s),
        x_m=mean(motion.x_m),
        x_sd_m=np.sqrt(mean(motion.x_sd_m**2) / count),
        shared_m=mean(motion.shared_m),
        smooth_m=mean(motion.smooth_x_m),
    )


def at_positions(rows: Binned, x_m: Array) -> Binned:
    """The same rows with the shared-error columns taken at smooth positions `x_m` (N,) instead of the measured ones.

    A column that grows with position and is read off the NOISY position carries that noise; the fit then prefers a
    smaller scale (D'Agostini, Nucl. Instrum. Methods A 346 (1994) 306, for a shared normalisation; from memory). Each
    column is a smooth function of position along the lane, so a polynomial through its rows is read at `x_m`.
    """
    centre, half = float(rows.x_m.mean()), 0.5 * float(np.ptp(rows.x_m))
    degree = min(_COLUMN_DEGREE, rows.x_m.size // 4)
    measured, smooth = (np.polynomial.legendre.legvander((x - centre) / half, degree) for x in (rows.x_m, x_m))
    coefficients = np.linalg.lstsq(measured, rows.shared_m, rcond=None)[0]
    return replace(rows, shared_m=smooth @ coefficients)


def unrestful(kernels: Kernels, unrest: Array) -> Kernels:
    """Unit wobble covariances scaled by `unrest` (N,) at both ends."""
    both = unrest[:, None] * unrest[None, :]
    return tuple(k * both for k in kernels)


def estimate_wobble(rows: Binned, residual_m: Array, jacobian: Array, kernels: Kernels) -> Wobble:
    """Sizes of the wobble by restricted maximum likelihood of the residuals.

    Patterson & Thompson, Biometrika 58 (1971) 545 (from memory): -2 ln L = ln|C| + ln|J^T C^-1 J| + r^T P r, with
    the law's parameters projected out through its Jacobian J, so that a flexible law does not hide the wobble.
    Weak log-normal priors, each within a factor of about two, keep a short rep's sizes sensible (`PLAIN_WOBBLE`).
    """
    known = np.diag(rows.x_sd_m**2 + _JITTER_M2) + rows.shared_m @ rows.shared_m.T
    centre = np.log(PLAIN_WOBBLE.sizes)

    def cost(q: Array) -> float:
        c = known + sum(s * k for s, k in zip(np.exp(2 * q), kernels, strict=True))
        try:
            lower = cho_factor(c, lower=True)
        except np.linalg.LinAlgError:
            return 1e12
        cj, cr = cho_solve(lower, jacobian), cho_solve(lower, residual_m)
        information = jacobian.T @ cj
        sign, logdet = np.linalg.slogdet(information)
        if sign <= 0:
            return 1e12
        projected = jacobian.T @ cr
        quadratic = float(residual_m @ cr - projected @ np.linalg.solve(information, projected))
        own = 2 * float(np.sum(np.log(np.diag(lower[0]))))
        return own + float(logdet) + quadratic + float(np.sum(((q - centre) / _PRIOR_LN_SD) ** 2))

    found = minimize(cost, centre, method="Nelder-Mead", options={"xatol": 0.03, "fatol": 0.03, "maxiter": 200})
    step, stride, slow, fast = (float(v) for v in np.exp(found.x))
    return Wobble(step_m=step, stride_m=stride, slow_m=slow, fast_m=fast)


def series_of(rows: Binned, wobble: Wobble, kernels: Kernels) -> Series:
    """Positions with their full covariance: white, shared, and the wobbles."""
    cov = np.diag(rows.x_sd_m**2 + _JITTER_M2) + rows.shared_m @ rows.shared_m.T
    for size, kernel in zip(wobble.sizes, kernels, strict=True):
        cov += size**2 * kernel
    return Series(kind="position", t_s=rows.t_s, y=rows.x_m, cov=cov)
