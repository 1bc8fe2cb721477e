"""The variational bound: exact where the posterior is Gaussian, just below the exact value elsewhere."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize

from portfire.inference import (
    Bound,
    bound_gradient,
    fit_bound,
    laplace,
    posterior_moments,
    start_guess,
    start_path,
)

from ._cases import Case, log_factorials, rich_case, simple_case, solve_dense
from .test_poisson_exact import case_a, case_b

pytestmark = pytest.mark.usefixtures("tight")

STEP = 1e-5


def run_bound(case: Case) -> Bound:
    return fit_bound(case.params, case.setup, case.chunk, start_guess(case.setup, case.chunk))


@pytest.mark.parametrize("n_before", [0, 3])
def test_with_a_gaussian_readout_the_bound_is_the_likelihood(n_before: int) -> None:
    case = rich_case("gaussian", n_before, seed=1)
    bound = run_bound(case)
    for lane in range(3):
        exact = solve_dense(case, lane)
        assert float(bound.value[lane]) == pytest.approx(exact.loglik, abs=1e-8)
        np.testing.assert_allclose(np.asarray(bound.mean.x)[..., lane], exact.x, atol=1e-8)
        diagonal = np.einsum("titj->tij", exact.covariance)
        np.testing.assert_allclose(np.asarray(bound.moments.covariance)[..., lane], diagonal, atol=1e-8)
        np.testing.assert_allclose(np.asarray(bound.moments.border)[..., lane], exact.border, atol=1e-8)


# Exact [C: trapezoid and Gauss-Legendre grids, 1e-12; three grids for B], Laplace at the exact mode [C].
@pytest.mark.parametrize(
    ("build", "exact", "at_mode"),
    [(case_a, -59.584723609, -59.572271961), (case_b, -33.163164517, -33.139498134)],
    ids=["A", "B"],
)
def test_the_bound_lies_below_the_exact_value_and_nearer_than_laplace(build, exact, at_mode) -> None:
    value = float(run_bound(build(1)).value[0])
    assert exact - abs(at_mode - exact) < value < exact


def test_the_bound_is_the_best_that_any_gaussian_gives() -> None:
    """Against a search over means and Cholesky factors of a dense Gaussian, by scipy."""
    counts, level, loading = (
        np.array([[3.0, 0.0], [5.0, 1.0], [0.0, 2.0]]),
        np.array([0.2, -0.3]),
        np.array([1.1, -0.8]),
    )
    coefficient, noise, start = 0.7, 0.3, 0.5
    case = simple_case(
        counts, loading[:, None], level, np.array([[coefficient]]), noise, np.array([[start]]), 1
    )
    step = np.eye(3) - coefficient * np.eye(3, k=-1)
    precision = step.T @ np.diag([1 / start, 1 / noise, 1 / noise]) @ step
    at, below = np.diag_indices(3), np.tril_indices(3, -1)

    def negative(flat: np.ndarray) -> float:
        mean, factor = flat[:3], np.zeros((3, 3))
        factor[at], factor[below] = np.exp(flat[3:6]), flat[6:]
        covariance = factor @ factor.T
        eta = np.outer(mean, loading) + level
        rate = np.exp(eta + 0.5 * np.outer(np.diag(covariance), loading**2))
        prior = 0.5 * (
            np.linalg.slogdet(precision)[1] - mean @ precision @ mean - np.sum(precision * covariance)
        )
        return float(-(np.sum(counts * eta - rate) + prior + flat[3:6].sum() + 1.5))

    best = minimize(negative, np.zeros(9), method="BFGS", options={"gtol": 1e-9})
    bound = run_bound(case)
    assert float(bound.value[0]) == pytest.approx(-best.fun - log_factorials(counts), abs=1e-7)
    np.testing.assert_allclose(np.asarray(bound.mean.x)[:, 0, 0], best.x[:3], atol=1e-4)


@pytest.mark.parametrize("n_before", [0, 3])
@pytest.mark.parametrize("readout", ["poisson", "gaussian"])
def test_gradient_agrees_with_central_differences(readout: str, n_before: int) -> None:
    # An empty lane must not count.
    case = rich_case(readout, n_before, seed=3).with_chunk(weight=np.array([1.0, 1.0, 0.0]))
    bound = run_bound(case)
    gradient = bound_gradient(case.params, case.setup, case.chunk, bound)
    assert set(gradient) == set(case.params)
    for name, value in case.params.items():
        value, found = np.asarray(value), np.asarray(gradient[name])
        assert found.shape == value.shape
        numeric = np.zeros_like(value)
        for at in np.ndindex(value.shape):
            ends = []
            for sign in (1, -1):
                moved = value.copy()
                moved[at] += sign * STEP
                near = case.with_params(**{name: moved})
                ends.append(
                    float(fit_bound(near.params, near.setup, near.chunk, bound.guess).value[:2].sum())
                )
            numeric[at] = (ends[0] - ends[1]) / (2 * STEP)
        assert np.abs(numeric).max() > 1e-3, name
        np.testing.assert_allclose(found, numeric, rtol=2e-6, atol=2e-6, err_msg=name)


def test_moments_are_those_of_the_smoother_where_the_readout_is_gaussian() -> None:
    case = rich_case("gaussian", 3, seed=5)
    bound = run_bound(case)
    moments = posterior_moments(
        laplace(case.params, case.setup, case.chunk, start_path(case.setup, case.chunk))
    )
    for own, other in zip(bound.moments, moments, strict=True):
        np.testing.assert_allclose(own, other, atol=1e-9)


def test_a_search_from_far_off_ends_where_one_from_nearby_does() -> None:
    """Loadings so large that a first step at full length would overflow."""
    case = rich_case("poisson", 0, seed=2)
    wide = case.with_params(readout=8 * np.asarray(case.params["readout"]), noise=np.array(1.0))
    cold = run_bound(wide)
    warm = fit_bound(wide.params, wide.setup, wide.chunk, cold.guess)
    assert np.all(np.isfinite(cold.value))
    np.testing.assert_allclose(cold.value, warm.value, atol=1e-5)
