"""Intervals from a fit: by covariance, by profile, by resampling."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq
from scipy.stats import chi2, f

from vidkin.core.uncertainty.squares import Jacobian, Residual, Solution, solve, sum_of_squares
from vidkin.stages import Array

#: A profile that has not risen to its threshold this many sd from the estimate is reported as open.
_FURTHEST_SD = 40.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """`low`..`high`. An open end was not found: the interval reaches at least that far."""

    low: float
    high: float
    method: str
    low_open: bool = False
    high_open: bool = False


def _checked_level(level: float) -> float:
    if not 0 < level < 1:
        raise ValueError(f"level = {level} must lie between 0 and 1, e.g. 0.95")
    return level


def wald_interval(solution: Solution, direction: Array, *, level: float) -> Interval:
    """Symmetric interval of c . theta from the covariance: right where the model is straight over its width."""
    c = np.asarray(direction, dtype=np.float64)
    centre, half = float(c @ solution.parameters), float(np.sqrt(c @ solution.cov @ c * _threshold(solution, level)))
    return Interval(low=centre - half, high=centre + half, method="wald")


def _threshold(solution: Solution, level: float) -> float:
    """Rise of the cost, in units of the residual variance, at the ends: chi^2 with 1 degree, or F(1, dof)."""
    _checked_level(level)
    return float(f.ppf(level, 1, solution.dof) if solution.scaled else chi2.ppf(level, 1))


class _Profile:
    """The cost minimised under c . theta = psi, as a function of psi; remembers where it has been."""

    def __init__(self, residual: Residual, solution: Solution, c: Array, jacobian: Jacobian | None) -> None:
        self.residual, self.jacobian, self.solution = residual, jacobian, solution
        self.c = c
        # Directions that leave c . theta alone, in units of sd so that steps are of like size.
        scaled = c * solution.sd
        basis = np.linalg.svd(scaled[None, :])[2][1:].T
        self.free = solution.sd[:, None] * basis
        self.towards = solution.cov @ c / (c @ solution.cov @ c)  # the linear model's path, per unit of psi
        self.centre = float(c @ solution.parameters)
        self.known: list[tuple[float, Array]] = [(self.centre, solution.parameters)]
        self.lowest, self.lowest_at = solution.cost, solution.parameters

    def slope(self, p: Array) -> Array:
        """Derivatives along the free directions (N, P-1), by central differences of 1e-3 sd unless given."""
        if self.jacobian is not None:
            return np.asarray(self.jacobian(p) @ self.free)
        h = 1e-3
        return np.column_stack([(self.residual(p + h * d) - self.residual(p - h * d)) / (2 * h) for d in self.free.T])

    def cost(self, psi: float) -> float:
        """Smallest cost with c . theta = psi; inf outside the model's domain."""
        near = min(self.known, key=lambda k: abs(k[0] - psi))
        p = near[1] + self.towards * (psi - near[0])
        cost = sum_of_squares(self.residual, p)
        if not np.isfinite(cost):
            p = self.solution.parameters + self.towards * (psi - self.centre)
            cost = sum_of_squares(self.residual, p)
            if not np.isfinite(cost):
                return cost
        if self.free.shape[1]:
            p, cost = self.slide(p, cost)
        self.known.append((psi, p))
        if cost < self.lowest:
            self.lowest, self.lowest_at = cost, p
        return cost

    def slide(self, p: Array, cost: float) -> tuple[Array, float]:
        """Levenberg-Marquardt along the free directions, until the cost falls by less than 1e-6 of a variance."""
        enough = 1e-6 * self.solution.variance
        damping = 0.0
        for _ in range(60):
            r, j = self.residual(p), self.slope(p)
            if not np.all(np.isfinite(j)):
                break
            gain, normal = j.T @ r, j.T @ j
            for _ in range(30):
                step = np.linalg.lstsq(normal + damping * np.diag(np.diag(normal)), -gain, rcond=None)[0]
                if -gain @ step <= enough:  # the fall that a straight model promises
                    return p, cost
                new = p + self.free @ step
                new_cost = sum_of_squares(self.residual, new)
                if new_cost <= cost:
                    break
                damping = max(10 * damping, 1e-3)
            else:
                break
            damping = 0.0 if damping < 1e-3 else 0.1 * damping
            p, cost = new, new_cost
        return p, cost


