"""Whitening, least squares, intervals and their coverage, resampling, criteria; and every message."""

from __future__ import annotations

from itertools import combinations
from math import comb

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import t as student

from vidkin.core import uncertainty as unc
from vidkin.core.models import MonoExponential
from vidkin.core.uncertainty import NoSolution, Solution

LEVEL = 0.95
SIMULATIONS = 400
#: 400 simulations at 95 %: the sd of the count's share is 1.1 %.
LOW, HIGH = 0.92, 0.98


def fitted(*args, **kwargs) -> Solution:
    found = unc.solve(*args, **kwargs)
    assert isinstance(found, Solution), found.reason
    return found


def covered(interval, truth):
    return interval.low <= truth <= interval.high


# --- covariance and whitening -------------------------------------------------------------------


def test_covariance_adds_shared_columns():
    cov = unc.covariance(np.array([1.0, 2.0]), np.array([[3.0], [0.5]]))
    assert cov.tolist() == [[10.0, 1.5], [1.5, 4.25]]
    assert unc.covariance(np.array([1.0, 2.0]), np.zeros((2, 0))).tolist() == [[1.0, 0.0], [0.0, 4.0]]


@settings(derandomize=True, deadline=None)
@given(st.integers(1, 12), st.integers(0, 4), st.integers(0, 2**32 - 1))
def test_both_whiteners_whiten(n, k, seed):
    """W cov W^T = 1, and both roots give the same sums of squares and products."""
    rng = np.random.default_rng(seed)
    sd, shared = rng.uniform(0.01, 2, n), rng.normal(size=(n, k))
    cov = unc.covariance(sd, shared)
    plain, fast = unc.whitener(cov), unc.shared_whitener(sd, shared)
    for white in (plain(np.eye(n)), fast(np.eye(n))):
        assert np.allclose(white @ cov @ white.T, np.eye(n), atol=1e-6)
    a, b = rng.normal(size=n), rng.normal(size=(n, 3))
    assert np.allclose(plain(a) @ plain(b), fast(a) @ fast(b), rtol=1e-6, atol=1e-6)
    assert plain(b).shape == fast(b).shape == b.shape


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: unc.covariance(np.ones(3), np.ones(3)), r"covariance: x_sd \(3,\) and shared \(3,\) must be"),
        (lambda: unc.covariance(np.ones(3), np.ones((2, 1))), r"covariance: x_sd \(3,\) and shared \(2, 1\) must be"),
        (
            lambda: unc.whitener(np.array([[1.0, 2.0], [2.0, 1.0]])),
            r"whitener: the covariance \(2, 2\) is not positive",
        ),
        (lambda: unc.whitener(np.array([[np.nan]])), r"whitener: the covariance \(1, 1\) is not positive definite"),
        (lambda: unc.shared_whitener(np.ones(3), np.ones((2, 1))), r"shared_whitener: x_sd \(3,\) and shared \(2, 1\)"),
        (lambda: unc.shared_whitener(np.array([1.0, 0.0]), np.ones((2, 1))), r"the smallest x_sd is 0; every one"),
    ],
)
def test_whitening_refusals(call, message):
    with pytest.raises(ValueError, match=message):
        call()


# --- least squares ------------------------------------------------------------------------------

X = np.linspace(0.0, 2.0, 12)
LINE = np.column_stack([np.ones_like(X), X])


def line_data(seed=3, sd=0.3):
    return LINE @ [2.0, -1.5] + sd * np.random.default_rng(seed).standard_normal(X.size)


def test_a_straight_line_is_solved_as_by_the_normal_equations():
    y, sd = line_data(), 0.3
    known = fitted(lambda p: (y - LINE @ p) / sd, np.zeros(2), scale_by_residual=False)
    inverse = np.linalg.inv(LINE.T @ LINE)
    exact = inverse @ LINE.T @ y
    assert np.allclose(known.parameters, exact, rtol=1e-11)
    assert np.allclose(known.cov, sd**2 * inverse, rtol=1e-9)
    assert np.allclose(known.sd, sd * np.sqrt(np.diag(inverse)), rtol=1e-9)
    assert known.dof == 10
    assert known.converged
    assert known.variance == 1.0
    assert known.cost == pytest.approx(np.sum((y - LINE @ exact) ** 2) / sd**2)
    free = fitted(lambda p: y - LINE @ p, np.zeros(2), scale_by_residual=True)
    s2 = np.sum((y - LINE @ exact) ** 2) / 10
    assert free.variance == pytest.approx(s2)
    assert np.allclose(free.cov, s2 * inverse, rtol=1e-9)
    assert np.allclose(free.jacobian, -LINE, atol=1e-9)
    assert np.allclose(free.residual, y - LINE @ exact)


