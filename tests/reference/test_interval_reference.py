"""Profile intervals against another program's (source and mark beside each)."""

from __future__ import annotations

import numpy as np
import pytest

from vidkin.core import uncertainty
from vidkin.core.uncertainty import Solution

# Enzyme velocity against concentration, treated cells: Treloar 1974, in Bates & Watts, Nonlinear Regression Analysis
# (Wiley 1988), data set A1.3. MEM, values from memory.
CONCENTRATION = np.repeat([0.02, 0.06, 0.11, 0.22, 0.56, 1.10], 2)
VELOCITY = np.array([76, 47, 97, 107, 123, 139, 159, 152, 191, 201, 207, 200], dtype=float)


def residual(p):
    return VELOCITY - p[0] * CONCENTRATION / (p[1] + CONCENTRATION)


@pytest.fixture(scope="module")
def found():
    solution = uncertainty.solve(residual, np.array([205.0, 0.08]), scale_by_residual=True)
    assert isinstance(solution, Solution)
    return solution


def test_estimates_and_standard_errors(found):
    """212.7 (6.947) and 0.06412 (0.008281), residual sd 10.93 on 10 degrees: Bates & Watts ch. 2. MEM."""
    assert found.parameters == pytest.approx([212.7, 0.06412], rel=2e-4)
    assert found.sd == pytest.approx([6.947, 0.008281], rel=2e-4)
    assert np.sqrt(found.variance) == pytest.approx(10.93, abs=0.005)
    assert found.dof == 10


def test_profile_intervals(found):
    """95 % profile-t intervals printed by R's nls for these data: 197.30-229.29, 0.04692-0.08616. MEM.

    Lopsided for the second, as the covariance alone (0.0457-0.0826) cannot be.
    """
    first, second = (uncertainty.profile_interval(residual, found, c, level=0.95) for c in np.eye(2))
    assert (first.low, first.high) == pytest.approx((197.302, 229.290), abs=0.02)
    assert (second.low, second.high) == pytest.approx((0.046925, 0.086160), abs=2e-5)
    wald = uncertainty.wald_interval(found, np.array([0.0, 1.0]), level=0.95)
    assert (wald.low, wald.high) == pytest.approx((0.0457, 0.0826), abs=1e-4)
