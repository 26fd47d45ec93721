"""Intervals that can be trusted: shared-error columns, least squares, profile intervals, resampling.

Errors of a measured series are kept apart to the end: independent ones (`x_sd`) and shared ones (columns S, each
moving every value together), cov = diag(x_sd^2) + S S^T. A fit minimises whitened residuals, whose squares then are
in units of variance; where no covariance is known the residuals are raw and their own scatter sets the scale.
"""

from __future__ import annotations

from vidkin.core.uncertainty.columns import covariance, shared_whitener, whitener
from vidkin.core.uncertainty.criteria import RunsTest, aicc, akaike_weights, runs_test
from vidkin.core.uncertainty.intervals import Interval, draw, percentile_interval, profile_interval, wald_interval
from vidkin.core.uncertainty.squares import Jacobian, NoSolution, Residual, Solution, numerical_jacobian, solve
from vidkin.core.uncertainty.wobble import wobble_kernels

__all__ = [
    "Interval",
    "Jacobian",
    "NoSolution",
    "Residual",
    "RunsTest",
    "Solution",
    "aicc",
    "akaike_weights",
    "covariance",
    "draw",
    "numerical_jacobian",
    "percentile_interval",
    "profile_interval",
    "runs_test",
    "shared_whitener",
    "solve",
    "wald_interval",
    "whitener",
    "wobble_kernels",
]