def test_a_jacobian_given_is_used():
    y, calls = line_data(), []

    def jacobian(p):
        calls.append(p)
        return -LINE

    found = fitted(lambda p: y - LINE @ p, np.zeros(2), scale_by_residual=True, jacobian=jacobian)
    assert calls
    assert np.array_equal(found.jacobian, -LINE)


@settings(derandomize=True, deadline=None)
@given(st.floats(0.3, 3), st.floats(0.2, 4), st.floats(-2, 2))
def test_numerical_jacobian(a, b, c):
    x = np.linspace(0, 2, 9)
    p = np.array([a, b, c])
    exact = np.column_stack([np.exp(-b * x), -a * x * np.exp(-b * x), np.cos(c * x) * x])
    found = unc.numerical_jacobian(lambda q: q[0] * np.exp(-q[1] * x) + np.sin(q[2] * x), p)
    # Near 0 a parameter has no size of its own and the step falls back on a small one.
    assert np.allclose(found, exact, rtol=1e-9, atol=1e-9 if abs(c) > 1e-2 else 1e-6)


@pytest.mark.parametrize("side", [1.0, -1.0])
def test_numerical_jacobian_at_an_edge_of_the_domain(side):
    def residual(p):
        return np.exp(X * p[0]) if side * p[0] >= 0 else np.full(X.size, np.nan)

    found = unc.numerical_jacobian(residual, np.array([side * 1e-9]), typical=np.array([10.0]))
    assert np.allclose(found[:, 0], X, rtol=1e-7, atol=1e-7)


def test_the_best_of_several_starts_counts():
    x = np.linspace(0, 10, 60)
    y = np.sin(2.0 * x)

    def residual(p):
        return y - np.sin(p[0] * x)

    alone = fitted(residual, np.array([4.2]), scale_by_residual=True)
    assert abs(alone.parameters[0] - 2) > 0.5, "the single start must be a trap, else this test proves nothing"
    several = fitted(residual, np.array([4.2]), scale_by_residual=True, starts=[np.array([v]) for v in (1.0, 1.9, 3.0)])
    assert several.parameters[0] == pytest.approx(2.0, abs=1e-9)
    assert several.converged


def test_values_outside_the_domain_are_avoided_not_returned():
    """The residual is not finite for p <= 0; a full Newton step from 3 would go there."""
    y = 0.05

    def residual(p):
        return np.array([y - np.log(1 + p[0]), y - p[0]]) if p[0] > 0 else np.full(2, np.nan)

    found = fitted(residual, np.array([30.0]), scale_by_residual=True)
    assert found.parameters[0] == pytest.approx(0.0506, abs=0.001)
    started_outside = fitted(residual, np.array([-1.0]), scale_by_residual=True, starts=[np.array([1.0])])
    assert started_outside.parameters[0] == pytest.approx(found.parameters[0])


def test_an_exception_of_the_residual_is_not_swallowed():
    def residual(p):
        if p[0] < 1.5:
            raise ValueError("shapes do not fit")
        return np.array([p[0], 2 * p[0]])

    with pytest.raises(ValueError, match="shapes do not fit"):
        unc.solve(residual, np.array([3.0]), scale_by_residual=True)


def test_a_derivative_that_is_not_finite_ends_the_descent_at_the_best_point_so_far():
    def jacobian(p):
        return np.ones((3, 1)) if p[0] > 1.5 else np.full((3, 1), np.nan)

    found = unc.solve(lambda p: np.full(3, p[0]), np.array([8.0]), scale_by_residual=False, jacobian=jacobian)
    assert isinstance(found, NoSolution)
    assert "no finite derivative at the best point" in found.reason


