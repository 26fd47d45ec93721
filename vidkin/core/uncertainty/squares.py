"""Least squares: estimate, covariance, and a reason where there is none."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from contextlib import suppress
from dataclasses import dataclass
from functools import partial
from typing import Final, Literal, TypeAlias

import numpy as np
from scipy.optimize import least_squares

from vidkin.stages import Array

Residual: TypeAlias = Callable[[Array], Array]
Jacobian: TypeAlias = Callable[[Array], Array]

#: Tolerance of the fits [-]; a few roundings.
_TOLERANCE = 1e-15
_MAX_EVALUATIONS = 2000
#: Relative step of the five-point derivative: error h^4 and rounding eps/h are both below 1e-11.
_STEP = 3e-4
#: A parameter that has shrunk below this part of its start steps as if it had not [-].
_SMALLEST = 1e-4
#: A direction is called unfixed when the singular value of the column-scaled Jacobian is below this [-].
RANK_LIMIT: Final = 1e-10
#: Five-point derivatives: shifts in steps, and weights (textbook). Minus both is the backward one.
_CENTRAL = np.array([[-2.0, -1.0, 1.0, 2.0], [1 / 12, -8 / 12, 8 / 12, -1 / 12]])
_FORWARD = np.array([[0.0, 1.0, 2.0, 3.0, 4.0], [-25 / 12, 4.0, -3.0, 4 / 3, -1 / 4]])
#: Converged: the Gauss-Newton step that is left, in units of sd, ...
_STEP_LEFT_SD = 1e-2
#: ... or relative to each parameter (data without scatter have no sd).
_STEP_LEFT_RELATIVE = 1e-8


@dataclass(frozen=True, slots=True, kw_only=True)
class Solution:
    """A least-squares estimate.

    `parameters`, `sd` (P,), `cov` (P, P); `residual` (N,) and `jacobian` (N, P) there; `cost` the sum of squared
    residuals; `dof` = N - P; `scaled` True if `cov` was scaled by cost/dof; `converged` False if the best point found
    still has a step to go.
    """

    parameters: Array
    cov: Array
    sd: Array
    residual: Array
    jacobian: Array
    cost: float
    dof: int
    scaled: bool
    converged: bool

    @property
    def variance(self) -> float:
        """Variance of one residual: cost/dof if `scaled`, else 1 (the residuals are white)."""
        return self.cost / self.dof if self.scaled else 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class NoSolution:
    """What `solve` returns when there is no estimate. Falsy, and it says why."""

    reason: str

    def __bool__(self) -> bool:
        return False


def numerical_jacobian(residual: Residual, parameters: Array, *, typical: Array | None = None) -> Array:
    """d residual / d parameters (N, P) by five-point differences.

    The step is relative to each parameter; `typical` (P,) is a size to fall back on for one that is close to 0.
    Central differences, or one-sided ones at an edge of the domain.
    """
    floor = np.ones_like(parameters) if typical is None else np.where(typical == 0, 1.0, np.abs(typical))
    columns = []
    for i, value in enumerate(parameters):
        h = _STEP * max(abs(value), _SMALLEST * floor[i])
        for stencil in (_CENTRAL, _FORWARD, -_FORWARD):
            column = np.zeros(())
            for shift, weight in stencil.T:
                moved = parameters.copy()
                moved[i] = value + shift * h
                column = column + weight * residual(moved)
            if np.all(np.isfinite(column)):
                break
        columns.append(column / h)
    return np.column_stack(columns)


def solve(
    residual: Residual,
    start: Array,
    *,
    scale_by_residual: bool,
    starts: Sequence[Array] = (),
    jacobian: Jacobian | None = None,
) -> Solution | NoSolution:
    """Least squares from several starts; the best end counts.

    `residual` may return values that are not finite outside its domain: such points are avoided. An exception that it
    raises is not caught.

    Parameters
    ----------
    residual : callable
        Parameters (P,) to residuals (N,), white (unit variance) unless `scale_by_residual`.
    start, starts : Array, sequence of Array
        Where to start, and further starts.
    scale_by_residual : bool
        False: cov = (J^T J)^-1. True: cov = s^2 (J^T J)^-1 with s^2 = cost/dof.
    jacobian : callable, optional
        Parameters (P,) to derivatives (N, P); five-point differences otherwise.

    Returns
    -------
    Solution, or a falsy NoSolution that says why: no start in the domain, too few values, or parameters that the
    data do not fix.
    """
    best: Array | None = None
    best_cost, slope = np.inf, jacobian
    with np.errstate(all="ignore"):
        for first in (start, *starts):
            p = np.array(first, dtype=np.float64)
            r = residual(p)
            if r.size < p.size + int(scale_by_residual):
                return NoSolution(reason=f"{r.size} values cannot fix {p.size} parameters and their scatter")
            here = partial(numerical_jacobian, residual, typical=p) if jacobian is None else jacobian
            if not (np.all(np.isfinite(r)) and np.all(np.isfinite(here(p)))):
                continue
            end = _descend(residual, here, p)
            cost = sum_of_squares(residual, end)
            if cost < best_cost:
                best, best_cost, slope = end, cost, here
        if best is None or slope is None:
            return NoSolution(reason="the model has no finite value at any start")
        return _estimate(residual(best), slope(best), best, scaled=scale_by_residual)


def sum_of_squares(residual: Residual, p: Array) -> float:
    """Cost at `p`; inf outside the model's domain."""
    r = residual(p)
    total = float(r @ r)
    return total if np.isfinite(total) else float("inf")