def profile_interval(
    residual: Residual,
    solution: Solution,
    direction: Array,
    *,
    level: float,
    jacobian: Jacobian | None = None,
) -> Interval:
    """Interval of c . theta where the minimised cost stays below its threshold; it may be lopsided.

    Profile likelihood (Bates & Watts, Nonlinear Regression Analysis, Wiley 1988, ch. 6; from memory): with
    c . theta held at psi the other directions are re-fitted; the ends are where the cost has risen by chi^2(1) (white
    residuals) or by s^2 F(1, dof) (scaled). For a function of the parameters that is not linear, choose parameters
    in which it is (logarithms for products).

    Where `residual` is not finite the domain ends; an end not reached before it, or within 40 sd, is open.

    Parameters
    ----------
    residual : callable
        As given to `solve`.
    solution : Solution
        What it returned.
    direction : Array
        c, (P,).
    level : float
        Coverage, e.g. 0.95.
    jacobian : callable, optional
        As given to `solve`.
    """
    c = np.asarray(direction, dtype=np.float64)
    if c.shape != solution.parameters.shape or not np.any(c):
        raise ValueError(f"profile_interval: direction {c} must be ({solution.parameters.size},) and not all 0")
    threshold = _threshold(solution, level)
    if solution.variance <= 0:  # perfect data: nothing to be uncertain about
        return wald_interval(solution, c, level=level)
    with np.errstate(all="ignore"):
        profile = _Profile(residual, solution, c, jacobian)
        low, low_open = _end(profile, -1.0, threshold)
        high, high_open = _end(profile, 1.0, threshold)
        if profile.lowest < solution.cost - 0.01 * threshold * solution.variance:
            # The estimate was a side valley: begin again from the deeper point.
            better = solve(residual, profile.lowest_at, scale_by_residual=solution.scaled, jacobian=jacobian)
            if isinstance(better, Solution) and better.cost < solution.cost:
                return profile_interval(residual, better, c, level=level, jacobian=jacobian)
    return Interval(low=low, high=high, method="profile", low_open=low_open, high_open=high_open)


def _end(profile: _Profile, side: float, threshold: float) -> tuple[float, bool]:
    """One end of the profile interval, and whether it is open."""
    s = profile.solution
    sd = float(np.sqrt(profile.c @ s.cov @ profile.c))

    def gap(distance: float) -> float:
        """Signed root of the rise, minus its threshold: nearly straight in the distance."""
        rise = (profile.cost(profile.centre + side * distance) - s.cost) / s.variance
        return float(np.sqrt(max(rise, 0.0)) - np.sqrt(threshold))

    inside, outside = 0.0, float(np.sqrt(threshold)) * sd
    value = gap(outside)
    while value < 0:
        if outside > _FURTHEST_SD * sd:
            return profile.centre + side * outside, True
        inside, outside = outside, 1.5 * outside
        value = gap(outside)
    while not np.isfinite(value):  # past the domain: halve towards it
        middle = 0.5 * (inside + outside)
        at = gap(middle)
        if at < 0:
            inside = middle
        else:
            outside, value = middle, at
        if outside - inside < 1e-4 * sd:
            break
    if not np.isfinite(value):
        return profile.centre + side * inside, True
    if value == 0:
        return profile.centre + side * outside, False
    return profile.centre + side * float(brentq(gap, inside, outside, xtol=2e-4 * sd, rtol=1e-8)), False


def draw(source: Solution | tuple[Array, Array], n: int, rng: np.random.Generator) -> Array:
    """`n` draws (n, P) of the parameters: normal with the mean and covariance given (covariance may be singular).

    A scaled Solution's scatter is itself an estimate: its draws are multivariate t with `dof` degrees.
    """
    mean, cov = (source.parameters, source.cov) if isinstance(source, Solution) else source
    values, vectors = np.linalg.eigh(cov)
    if values.min() < -1e-8 * max(values.max(), 0.0):
        raise ValueError(f"draw: the covariance has a negative eigenvalue, {values.min():g}")
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    z = rng.standard_normal((n, len(mean)))
    if isinstance(source, Solution) and source.scaled:
        z = z / np.sqrt(rng.chisquare(source.dof, n) / source.dof)[:, None]
    return np.asarray(mean + z @ root.T)


def percentile_interval(samples: Array, *, level: float) -> Interval:
    """Equal-tailed interval between percentiles of `samples` (n,).

    Raises
    ------
    ValueError
        For samples that are not finite, or too few to see the tails.
    """
    _checked_level(level)
    samples = np.asarray(samples, dtype=np.float64)
    needed = int(np.ceil(round(4 / (1 - level), 6)))
    if samples.size < needed:
        raise ValueError(f"percentile_interval: {samples.size} samples; level {level} needs at least {needed}")
    if not np.all(np.isfinite(samples)):
        raise ValueError("percentile_interval: a sample is not finite")
    low, high = np.percentile(samples, [50 * (1 - level), 50 * (1 + level)])
    return Interval(low=float(low), high=float(high), method="percentile")