@pytest.mark.parametrize(
    ("residual", "start", "scale", "reason"),
    [
        (lambda p: np.array([p[0]]), [1.0], True, "1 values cannot fix 1 parameters and their scatter"),
        (lambda p: np.array([p[0] + p[1]]), [1.0, 1.0], False, "1 values cannot fix 2 parameters"),
        (lambda _: np.full(4, np.nan), [1.0], False, "the model has no finite value at any start"),
        (lambda p: np.ones(4) * p[0] - 1, [1.0, 7.0], False, "the data say nothing about parameter 1 (counted from 0)"),
        (lambda p: LINE @ [p[0] + p[1], 1.0] - 2, [1.0, 7.0], False, "direction (-0.71, +0.71) is free"),
        (lambda p: LINE @ [p[0] + p[1], 1.0] - 2, [1.0, 7.0], True, "the data do not tell the parameters apart"),
    ],
)
def test_no_solution_says_why(residual, start, scale, reason):
    found = unc.solve(residual, np.array(start), scale_by_residual=scale)
    assert isinstance(found, NoSolution)
    assert not found
    plain = found.reason.replace("(+0.71, -0.71)", "(-0.71, +0.71)")
    assert reason in plain


def test_a_descent_that_is_cut_short_is_not_called_converged():
    """A wrong jacobian leads nowhere: the point is kept, and the flag says that a step is left."""
    y = line_data()
    found = fitted(
        lambda p: (y - LINE @ p) / 0.3, np.array([9.0, 9.0]), scale_by_residual=False, jacobian=lambda _: LINE / 0.3
    )
    assert not found.converged


def test_data_without_scatter_converge():
    found = fitted(lambda p: np.exp(p[0] * X) - np.exp(0.7 * X), np.array([0.2]), scale_by_residual=True)
    assert found.converged
    assert found.parameters[0] == pytest.approx(0.7, rel=1e-12)


# --- intervals ----------------------------------------------------------------------------------


def test_profile_of_a_straight_model_is_the_textbook_interval():
    y = line_data()
    inverse = np.linalg.inv(LINE.T @ LINE)
    for c in (np.array([1.0, 0.0]), np.array([1.0, 1.7]), np.array([0.0, -2.0])):
        spread = np.sqrt(c @ inverse @ c)
        free = fitted(lambda p: y - LINE @ p, np.zeros(2), scale_by_residual=True)
        half = student.ppf(0.975, 10) * np.sqrt(free.variance) * spread
        for interval in (
            unc.profile_interval(lambda p: y - LINE @ p, free, c, level=LEVEL),
            unc.wald_interval(free, c, level=LEVEL),
        ):
            assert interval.high - c @ free.parameters == pytest.approx(half, rel=1e-3)
            assert c @ free.parameters - interval.low == pytest.approx(half, rel=1e-3)
            assert not interval.low_open
            assert not interval.high_open
        known = fitted(lambda p: (y - LINE @ p) / 0.3, np.zeros(2), scale_by_residual=False)
        interval = unc.profile_interval(
            lambda p: (y - LINE @ p) / 0.3, known, c, level=LEVEL, jacobian=lambda _: -LINE / 0.3
        )
        assert interval.high - interval.low == pytest.approx(2 * 1.959964 * 0.3 * spread, rel=1e-3)
        assert interval.method == "profile"


def test_profile_is_lopsided_where_the_model_is_curved():
    """y = e^p measured once with sd 1: the ends are ln(y -+ 1.96) exactly."""

    def residual(p):
        return np.array([5.0 - np.exp(p[0])])

    found = fitted(residual, np.array([1.0]), scale_by_residual=False)
    interval = unc.profile_interval(residual, found, np.array([1.0]), level=LEVEL)
    assert interval.low == pytest.approx(np.log(5 - 1.959964), abs=2e-4)
    assert interval.high == pytest.approx(np.log(5 + 1.959964), abs=2e-4)


def test_profile_end_that_does_not_exist_is_open():
    """y = e^p = 1 with sd 1: even p -> -infinity is no worse than one sd. The upper end exists."""

    def residual(p):
        return np.array([1.0 - np.exp(p[0])])

    found = fitted(residual, np.array([0.5]), scale_by_residual=False)
    interval = unc.profile_interval(residual, found, np.array([1.0]), level=LEVEL)
    assert interval.low_open
    assert not interval.high_open
    assert interval.low < -30
    assert interval.high == pytest.approx(np.log(2.959964), abs=2e-4)
    turned = unc.profile_interval(residual, found, np.array([-1.0]), level=LEVEL)
    assert turned.high_open
    assert not turned.low_open


@pytest.mark.parametrize("free", [False, True])
def test_profile_at_the_edge_of_the_domain_is_open(free):
    """p >= 0 only: the interval runs into the edge and says so, and never past it."""

    def residual(p):
        if p[0] < 0:
            return np.full(2 + free, np.nan)
        return np.array([1.0 - p[0], 0.8 - p[0], *([0.3 - p[1] - 0.1 * p[0]] if free else [])])

    start = np.array([1.0, 0.0]) if free else np.array([1.0])
    found = fitted(residual, start, scale_by_residual=False)
    interval = unc.profile_interval(residual, found, np.eye(start.size)[0], level=LEVEL)
    assert interval.low_open
    assert 0 <= interval.low < 0.001
    assert interval.high == pytest.approx(0.9 + 1.959964 / np.sqrt(2), abs=1e-3)