class _OffDomain(Exception):  # noqa: N818 - a signal, not an error
    """The derivative is not finite: the descent cannot go on from here."""


def _descend(residual: Residual, slope: Jacobian, p: Array) -> Array:
    """Lowest point seen by a trust-region descent, then by Levenberg-Marquardt from there.

    Each gets out of traps of the other. An exception of `residual` itself is not caught.
    """
    lowest, lowest_at = np.inf, p

    def watched(q: Array) -> Array:
        nonlocal lowest, lowest_at
        r = residual(q)
        cost = float(r @ r)
        if cost < lowest:
            lowest, lowest_at = cost, q.copy()
        return r

    def checked(q: Array) -> Array:
        j = slope(q)
        if not np.all(np.isfinite(j)):
            raise _OffDomain
        return j

    methods: tuple[Literal["trf", "lm"], ...] = ("trf", "lm")
    for method in methods:
        with suppress(_OffDomain, np.linalg.LinAlgError):
            least_squares(
                watched,
                lowest_at,
                jac=checked,
                method=method,
                x_scale="jac",
                max_nfev=_MAX_EVALUATIONS,
                ftol=_TOLERANCE,
                xtol=_TOLERANCE,
                gtol=_TOLERANCE,
            )
    return lowest_at


def _estimate(r: Array, jac: Array, p: Array, *, scaled: bool) -> Solution | NoSolution:
    """The estimate at the end point `p`, or why there is none."""
    if not np.all(np.isfinite(jac)):
        return NoSolution(reason="the model has no finite derivative at the best point")
    size = np.linalg.norm(jac, axis=0)
    if not np.all(size > 0):
        flat = ", ".join(str(i) for i in np.flatnonzero(size == 0))
        return NoSolution(reason=f"the data say nothing about parameter {flat} (counted from 0)")
    u, s, vt = np.linalg.svd(jac / size, full_matrices=False)
    if s[-1] < RANK_LIMIT * s[0]:
        mix = ", ".join(f"{c:+.2g}" for c in vt[-1])
        return NoSolution(reason=f"the data do not tell the parameters apart: direction ({mix}) is free")
    root = vt.T / s / size[:, None]  # (J^T J)^-1 = root root^T
    cost, dof = float(r @ r), r.size - p.size
    variance = cost / dof if scaled else 1.0
    cov = variance * (root @ root.T)
    left = u.T @ r
    step = root @ left
    small = np.linalg.norm(left) <= _STEP_LEFT_SD * np.sqrt(variance)
    tiny = bool(np.all(np.abs(step) <= _STEP_LEFT_RELATIVE * np.abs(p)))
    return Solution(
        parameters=p,
        cov=cov,
        sd=np.sqrt(np.diag(cov)),
        residual=r,
        jacobian=jac,
        cost=cost,
        dof=dof,
        scaled=scaled,
        converged=bool(small) or tiny,
    )
