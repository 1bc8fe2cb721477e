"""Score statistics and the p values made of them, against values from outside the project."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from scipy.optimize import minimize
from scipy.stats import gamma

from portfire.comparison import cone_weights, score_statistic, sequential_p, sign_flip_p, sum_blocks
from portfire.errors import PortfireError
from portfire.estimation import symmetric_basis
from portfire.estimation._efficient import _solve

# Darwin's maize, differences of heights in eighths of an inch (Fisher 1935; R package HistData, ZeaMays).
DARWIN = np.array([49, -67, 8, 16, 6, 23, 28, 41, 14, 29, 56, 24, 75, 60, -48], float)
# Hours between failures of air conditioning (Proschan 1963; R package boot, aircondit).
FAILURES = np.array([3, 5, 7, 18, 43, 85, 91, 98, 100, 130, 230, 487], float)


def test_score_statistic_of_nested_regressions_is_the_difference_of_their_squares():
    """Known variance: the efficient score statistic is what the larger regression explains beyond."""
    rng = np.random.default_rng(0)
    free = np.column_stack([np.ones(60), rng.standard_normal((60, 4))])
    added = rng.standard_normal((60, 3)) + free[:, 1:4]
    y = free @ rng.standard_normal(5) + rng.standard_normal(60)
    small, large = sm.OLS(y, free).fit(), sm.OLS(y, np.column_stack([free, added])).fit()
    hessian = free.T @ free
    weights = _solve(lambda v: hessian @ v, free.T @ added, 1e-10)
    np.testing.assert_allclose(weights, np.linalg.solve(hessian, free.T @ added), rtol=1e-8)
    residual = y - free @ np.array([0.1, 0.2, -0.3, 0.4, 1.0])
    score = added.T @ residual - weights.T @ (free.T @ residual)
    information = added.T @ added - (free.T @ added).T @ weights
    # Whatever the free parameters are when the scores are taken.
    assert score_statistic(score, information) == pytest.approx(small.ssr - large.ssr, rel=1e-8)


def test_projection_on_the_cone_follows_the_mixture():
    """Two rows: zero with probability (1 − 1/√2)/2, as the weights of the boundary mixture say."""
    rng = np.random.default_rng(1)
    scores = rng.standard_normal((3000, 3))
    stats = np.array([score_statistic(row, np.eye(3), (2,)) for row in scores])
    weights = cone_weights(2)
    share = np.mean(stats < 1e-9)
    assert weights[0] == pytest.approx((1 - np.sqrt(0.5)) / 2)
    assert share == pytest.approx(weights[0], abs=3 * np.sqrt(weights[0] / 3000))
    assert stats.mean() == pytest.approx(weights @ np.arange(4), abs=3 * stats.std() / np.sqrt(3000))


@pytest.mark.parametrize("seed", range(3))
def test_projection_in_any_metric_agrees_with_a_general_optimiser(seed):
    rng = np.random.default_rng(seed)
    root = rng.standard_normal((12, 9)) * np.exp(rng.standard_normal(9))
    information, score = root.T @ root, 3 * root.T @ rng.standard_normal(12)

    def loss(flat: np.ndarray) -> float:
        first, second = flat[:4].reshape(2, 2), flat[4:].reshape(3, 3)
        covs = first @ first.T, second @ second.T
        at = np.concatenate([np.einsum("pij,ij->p", symmetric_basis(len(c)), c) for c in covs])
        return float(at @ information @ at - 2 * score @ at)

    found = min(minimize(loss, rng.standard_normal(13), tol=1e-12).fun for _ in range(6))
    assert score_statistic(score, information, (2, 3)) == pytest.approx(-found, rel=1e-4, abs=1e-6)


def test_sign_flips_give_fishers_count():
    """863 of 32768 sums are 314 or more (Fisher 1935); two-sided, as R's and SciPy's permutation tests."""
    found = sign_flip_p(DARWIN)
    assert found.n_draws == 2**15
    assert found.n_above == 2 * 863
    assert found.p == pytest.approx(0.0526733398, abs=1e-10)


def test_sign_flips_at_random_agree_with_all():
    many = np.concatenate([DARWIN, np.zeros(5)])
    found = sign_flip_p(many, draws=4000, seed=3)
    assert found.n_draws == 4000
    assert found.p == pytest.approx(0.0526733398, abs=3.5 * found.se)


def test_blocks_are_summed():
    sums = sum_blocks(np.arange(12.0).reshape(6, 2), [0, 0, 1, 1, 1, 2])
    np.testing.assert_array_equal(sums, [[2, 4], [18, 21], [10, 11]])
    with pytest.raises(PortfireError, match="got 1"):
        sign_flip_p(np.ones((1, 2)))


def likelihood_ratio(mean: np.ndarray, n: int) -> np.ndarray:
    return 2 * n * (mean / 60 - 1 - np.log(mean / 60))


def test_bootstrap_finds_the_exact_p_and_not_that_of_wilks():
    """Exponential mean 60 against free: exact p 0.024791851 from the gamma law, χ² 0.023817."""
    n = len(FAILURES)
    observed = float(likelihood_ratio(FAILURES.mean(), n))
    assert observed == pytest.approx(5.107942, abs=1e-6)
    drawn = likelihood_ratio(np.random.default_rng(2).gamma(n, 60 / n, 400_000), n)
    found = sequential_p(observed, lambda k: drawn[k], len(drawn), stop_at=len(drawn))
    law = gamma(n, scale=60 / n)
    low = minimize(lambda m: (likelihood_ratio(m, n)[0] - observed) ** 2, [30.0], method="Nelder-Mead").x[0]
    exact = float(law.cdf(low) + law.sf(FAILURES.mean()))
    assert exact == pytest.approx(0.024791851, abs=1e-6)
    assert abs(found.p - exact) < 3 * found.se
    assert abs(found.p - 0.023817) > 3 * found.se


def test_sequential_draws_end_early_where_p_is_large_and_err_on_no_side():
    """Besag and Clifford: with h exceedances at draw l, p = h/l, and P(p ≤ α) ≤ α."""
    rng = np.random.default_rng(4)
    found = []
    for _ in range(2000):
        observed, drawn = rng.random(), rng.random(99)
        found.append(sequential_p(observed, lambda k, d=drawn: d[k], 99, stop_at=5))
    p = np.array([f.p for f in found])
    n = np.array([f.n_draws for f in found])
    for level in (0.05, 0.1, 0.5):
        assert np.mean(p <= level) <= level + 3 * np.sqrt(level / 2000)
    assert np.mean(p <= 0.05) > 0.03
    assert n[p > 0.5].max() < 12
    early = [f for f in found if f.n_above == 5 and f.n_draws < 99]
    assert all(f.p == 5 / f.n_draws for f in early)
    with pytest.raises(PortfireError, match="got 0"):
        sequential_p(1.0, lambda k: 0.0, 0)
