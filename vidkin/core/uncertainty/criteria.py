"""Which law describes the data better, and does it miss a shape?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import gammaln

from vidkin.stages import Array, Ints


def aicc(cost: float, n: int, p: int) -> float:
    """Corrected Akaike criterion of a Gaussian fit with KNOWN covariance (white residuals).

    -2 ln L is then cost + a constant that is the same for every model of the same data, so AIC = cost + 2 p; no
    n ln(cost/n), which belongs to an unknown variance. The small-sample term 2 p (p + 1)/(n - p - 1) of Hurvich &
    Tsai, Biometrika 76 (1989) 297 (from memory) was derived for an unknown variance; with a known one it is a
    cautious surcharge on parameters that vanishes for n >> p.

    Raises
    ------
    ValueError
        If n <= p + 1.
    """
    if n <= p + 1:
        raise ValueError(f"aicc: n = {n} values must exceed p + 1 = {p + 1}")
    return cost + 2 * p + 2 * p * (p + 1) / (n - p - 1)


def akaike_weights(criteria: Sequence[float] | Array) -> Array:
    """Weights exp(-(c - min c)/2), normalised to 1 (Burnham & Anderson 2002, sec. 2.9; from memory)."""
    c = np.asarray(criteria, dtype=np.float64)
    if c.size == 0 or not np.all(np.isfinite(c)):
        raise ValueError(f"akaike_weights: {c} must hold at least one value, all finite")
    w = np.exp(-0.5 * (c - c.min()))
    return np.asarray(w / w.sum())


@dataclass(frozen=True, slots=True, kw_only=True)
class RunsTest:
    """`runs` of one sign, the number `expected` of independent residuals, two-sided exact `p_value`."""

    runs: int
    expected: float
    p_value: float


def runs_test(residual: Array) -> RunsTest:
    """Do the signs of the residuals follow one another at random? Few runs: the model misses a slow shape.

    Wald & Wolfowitz, Ann. Math. Stat. 11 (1940) 147 (from memory): of n1 plus and n2 minus signs,
    P(R = 2k) = 2 C(n1-1, k-1) C(n2-1, k-1)/C(n, n1),
    P(R = 2k+1) = [C(n1-1, k) C(n2-1, k-1) + C(n1-1, k-1) C(n2-1, k)]/C(n, n1); E(R) = 1 + 2 n1 n2/n.
    Zeros are left out. One sign only: nothing to test, p = 1.
    """
    signs = np.sign(np.asarray(residual, dtype=np.float64))
    signs = signs[signs != 0]
    n1, n2 = int(np.count_nonzero(signs > 0)), int(np.count_nonzero(signs < 0))
    runs = 1 + int(np.count_nonzero(np.diff(signs))) if signs.size else 0
    if n1 == 0 or n2 == 0:
        return RunsTest(runs=runs, expected=float(runs), p_value=1.0)
    runs_possible: Ints = np.arange(2, n1 + n2 + 1, dtype=np.int64)
    k, odd = runs_possible // 2, runs_possible % 2
    one = _ln_choose(n1 - 1, k - 1 + odd) + _ln_choose(n2 - 1, k - 1)
    other = _ln_choose(n1 - 1, k - 1) + _ln_choose(n2 - 1, k - 1 + odd)
    chance = np.exp(np.logaddexp(one, other) - _ln_choose(n1 + n2, np.array(n1)))
    few, many = chance[runs_possible <= runs].sum(), chance[runs_possible >= runs].sum()
    return RunsTest(runs=runs, expected=1 + 2 * n1 * n2 / (n1 + n2), p_value=float(min(1.0, 2 * min(few, many))))


def _ln_choose(n: int, k: Ints) -> Array:
    """ln C(n, k); -inf for k > n."""
    inside = np.minimum(k, n)
    ln = gammaln(n + 1) - gammaln(inside + 1) - gammaln(n - inside + 1)
    return np.where(k > n, -np.inf, ln)
