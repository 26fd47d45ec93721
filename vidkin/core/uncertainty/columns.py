"""Independent and shared errors of a series, and how to make them white."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.linalg import cholesky, solve_triangular

from vidkin.stages import Array


def covariance(x_sd: Array, shared: Array) -> Array:
    """diag(x_sd^2) + S S^T, (N, N), from independent sd (N,) and shared-error columns S (N, K)."""
    x_sd, shared = np.asarray(x_sd, dtype=np.float64), np.asarray(shared, dtype=np.float64)
    if x_sd.ndim != 1 or shared.ndim != 2 or shared.shape[0] != x_sd.size:
        raise ValueError(f"covariance: x_sd {x_sd.shape} and shared {shared.shape} must be (N,) and (N, K)")
    return np.diag(x_sd**2) + shared @ shared.T


def whitener(cov: Array) -> Callable[[Array], Array]:
    """A function that applies L^-1 (cov = L L^T) to a vector (N,) or matrix (N, P): white noise of variance 1.

    Raises
    ------
    ValueError
        If `cov` is not symmetric positive definite.
    """
    try:
        lower = cholesky(cov, lower=True)
    except (np.linalg.LinAlgError, ValueError) as e:
        raise ValueError(f"whitener: the covariance {np.shape(cov)} is not positive definite ({e})") from e

    def apply(values: Array) -> Array:
        return np.asarray(solve_triangular(lower, values, lower=True, check_finite=False))

    return apply


def shared_whitener(x_sd: Array, shared: Array) -> Callable[[Array], Array]:
    """As `whitener(covariance(x_sd, shared))`, in N K steps instead of N^2.

    With A = D^-1 S = U s V^T (thin) the inverse root of D (I + A A^T) D is (I + U diag(1/sqrt(1 + s^2) - 1) U^T) D^-1
    (Woodbury's identity for the root). It is another root than Cholesky's: the white values differ by a rotation,
    sums of squares are the same.

    Raises
    ------
    ValueError
        If an `x_sd` is not above 0 (use `whitener`), or shapes do not fit.
    """
    x_sd, shared = np.asarray(x_sd, dtype=np.float64), np.asarray(shared, dtype=np.float64)
    if shared.ndim != 2 or x_sd.shape != shared.shape[:1]:
        raise ValueError(f"shared_whitener: x_sd {x_sd.shape} and shared {shared.shape} must be (N,) and (N, K)")
    if not np.all(x_sd > 0):
        raise ValueError(f"shared_whitener: the smallest x_sd is {x_sd.min():g}; every one must be above 0")
    u, s, _ = np.linalg.svd(shared / x_sd[:, None], full_matrices=False)
    shrink = 1 / np.sqrt(1 + s**2) - 1

    def apply(values: Array) -> Array:
        flat = (values.T / x_sd).T
        return np.asarray(flat + u @ (shrink * (u.T @ flat).T).T)

    return apply