def test_profile_re_fits_the_other_parameters():
    """Against a brute-force grid of the cost minimised over the nuisance parameter."""
    x = np.linspace(0.1, 3, 10)
    y = 2 * (1 - np.exp(-0.6 * x)) + 0.1 * np.random.default_rng(5).standard_normal(10)

    def residual(p):
        return (y - p[0] * (1 - np.exp(-p[1] * x))) / 0.1

    found = fitted(residual, np.array([1.0, 1.0]), scale_by_residual=False)
    interval = unc.profile_interval(residual, found, np.array([1.0, 0.0]), level=LEVEL)
    rates = np.linspace(0.02, 3, 20001)
    shapes = 1 - np.exp(-rates[:, None] * x)

    def cost(a):
        return np.min(np.sum(((y - a * shapes) / 0.1) ** 2, axis=1)) - found.cost

    assert cost(interval.low) == pytest.approx(3.8415, rel=2e-3)
    assert cost(interval.high) == pytest.approx(3.8415, rel=2e-3)
    assert interval.high - found.parameters[0] > 1.2 * (found.parameters[0] - interval.low)


def test_profile_begins_again_from_a_deeper_valley():
    """A solution in a side valley: its own threshold would be meaningless."""

    def residual(p):
        return np.array([0.25 * (p[0] ** 2 - 4), np.sqrt(0.05) * (p[0] + 2)])

    side = fitted(residual, np.array([1.9]), scale_by_residual=False)
    deep = fitted(residual, np.array([-1.9]), scale_by_residual=False)
    assert side.parameters[0] > 1.5
    assert side.cost > deep.cost + 0.5
    direction = np.array([1.0])
    again = unc.profile_interval(residual, side, direction, level=0.9999)
    straight = unc.profile_interval(residual, deep, direction, level=0.9999)
    assert (again.low, again.high) == pytest.approx((straight.low, straight.high), abs=0.01)


def test_perfect_data_have_an_interval_of_no_width():
    found = Solution(
        parameters=np.array([2.0]),
        cov=np.zeros((1, 1)),
        sd=np.zeros(1),
        residual=np.zeros(3),
        jacobian=np.ones((3, 1)),
        cost=0.0,
        dof=2,
        scaled=True,
        converged=True,
    )
    interval = unc.profile_interval(lambda p: np.full(3, p[0] - 2), found, np.array([1.0]), level=LEVEL)
    assert interval.low == interval.high == 2.0


@pytest.mark.parametrize(
    ("direction", "level", "message"),
    [
        ([0.0, 0.0], 0.95, r"profile_interval: direction \[0. 0.\] must be \(2,\) and not all 0"),
        ([1.0], 0.95, r"direction \[1.\] must be \(2,\)"),
        ([1.0, 0.0], 1.0, r"level = 1.0 must lie between 0 and 1"),
        ([1.0, 0.0], float("nan"), r"level = nan must lie between 0 and 1"),
    ],
)
def test_interval_refusals(direction, level, message):
    y = line_data()
    found = fitted(lambda p: y - LINE @ p, np.zeros(2), scale_by_residual=True)
    with pytest.raises(ValueError, match=message):
        unc.profile_interval(lambda p: y - LINE @ p, found, np.array(direction), level=level)


# --- coverage -----------------------------------------------------------------------------------


def test_profile_and_wald_cover_with_unknown_scatter():
    """A curved two-parameter model, 8 values, scatter estimated from 6 degrees of freedom."""
    rng = np.random.default_rng(11)
    x = np.linspace(0.3, 3, 8)
    truth = np.array([2.0, 0.9])
    hits = np.zeros((SIMULATIONS, 3), dtype=bool)
    for i in range(SIMULATIONS):
        y = truth[0] * (1 - np.exp(-truth[1] * x)) + 0.05 * rng.standard_normal(8)

        def residual(p, y=y):
            return y - p[0] * (1 - np.exp(-p[1] * x))

        found = fitted(residual, np.array([1.5, 1.0]), scale_by_residual=True)
        for j, c in enumerate((np.array([1.0, 0.0]), np.array([0.0, 1.0]))):
            hits[i, j] = covered(unc.profile_interval(residual, found, c, level=LEVEL), c @ truth)
        hits[i, 2] = covered(unc.wald_interval(found, np.array([0.0, 1.0]), level=LEVEL), truth[1])
    share = hits.mean(axis=0)
    assert np.all((share >= LOW) & (share <= HIGH)), share


def test_profile_covers_with_shared_errors_and_fails_without_them():
    """A sprint seen with a common scale error of 0.5 %, a common offset and 2 cm of independent noise.

    With the shared columns in the covariance the interval of v_max covers; with independent errors only, the same
    nominal 95 % interval misses the truth most of the time: nobody may square them and add them to the variance.
    """
    rng = np.random.default_rng(12)
    t = np.linspace(0.2, 6, 30)
    truth = np.array([9.0, 1.2])
    x_true = MonoExponential(v_max=truth[0], tau=truth[1]).position(t)
    sd = np.full(t.size, 0.02)
    shared = np.column_stack([0.005 * x_true, np.full(t.size, 0.03)])
    full, naive = unc.shared_whitener(sd, shared), unc.shared_whitener(sd, np.zeros((t.size, 0)))
    direction = np.array([1.0, 0.0])

    def share_covered(white, simulations):
        hits = 0
        for _ in range(simulations):
            x = x_true + sd * rng.standard_normal(t.size) + shared @ rng.standard_normal(2)

            def residual(p, x=x):
                return white(x - p[0] * (t - p[1] * -np.expm1(-t / p[1])))

            found = fitted(residual, np.array([8.5, 1.1]), scale_by_residual=False)
            hits += covered(unc.profile_interval(residual, found, direction, level=LEVEL), truth[0])
        return hits / simulations

    assert LOW <= share_covered(full, SIMULATIONS) <= HIGH
    assert share_covered(naive, SIMULATIONS // 4) < 0.6


def test_percentiles_of_draws_cover_a_function_of_the_parameters():
    """The place where a fitted line crosses zero; scatter estimated, so the draws are multivariate t."""
    rng = np.random.default_rng(13)
    truth = np.array([2.0, -1.5])
    hits = []
    for _ in range(SIMULATIONS):
        y = LINE @ truth + 0.1 * rng.standard_normal(X.size)
        found = fitted(lambda p, y=y: y - LINE @ p, np.zeros(2), scale_by_residual=True, jacobian=lambda _: -LINE)
        samples = unc.draw(found, 2000, rng)
        interval = unc.percentile_interval(-samples[:, 0] / samples[:, 1], level=LEVEL)
        hits.append(covered(interval, -truth[0] / truth[1]))
    assert LOW <= np.mean(hits) <= HIGH


# --- resampling ---------------------------------------------------------------------------------


def test_draws_have_the_covariance_asked_for_even_a_singular_one():
    rng = np.random.default_rng(1)
    cov = np.outer([1.0, 2.0, -1.0], [1.0, 2.0, -1.0]) + np.diag([0.0, 0.0, 3.0])
    samples = unc.draw((np.array([1.0, 2.0, 3.0]), cov), 40000, rng)
    assert samples.shape == (40000, 3)
    assert np.allclose(samples.mean(axis=0), [1, 2, 3], atol=0.05)
    assert np.allclose(np.cov(samples.T), cov, atol=0.1)
    assert np.allclose(samples[:, 1] - 2, 2 * (samples[:, 0] - 1), atol=1e-6)


def test_draws_of_a_scaled_solution_are_student_t():
    y = line_data()[:5]
    found = fitted(lambda p: y - LINE[:5] @ p, np.zeros(2), scale_by_residual=True)
    samples = unc.draw(found, 40000, np.random.default_rng(2))
    z = (samples[:, 0] - found.parameters[0]) / found.sd[0]
    assert np.quantile(z, 0.975) == pytest.approx(student.ppf(0.975, 3), rel=0.05)
    known = fitted(lambda p: y - LINE[:5] @ p, np.zeros(2), scale_by_residual=False)
    z = (unc.draw(known, 40000, np.random.default_rng(2))[:, 0] - known.parameters[0]) / known.sd[0]
    assert np.quantile(z, 0.975) == pytest.approx(1.96, rel=0.03)


def test_draws_depend_on_the_generator_alone():
    source = (np.zeros(2), np.eye(2))
    first, second = (unc.draw(source, 5, np.random.default_rng(8)) for _ in range(2))
    assert np.array_equal(first, second)


def test_percentile_interval_leaves_equal_tails():
    interval = unc.percentile_interval(np.arange(1001.0), level=0.9)
    assert (interval.low, interval.high) == pytest.approx((50.0, 950.0))
    assert interval.method == "percentile"


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (
            lambda: unc.draw((np.zeros(2), np.diag([1.0, -1.0])), 3, np.random.default_rng(0)),
            r"draw: the covariance has a negative eigenvalue, -1",
        ),
        (
            lambda: unc.percentile_interval(np.zeros(79), level=0.95),
            r"percentile_interval: 79 samples; level 0.95 needs at least 80",
        ),
        (
            lambda: unc.percentile_interval(np.full(100, np.nan), level=0.95),
            r"percentile_interval: a sample is not finite",
        ),
        (lambda: unc.percentile_interval(np.zeros(100), level=0.0), r"level = 0.0 must lie between 0 and 1"),
        (lambda: unc.aicc(3.0, 4, 3), r"aicc: n = 4 values must exceed p \+ 1 = 4"),
        (lambda: unc.akaike_weights([]), r"akaike_weights: \[\] must hold at least one value, all finite"),
        (lambda: unc.akaike_weights([1.0, np.nan]), r"akaike_weights: \[ 1. nan\] must hold"),
    ],
)
def test_resampling_and_criteria_refusals(call, message):
    with pytest.raises(ValueError, match=message):
        call()


# --- criteria -----------------------------------------------------------------------------------


def test_aicc_of_a_known_variance_is_cost_plus_penalty():
    assert unc.aicc(10.0, 10**9, 3) == pytest.approx(16.0)
    assert unc.aicc(10.0, 12, 3) == pytest.approx(16.0 + 24 / 8)


def test_aic_part_estimates_the_cost_of_new_data():
    """What AIC is for: cost + 2 p is, on average, the cost of fresh data of the same kind less nothing else."""
    rng = np.random.default_rng(21)
    hat = LINE @ np.linalg.inv(LINE.T @ LINE) @ LINE.T
    old, new = rng.standard_normal((2, 4000, X.size))
    fit = old @ hat
    on_old, on_new = np.sum((old - fit) ** 2, axis=1).mean(), np.sum((new - fit) ** 2, axis=1).mean()
    assert on_old + 2 * 2 == pytest.approx(on_new, abs=0.3)


def test_akaike_weights():
    weights = unc.akaike_weights([1000.0, 1002.0, 5000.0])
    assert weights.sum() == pytest.approx(1.0)
    assert weights[0] / weights[1] == pytest.approx(np.e)
    assert weights[2] == 0.0


@pytest.mark.parametrize(("plus", "minus"), [(4, 3), (2, 5), (1, 4), (3, 3)])
def test_runs_test_against_every_possible_order(plus, minus):
    """Counting all C(n, n1) orders gives the exact distribution of the number of runs."""
    n = plus + minus
    counts = []
    for where in combinations(range(n), plus):
        signs = -np.ones(n)
        signs[list(where)] = 1
        counts.append((1 + np.count_nonzero(np.diff(signs)), signs))
    runs = np.array([c for c, _ in counts])
    assert len(runs) == comb(n, plus)
    for r, signs in counts:
        result = unc.runs_test(3.0 * signs)
        assert result.runs == r
        assert result.expected == pytest.approx(runs.mean())
        assert result.p_value == pytest.approx(min(1.0, 2 * min((runs <= r).mean(), (runs >= r).mean())))


def test_runs_test_sees_a_slow_shape_and_accepts_noise():
    x = np.linspace(0, 1, 400)
    noise = np.random.default_rng(4).standard_normal(400)
    assert unc.runs_test(noise).p_value > 0.05
    assert unc.runs_test(noise + 2 * np.cos(6 * x)).p_value < 1e-6


def test_runs_test_leaves_zeros_out_and_cannot_test_one_sign():
    assert unc.runs_test(np.array([1.0, 0.0, 1.0, -1.0])).runs == 2
    assert unc.runs_test(np.ones(5)).p_value == 1.0
    assert unc.runs_test(np.zeros(5)) == unc.RunsTest(runs=0, expected=0.0, p_value=1.0)


def test_runs_test_is_level_under_the_null():
    """A 5 % test must reject at most 5 % of true noise (exact, hence cautious)."""
    rng = np.random.default_rng(6)
    p = np.array([unc.runs_test(rng.standard_normal(60)).p_value for _ in range(1000)])
    assert 0.02 < np.mean(p < 0.05) < 0.065
